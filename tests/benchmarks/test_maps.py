"""A stability map of 500 x 500 beside fifty two-dimensional Gaussian filters of it by FFT."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
from scipy import ndimage

from registry.physics.methods import method
from registry.samples import Axis, Samples, Signal

SIZE, FILTERS, GOAL = 500, 50, 1.0


def double_dot() -> Samples:
    """Two families of steps with jumps at their crossings, on white noise."""
    rng = np.random.default_rng(20261201)
    volts = np.linspace(0.0, 0.1, SIZE)
    x, y = np.meshgrid(volts, volts)
    first = np.floor((x + 0.35 * y) / 0.035)
    second = np.floor((0.3 * x + y + 0.004 * first) / 0.03)
    sensor = first + 0.7 * second - 30 * x - 20 * y + rng.normal(0, 0.1, x.shape)
    axes = (Axis("P2", "V", volts, "gate"), Axis("P1", "V", volts, "gate"))
    return Samples("map", axes, (Signal("sensor", "A", sensor * 1e-10),))


def best_of(call: Callable[[], object], times: int = 3) -> float:
    took = []
    for _ in range(times):
        start = time.process_time()
        call()
        took.append(time.process_time() - start)
    return min(took)


def test_a_stability_map(benchmark: Any, ratio: Callable[..., None]) -> None:
    samples = double_dot()
    values = samples.signals[0].values

    def filtered() -> None:
        for _ in range(FILTERS):
            np.fft.irfft2(ndimage.fourier_gaussian(np.fft.rfft2(values), 2.0, n=SIZE))

    run = method("stability-map").run
    benchmark.pedantic(run, args=(samples, {}), rounds=2)
    ratio(
        "stability map 500 x 500 beside 50 Gaussian filters",
        best_of(lambda: run(samples, {})) / best_of(filtered),
        GOAL,
    )
