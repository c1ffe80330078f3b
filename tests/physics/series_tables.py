"""Simulated tables and series with known truth, for the methods that fit them."""

from __future__ import annotations

import numpy as np

from registry.physics.result import Quantity, Result
from registry.samples import Axis, FloatArray, Samples, Signal


def table(
    x: FloatArray, columns: dict[str, FloatArray], axis: str = "P2", axis_unit: str = "V", unit: str = "V"
) -> Samples:
    """One axis and its columns."""
    signals = tuple(Signal(name, unit, np.asarray(y, dtype=float)) for name, y in columns.items())
    return Samples("trace", (Axis(axis, axis_unit, np.asarray(x, dtype=float)),), signals)


def series(y: FloatArray, interval: float, unit: str = "A") -> Samples:
    """Evenly spaced samples in time."""
    time = Axis("time", "s", interval * np.arange(y.size))
    return Samples("series", (time,), (Signal("current", unit, np.asarray(y, dtype=float)),))


def power_law_noise(n: int, interval: float, exponent: float, rng: np.random.Generator) -> FloatArray:
    """Noise of the one-sided spectrum 1 / f^exponent (f in Hz), cut from a series 8 times as long."""
    size = 8 * n
    f = np.fft.rfftfreq(size, interval)
    f[0] = 1.0
    z = (rng.normal(size=f.size) + 1j * rng.normal(size=f.size)) * np.sqrt(0.5)
    z *= np.sqrt(f**-exponent * size / (2.0 * interval))
    z[0] = 0.0
    return np.asarray(np.fft.irfft(z, size)[:n], dtype=float)


def one(result: Result, name: str, subject: str | None = None) -> Quantity:
    """The one quantity of that name and subject."""
    (found,) = (q for q in result.quantities if q.quantity == name and q.subject == subject)
    return found


def score(quantity: Quantity, truth: float) -> float:
    """(value - truth) / u."""
    assert quantity.value is not None
    assert quantity.standard_uncertainty is not None
    return (quantity.value - truth) / quantity.standard_uncertainty
