"""Do single samples, not the device, make the features of a turn-on trace?

Clipped and stuck readings, one-sample steps (a charge jump, a range change, a lost
contact) and a turn-on that the sampling does not resolve.  No fit is needed.  The lower
end of a turn-on may be constant to the last digit, so ``screening``'s test for clipping,
which peaks need, is not used here.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["refuse_single_sample_features"]

#: So many equal samples in a row above the off-level mean a clipped or stuck reading ...
STUCK_RUN = 5
#: ... unless equal neighbours are more common than this (coarse digitisation): then a run
#: must be this many times longer than the next longest.
COMMON_REPEATS = 0.1
COARSE_FACTOR = 3.0
#: Samples count as on from this share of the range above the off-level.
ON_SHARE = 0.1
#: Neighbouring samples may be apart by this share of the range, ...
LARGEST_STEP = 0.4
#: ... by this share of it more than their neighbours are, ...
LONE_STEP = 0.15
#: ... or, in noise, by this many robust standard deviations of that excess.
LONE_STEP_NOISE = 7.0
#: Turns a median absolute deviation into the standard deviation of normal noise.
MAD_TO_SD = 1.4826


def refuse_single_sample_features(y: FloatArray) -> None:
    """Refuse a trace whose features are made by single samples.

    Args:
        y: finite samples in order of time, shape (n,), n >= 8.

    Raises:
        Refusal: with the numbers that decided.
    """
    span = float(np.ptp(y))
    if span == 0.0:
        raise Refusal("all samples are equal: the signal is dead or stuck")
    edge = max(y.size // 40, 2)
    ends = float(np.median(y[:edge])), float(np.median(y[-edge:]))
    off = min(ends, key=abs)
    _refuse_stuck(y, np.abs(y - off) / span)
    steps = np.diff(y) / span
    neighbours = 0.25 * (steps[:-4] + steps[1:-3] + steps[3:-1] + steps[4:])
    lone = np.abs(steps[2:-2] - neighbours)
    noise = LONE_STEP_NOISE * MAD_TO_SD * float(np.median(lone))
    largest = int(np.argmax(np.abs(steps)))
    if abs(steps[largest]) > max(LARGEST_STEP, noise):
        raise Refusal(
            f"samples {largest + 1} and {largest + 2} differ by {100 * abs(steps[largest]):.0f} % of the "
            "range: a one-sample step, or a turn-on too sharp for the step of the sweep"
        )
    worst = int(np.argmax(lone))
    if lone[worst] > max(LONE_STEP, noise):
        raise Refusal(
            f"a step of {100 * lone[worst]:.0f} % of the range at sample {worst + 3} that its neighbours do "
            "not share: a charge jump or a lost reading"
        )


def _refuse_stuck(y: FloatArray, height: FloatArray) -> None:
    """Refuse a run of equal samples above the off-level."""
    equal = np.diff(y) == 0.0
    on = np.minimum(height[1:], height[:-1]) > ON_SHARE
    second, longest = _longest_runs(equal & on)
    if longest < STUCK_RUN:
        return
    if np.mean(equal[on]) > COMMON_REPEATS and longest < COARSE_FACTOR * second:
        return
    raise Refusal(
        f"{longest} samples in a row are equal while the device is on: the reading is clipped or stuck"
    )


def _longest_runs(flags: NDArray[np.bool_]) -> tuple[int, int]:
    """Return how many samples the two longest runs of equal neighbours hold, the shorter first."""
    padded = np.concatenate(([False], flags, [False]))
    changes = np.flatnonzero(np.diff(padded.astype(np.int8)))
    runs = np.sort(np.concatenate(([0, 0], changes[1::2] - changes[::2])))
    return int(runs[-2]) + 1, int(runs[-1]) + 1
