"""Simulated traces with known truth, and bounds that follow from the number of draws."""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache

import numpy as np
import pytest
from scipy import stats

from registry.samples import Axis, FloatArray, Samples, Signal, Sweep

#: Probability of a false alarm of a statistical bound.
ALARM = 1e-4
#: Longer noise is made and cut, so that it does not close upon itself.
SURPLUS = 8


@lru_cache(maxsize=16)
def _pink_scale(n: int, exponent: float) -> float:
    rng = np.random.default_rng(0)
    return float(np.mean([_raw_pink(n, exponent, rng).std() for _ in range(200)]))


def _raw_pink(n: int, exponent: float, rng: np.random.Generator) -> FloatArray:
    frequencies = np.fft.rfftfreq(SURPLUS * n)
    frequencies[0] = 1.0
    spectrum = rng.normal(size=frequencies.size) + 1j * rng.normal(size=frequencies.size)
    spectrum *= frequencies ** (-exponent / 2.0)
    spectrum[0] = 0.0
    return np.asarray(np.fft.irfft(spectrum, SURPLUS * n)[:n], dtype=float)


def _noise(n: int, pink: float, rng: np.random.Generator, exponent: float = 1.0) -> FloatArray:
    white = rng.normal(size=n)
    return white if pink == 0.0 else white + pink * _raw_pink(n, exponent, rng) / _pink_scale(n, exponent)


def _trace(x: FloatArray, y: FloatArray, unit: str = "A") -> Samples:
    direction = "up" if x.size < 2 or x[-1] >= x[0] else "down"
    return Samples(
        shape="trace",
        axes=(Axis("P1", "V", np.asarray(x, dtype=float), "gate"),),
        signals=(Signal("current", unit, np.asarray(y, dtype=float)),),
        sweeps=(Sweep(0, x.size, "up" if direction == "up" else "down"),),
    )


def _likely(hits: int, draws: int, low: float, high: float) -> bool:
    least = stats.binom.ppf(ALARM, draws, low)
    most = stats.binom.ppf(1.0 - ALARM, draws, high)
    return bool(least <= hits <= most)


@pytest.fixture(scope="session")
def noise() -> Callable[..., FloatArray]:
    """``noise(n, pink, rng, exponent=1)``: unit white noise plus 1/f noise of rms ``pink``.

    Made by spectral synthesis, not by the model that is fitted.
    """
    return _noise


@pytest.fixture(scope="session")
def trace() -> Callable[..., Samples]:
    """``trace(x, y, unit="A")``: one sweep of gate P1."""
    return _trace


@pytest.fixture(scope="session")
def likely() -> Callable[[int, int, float, float], bool]:
    """``likely(hits, draws, low, high)``: can a rate between low and high make so many hits?"""
    return _likely
