"""Simulated turn-on traces of known truth, and traces without a turn-on."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from registry.physics.result import Quantity, Result
from registry.samples import Axis, FloatArray, Samples, Signal, Sweep

Shape = Callable[[FloatArray, float, float], FloatArray]
Featureless = Callable[[FloatArray, np.random.Generator], FloatArray]


def _soft(x: FloatArray, at: float, width: float) -> FloatArray:
    """Exponential below ``at``, linear above: ideal transistor with thermal carriers."""
    return width * np.logaddexp(0.0, (x - at) / width)


def _degraded(x: FloatArray, at: float, width: float) -> FloatArray:
    return _soft(x, at, width) / (1.0 + 3.0 * _soft(x, at, width))


def _saturating(x: FloatArray, at: float, width: float) -> FloatArray:
    """Series resistance takes over."""
    return np.tanh(_soft(x, at, width) / 0.15)


def _step(z: FloatArray) -> FloatArray:
    return 1.0 / (1.0 + np.exp(-z))


def _one_mode(x: FloatArray, at: float, width: float) -> FloatArray:
    return _step((x - at - 3.0 * width) / (1.5 * width))


def _three_modes(x: FloatArray, at: float, width: float) -> FloatArray:
    """Quantised plateaus of a point contact, each mode a little softer."""
    first = x - at - 2.0 * width
    return (
        _step(first / width) + _step((first - 0.12) / (1.6 * width)) + _step((first - 0.24) / (2.2 * width))
    )


SHAPES: dict[str, Shape] = {
    "linear": _soft,
    "degraded": _degraded,
    "saturating": _saturating,
    "one mode": _one_mode,
    "three modes": _three_modes,
}


def pink(n: int, rng: np.random.Generator) -> FloatArray:
    """1/f noise of about unit rms within n samples, cut from a trace eight times as long."""
    whole = 8 * n
    k = np.arange(1, whole // 2 + 1)
    spectrum = (rng.normal(size=k.size) + 1j * rng.normal(size=k.size)) / np.sqrt(k)
    noise = np.fft.irfft(np.concatenate([[0.0], spectrum]), whole)[:n] * whole / 2.0
    return np.asarray(noise / np.sqrt(np.log(n)))


@dataclass(frozen=True)
class Scene:
    """One simulated trace and its truth (volts; signal per volt)."""

    shape: str
    x: FloatArray
    y: FloatArray
    threshold: float
    slope: float
    tenth: float


def scene(rng: np.random.Generator) -> Scene:
    """Draw shape, place, width, signal to noise (20 to 300) and 1/f part (none to as large as white)."""
    n = int(rng.choice([200, 400, 800]))
    shape = list(SHAPES)[rng.integers(len(SHAPES))]
    width = float(np.exp(rng.uniform(np.log(0.012), np.log(0.03)))) * (1.5 if n == 200 else 1.0)
    at, snr = rng.uniform(0.3, 0.5), np.exp(rng.uniform(np.log(20.0), np.log(300.0)))
    fine: FloatArray = np.linspace(0.0, 1.0, 100_001)
    curve = SHAPES[shape](fine, at, width)
    slope = np.gradient(curve, fine)
    top, steep = float(curve[-1]), int(np.argmax(slope))
    x = np.linspace(0.0, 1.0, n)
    noise = (rng.normal(size=n) + rng.uniform(0.0, 1.0) * pink(n, rng)) / snr
    return Scene(
        shape,
        x,
        1e-9 * (SHAPES[shape](x, at, width) / top + noise),
        float(fine[steep] - curve[steep] / slope[steep]),
        float(1e-9 * slope[steep] / top),
        float(np.interp(0.1 * np.max(curve), curve, fine)),
    )


FEATURELESS: dict[str, Featureless] = {
    "white": lambda x, rng: 0.0 * x,
    "1/f": lambda x, rng: 3.0 * pink(x.size, rng),
    "line": lambda x, rng: rng.uniform(5.0, 300.0) * x,
    "cubic": lambda x, rng: rng.uniform(20.0, 300.0) * (x - rng.uniform(-0.2, 1.2)) ** 3,
    "sine": lambda x, rng: (
        rng.uniform(5.0, 100.0) * np.sin(2.0 * np.pi * (rng.uniform(0.3, 12.0) * x + rng.uniform()))
    ),
    "one-sample step": lambda x, rng: np.where(x > rng.uniform(0.05, 0.95), rng.uniform(10.0, 200.0), 0.0),
    "peak": lambda x, rng: (
        rng.uniform(10.0, 100.0) * np.exp(-0.5 * ((x - rng.uniform(0.2, 0.8)) / rng.uniform(0.03, 0.15)) ** 2)
    ),
}


def featureless(kind: str, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """Draw a trace of 400 samples with noise of unit rms and up to as much 1/f, with or without offset."""
    x = np.linspace(0.0, 1.0, 400)
    noise = rng.normal(size=x.size) + rng.uniform(0.0, 1.0) * pink(x.size, rng)
    return x, 1e-12 * (FEATURELESS[kind](x, rng) + noise + rng.choice([0.0, 20.0]))


def trace(x: FloatArray, y: FloatArray, unit: str = "A") -> Samples:
    """Wrap one sweep."""
    return sweeps((x, y), unit=unit)


def sweeps(*runs: tuple[FloatArray, FloatArray], unit: str = "A") -> Samples:
    """Wrap sweeps one after another."""
    found, start = [], 0
    for x, _ in runs:
        found.append(Sweep(start, start + x.size, "up" if x[-1] > x[0] else "down"))
        start += x.size
    axis = Axis("P1", "V", np.concatenate([x for x, _ in runs]), "gate")
    signal = Signal("drain", unit, np.concatenate([y for _, y in runs]))
    return Samples("trace", (axis,), (signal,), tuple(found))


def quantity(result: Result, name: str, direction: str | None = None) -> Quantity:
    """Return the first quantity of that name (and direction)."""
    return next(
        one
        for one in result.quantities
        if one.quantity == name and direction in (None, one.conditions.get("direction"))
    )
