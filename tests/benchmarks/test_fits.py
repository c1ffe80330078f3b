"""A trace of 100 Coulomb peaks, uncertainties included, beside one curve_fit a peak."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.optimize import curve_fit

from registry.physics.methods import method
from registry.physics.result import Given
from registry.samples import Axis, Samples, Signal, Sweep

PEAKS, POINTS, WIDTH, GOAL = 100, 50, 10.0, 3.0


def peak(x: Any, height: float, centre: float, width: float, level: float, slope: float) -> Any:
    return height * np.cosh(np.clip((x - centre) / width, -300, 300)) ** -2 + level + slope * (x - centre)


def best_of(call: Callable[[], object], times: int = 5) -> float:
    took = []
    for _ in range(times):
        start = time.process_time()
        call()
        took.append(time.process_time() - start)
    return min(took)


def test_a_hundred_peaks(benchmark: Any, ratio: Callable[..., None]) -> None:
    rng = np.random.default_rng(20261201)
    x = np.arange(PEAKS * POINTS, dtype=float)
    centres = (np.arange(PEAKS) + 0.5) * POINTS
    width = WIDTH / 1.762747  # full width at half maximum of cosh^-2 is 1.7627 widths
    y = sum(peak(x, 1.0, c, width, 0.0, 0.0) for c in centres) + rng.normal(0, 0.02, x.size)
    volts = x * 1e-4
    sweep = (Sweep(0, x.size, "up"),)
    samples = Samples("trace", (Axis("P1", "V", volts, "gate"),), (Signal("current", "A", y * 1e-9),), sweep)
    given = {"lever_arm": Given(0.1)}

    def one_each() -> None:
        for centre in centres:
            near = np.abs(x - centre) < 3 * WIDTH
            curve_fit(peak, x[near], y[near], p0=(1.0, centre, width, 0.0, 0.0))

    run = method("coulomb-peaks").run
    benchmark.pedantic(run, args=(samples, given), rounds=3)
    ratio(
        "100 Coulomb peaks beside one curve_fit a peak",
        best_of(lambda: run(samples, given)) / best_of(one_each),
        GOAL,
    )
