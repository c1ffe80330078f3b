"""Can these samples be a measurement at all?

Tests that need no fit: too few samples, a dead signal, a clipped or stuck one.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["longest_run", "screen"]

Flags = NDArray[np.bool_]

#: So many equal samples in a row at the largest or smallest value mean a limit was hit.
CLIPPED_RUN = 3
#: With fewer different values than this share of the samples the signal is coarsely
#: digitised, and a run at an extreme value must be ...
COARSE_SHARE = 0.5
#: ... this many times longer than the longest run elsewhere to mean clipping.
COARSE_FACTOR = 2.0
#: Beyond these, in any unit, squares leave the range of doubles.
SMALLEST, LARGEST = 1e-100, 1e100
#: So few different values tell no shape.
FEWEST_VALUES = 8


def screen(y: FloatArray, fewest: int) -> None:
    """Refuse a trace that cannot be fitted.

    Args:
        y: finite samples in order of time, shape (n,).
        fewest: samples the method needs.

    Raises:
        Refusal: saying which test failed and by how much.
    """
    if y.size < fewest:
        raise Refusal(f"{y.size} samples are too few, {fewest} are needed")
    largest = float(np.max(np.abs(y)))
    if largest > 0.0 and not SMALLEST < largest < LARGEST:
        raise Refusal(f"a signal of {largest:.3g} is no measurement: mend the factor or unit of the layout")
    different = np.unique(y).size
    if different == 1:
        raise Refusal("all samples are equal: the signal is dead or stuck")
    if different < FEWEST_VALUES:
        raise Refusal(f"the signal takes only {different} different values")
    for extreme, side in ((np.max(y), "upper"), (np.min(y), "lower")):
        run = longest_run(y == extreme)
        if run >= CLIPPED_RUN and run > _allowed_run(y, y == extreme):
            raise Refusal(f"the signal is clipped: {run} samples in a row at its {side} limit {extreme:.6g}")


def longest_run(flags: Flags) -> int:
    """Return the length of the longest run of true values in ``flags`` (n,)."""
    padded = np.concatenate(([False], flags, [False]))
    changes = np.flatnonzero(np.diff(padded.astype(np.int8)))
    return int(np.max(changes[1::2] - changes[::2], initial=0))


def _allowed_run(y: FloatArray, at_extreme: Flags) -> float:
    """Return the longest run of equal samples that digitisation alone explains."""
    between = y[(y > np.min(y)) & (y < np.max(y))]
    if np.unique(between).size >= COARSE_SHARE * between.size:
        return CLIPPED_RUN - 1.0
    elsewhere = y[~at_extreme]
    return COARSE_FACTOR * (longest_run(np.diff(elsewhere) == 0.0) + 1.0)
