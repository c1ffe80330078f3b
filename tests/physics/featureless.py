"""Traces without a feature, on which a method must not answer."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from registry.samples import FloatArray

KINDS = ("white", "pink", "line", "cubic", "mains", "telegraph")


def featureless(
    kind: str, n: int, rng: np.random.Generator, noise: Callable[..., FloatArray], fewest_periods: float
) -> FloatArray:
    """``n`` samples of a kind, in units of the white noise of a sample.

    Half a window holds at least ``fewest_periods`` of the mains: fewer are a feature.
    """
    z, size = np.linspace(-1.0, 1.0, n), 10.0 ** rng.uniform(0.5, 2.0)
    white: FloatArray = noise(n, 0.0, rng)
    feature = np.zeros(n)
    if kind == "pink":
        feature = noise(n, 3.0, rng) + (rng.choice([0.1, 1.0]) - 1.0) * white
    if kind == "line":
        feature = size * z
    if kind == "cubic":
        feature = size * np.polynomial.polynomial.polyval(z, rng.normal(size=4))
    if kind == "mains":
        feature = size * np.sin(2.0 * np.pi * (rng.uniform(fewest_periods, 20.0) * z + rng.uniform()))
    if kind == "telegraph":
        feature = size * (np.cumsum(rng.random(n) < rng.choice([0.05, 0.017, 0.005])) % 2)
    return white + feature
