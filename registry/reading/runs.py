"""Where does a trace turn: which samples belong to one sweep, and in which direction?

A run ends where the axis turns round.  A single step back between two runs of the same
direction is the return to the start of a repeated sweep, not a sweep of its own.  The
samples that repeat the value at a turning point are shared between the two runs.
"""

from __future__ import annotations

import numpy as np

from registry.samples import FloatArray, Sweep

__all__ = ["monotone_runs"]


def monotone_runs(values: FloatArray) -> tuple[Sweep, ...]:
    """Return the monotone runs of ``values``, shape (n,), in order; they cover every sample.

    A constant axis, and one sample, count as one run upwards.  Cost: O(n).
    """
    signs = np.sign(np.diff(values))
    moving = np.flatnonzero(signs)
    if moving.size == 0:
        return (Sweep(0, int(values.size), "up"),)
    turning = np.flatnonzero(np.diff(signs[moving])) + 1
    first = moving[np.concatenate(([0], turning))].tolist()
    last = moving[np.concatenate((turning - 1, [moving.size - 1]))].tolist()
    up = (signs[first] > 0).tolist()
    return _joined(first, last, up, int(values.size))


def _joined(first: list[int], last: list[int], up: list[bool], size: int) -> tuple[Sweep, ...]:
    """Turn runs of steps (step i leads from sample i to i + 1) into runs of samples."""
    sweeps: list[Sweep] = []
    start, current, following = 0, 0, 1
    while following < len(first):
        single = first[following] == last[following]
        if single and following + 1 < len(first):
            stop, upcoming = first[following] + 1, following + 1
        else:
            plateau = first[following] - last[current]
            stop, upcoming = last[current] + 1 + (plateau + 1) // 2, following
        sweeps.append(Sweep(start, stop, "up" if up[current] else "down"))
        start, current, following = stop, upcoming, upcoming + 1
    sweeps.append(Sweep(start, size, "up" if up[current] else "down"))
    return tuple(sweeps)
