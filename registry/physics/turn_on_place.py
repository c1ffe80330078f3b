"""Does a curve have one turn-on inside the window, and where does its plateau end?

Judges the mean curve of ``psplines``; curves are turned so that they rise to the right.
What cannot be a turn-on, or only part of one, is refused with the numbers that decided.
"""

from __future__ import annotations

import numpy as np

from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["GRID_PER_KNOT", "behind_bend", "judge", "on_side", "plateau_end"]

#: Places looked at in each knot interval.
GRID_PER_KNOT = 4
#: The pinched-off plateau ends where the curve leaves it by this share of the rise, or ...
PLATEAU_SHARE = 0.02
#: ... by this many rms of the noise, whichever is more.
PLATEAU_NOISE = 0.5
#: Samples a plateau needs.
FEWEST_PLATEAU = 12
#: A plateau is at least this part of the way from its end to the steep part; an extremum
#: of a wave is shorter.
PLATEAU_TO_TURN_ON = 0.4
#: The slope counts as steep from this share of its maximum, and must fall below it later ...
STEEP = 0.9
#: ... or have settled: of all that has turned on, the last third is at most so much steeper
#: than the middle third (1 for a straight line; 1.5 and more where the slope still grows).
SETTLED = 1.25
#: Slope share from which the device counts as turning on.
TURNING_ON = 0.1
#: Rise over rms noise (white and 1/f together) below which no threshold is given.
LEAST_SNR = 6.0
#: A slope that grows by this share of its maximum within one knot interval is a bend the
#: knots do not resolve: behind it a spline overshoots, for so many knot intervals, ...
SHARP_BEND = 0.5
OVERSHOOT_KNOTS = 3
#: ... and the steep part is looked for behind those if it still has this share of the maximum.
BEHIND_BEND = 0.8
#: The curve may fall back by this share of the rise: refused above the first, warned above the second.
FALL_REFUSED = 0.25
FALL_WARNED = 0.08


def on_side(mean: FloatArray, noise: float) -> int:
    """Return +1 if the end at high volts carries the larger |signal|, else -1.

    Raises:
        Refusal: the ends do not differ beyond ``noise`` (rms), or only in sign.
    """
    edge = max(mean.size // 40, 2)
    low, high = float(np.mean(mean[:edge])), float(np.mean(mean[-edge:]))
    if abs(high - low) < LEAST_SNR * noise:
        raise Refusal(
            f"the ends of the trace differ by {abs(high - low):.3g}, noise is {noise:.3g}: "
            "no turn-on in the window"
        )
    if abs(abs(high) - abs(low)) < 0.1 * abs(high - low):
        raise Refusal("both ends carry about the same signal in size: cannot tell which end is pinched off")
    return 1 if abs(high) > abs(low) else -1


def plateau_end(turned: FloatArray, rising: FloatArray, noise: float, volts: FloatArray) -> int:
    """Return the grid index where the pinched-off plateau ends.

    Args:
        turned: grid volts, rising towards on, shape (G,); ``rising``: the curve there.
        noise: rms of white and 1/f noise together.
        volts: those of the samples, turned as well, shape (n,).

    Raises:
        Refusal: too few samples lie on the plateau.
    """
    rise = float(np.max(rising) - rising[0])
    allowed = max(PLATEAU_SHARE * rise, PLATEAU_NOISE * noise)
    steepest = int(np.argmax(np.gradient(rising, turned)))
    first = turned <= np.sort(volts)[min(FEWEST_PLATEAU, volts.size) - 1]
    level = float(np.mean(rising[first]))
    for _ in range(3):
        inside = np.flatnonzero(rising[: steepest + 1] <= level + allowed)
        end = int(inside[-1]) if inside.size else 0
        level = float(np.median(rising[: end + 1]))
    samples = int(np.count_nonzero(volts <= turned[end]))
    if samples < FEWEST_PLATEAU:
        raise Refusal(
            f"only {samples} samples lie on the pinched-off plateau, {FEWEST_PLATEAU} are needed: "
            "sweep further into pinch-off"
        )
    return end


def judge(
    turned: FloatArray, mean: FloatArray, slope: FloatArray, plateau: int, snr: float
) -> tuple[str, ...]:
    """Refuse curves without a turn-on inside the window; return warnings.

    Args:
        turned: volts, rising towards on, shape (G,).
        mean: curve above its off-level, shape (G,); ``slope``: its derivative.
        plateau: index where the plateau ends.
        snr: rise over rms noise.

    Raises:
        Refusal: no turn-on, more than one, or one cut by the window.
    """
    if snr < LEAST_SNR:
        raise Refusal(f"rise over noise is {snr:.1f}, at least {LEAST_SNR:g} is needed")
    rise = float(np.max(mean))
    fall = float(np.max(np.maximum.accumulate(mean) - mean)) / rise
    if fall > FALL_REFUSED:
        raise Refusal(f"the curve falls back by {100 * fall:.0f} % of its rise: not one turn-on")
    peak = plateau + int(np.argmax(slope[plateau:]))
    top = float(slope[peak])
    steep = plateau + int(np.argmax(slope[plateau:] >= STEEP * top))
    begun = plateau + int(np.argmax(slope[plateau:] >= TURNING_ON * top))
    length = turned[plateau] - turned[0]
    if length < PLATEAU_TO_TURN_ON * (turned[steep] - turned[plateau]):
        raise Refusal("the pinched-off plateau is short beside the turn-on: sweep further into pinch-off")
    falls = bool(np.min(slope[peak:]) < STEEP * top)
    if not _settled(turned, mean, begun) and (not falls or peak >= slope.size - 3):
        raise Refusal("the slope still grows at the edge of the window: sweep further on")
    if fall > FALL_WARNED:
        return (f"the curve falls back by {100 * fall:.0f} % of its rise: resonances may move the threshold",)
    return ()


def _settled(turned: FloatArray, mean: FloatArray, begun: int) -> bool:
    """Tell whether the slope has stopped growing, from chords, which noise hardly moves."""
    ends = np.interp(np.linspace(turned[begun], turned[-1], 4), turned, mean)
    _, middle, last = np.diff(ends)
    return bool(last <= SETTLED * middle)


def behind_bend(slope: FloatArray, plateau: int) -> int | None:
    """Return where the overshoot behind an unresolved bend has died out, None if there is no bend."""
    top = float(np.max(slope[plateau:]))
    growth = slope[GRID_PER_KNOT:] - slope[:-GRID_PER_KNOT]
    bend = int(np.argmax(growth))
    behind = bend + (1 + OVERSHOOT_KNOTS) * GRID_PER_KNOT
    if growth[bend] < SHARP_BEND * top or behind > slope.size - OVERSHOOT_KNOTS * GRID_PER_KNOT:
        return None
    return behind if np.max(slope[behind:]) >= BEHIND_BEND * top else None
