"""Which candidates are Coulomb peaks, and is the trace one of Coulomb peaks at all?

Each rule stands with its limit; none is there to make a fit look better, all reject
something a fit alone would answer to: mains pickup, a switching charge, a hump of the
background, the noise itself, peaks that run together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from registry.physics.peak_finding import MAD_TO_SIGMA, Candidates
from registry.physics.peak_fits import PeakFits, polynomial_log_likelihood, second_peak
from registry.physics.peak_windows import Windows, middle, some_windows
from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = [
    "DECIDING_PEAKS",
    "WIDTH_GUESS",
    "Fault",
    "find_faults",
    "find_jumps",
    "judge_evidence",
    "judge_spacing",
    "keep_inside",
]

#: Samples across a full width at half maximum: fewer do not show a shape.
FEWEST_ACROSS = 4.0
#: Distance of a peak from either end of the sweep, in full widths.
INSIDE = 1.2
#: Widest peak as a share of the sweep (wider: a hump of the background).
WIDEST = 0.15
#: Largest full width as a share of the spacing.  A sine has 0.5: mains pickup is not a peak.
WIDTH_OF_SPACING = 0.45
#: The width guessed before the fit is smoothed by up to a tenth; a tenth more for noise.
WIDTH_GUESS = 0.8
#: Peaks (the middle ones) the evidence is taken from; more of them bring only cost.
DECIDING_PEAKS = 24
#: Log-likelihood each peak must gain over a straight line, and over a cubic, on average.
GAIN_OVER_LINE = 8.0
GAIN_OVER_CUBIC = 4.0
#: A peak must be this many times its standard uncertainty, and the noise of a sample.
HEIGHT_SIGNIFICANCE = 5.0
LEAST_SNR = 6.0
#: Largest relative uncertainty of a width, and largest factor between it and the common one.
WIDTH_UNCERTAINTY = 0.3
WIDTH_FACTOR = 2.5
#: A peak is more than one if shapes beside it gain this log-likelihood ...
GAIN_OF_SECOND = 10.0
#: ... and take this share of its height.
SECOND_SIZE = 0.05
#: Steepest rise of a line shape in heights a sample, times the full width in samples
#: (1.36 for single-level, the largest), with a quarter to spare for narrow neighbours.
STEEPEST = 1.7
#: A rise beyond that by this many standard deviations of a difference is a jump.
JUMP_SIGMAS = 4.5


@dataclass(frozen=True)
class Fault:
    """Why a candidate is no usable peak; ``faint`` if it may be no peak at all."""

    why: str
    faint: bool = False


def keep_inside(
    found: Candidates, x: FloatArray, common: float, warnings: list[str]
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Return the candidates far enough from the ends, and none lost; refuse bad widths."""
    if found.width < FEWEST_ACROSS:
        raise Refusal(f"only {found.width:.2g} samples across a peak, {FEWEST_ACROSS:g} needed: sweep finer")
    span = float(x[-1] - x[0])
    if common > WIDEST * span:
        raise Refusal(f"the feature fills {common / span:.0%} of the sweep, {WIDEST:.0%} are allowed")
    at = x[found.index]
    inside = (at - x[0] >= INSIDE * common) & (x[-1] - at >= INSIDE * common)
    warnings += [f"peak near {v:.6g} V left out: it is cut by the end of the sweep" for v in at[~inside]]
    if not np.any(inside):
        raise Refusal("the only peak is cut by the end of the sweep")
    return found.index[inside], np.array([], dtype=np.intp)


def find_faults(windows: Windows, fits: PeakFits) -> dict[int, Fault]:
    """Return what is wrong with which peak."""
    spread = np.sqrt(np.einsum("pii->pi", fits.covariance))
    height, centre, width = (fits.parameters[:, k] for k in range(3))
    noise = np.sqrt(fits.noise.variance * (1.0 - fits.noise.share) * windows.x.shape[2])
    gain, size = second_peak(windows, fits)
    faults: dict[int, Fault] = {}
    for k in range(height.size):
        if height[k] < LEAST_SNR * noise:
            faults[k] = Fault(f"it is only {height[k] / noise:.2g} times the noise of a sample", faint=True)
        elif height[k] < HEIGHT_SIGNIFICANCE * spread[k, 0]:
            faults[k] = Fault(f"it is only {height[k] / spread[k, 0]:.2g} times its uncertainty", faint=True)
        elif abs(centre[k]) > 1.0:
            faults[k] = Fault("the fit left it")
        elif not 1.0 / WIDTH_FACTOR < width[k] < WIDTH_FACTOR:
            faults[k] = Fault(f"its width is {width[k]:.2g} times that of the others")
        elif spread[k, 2] > WIDTH_UNCERTAINTY * width[k]:
            faults[k] = Fault(f"its width is uncertain by {spread[k, 2] / width[k]:.0%}")
        elif gain[k] > GAIN_OF_SECOND and size[k] > SECOND_SIZE:
            why = f"no single line shape fits it ({size[k]:.0%} of the height): more than one peak"
            faults[k] = Fault(why)
    return faults


def judge_evidence(windows: Windows, fits: PeakFits) -> None:
    """Refuse peaks that a line or a cubic in each window does without."""
    chosen = middle(windows.origin.size, DECIDING_PEAKS)
    some = some_windows(windows, chosen)
    count = some.origin.size
    likelihood = fits.log_likelihood(windows, chosen)
    for degree, wanted, curve in ((1, GAIN_OVER_LINE, "straight line"), (3, GAIN_OVER_CUBIC, "cubic")):
        gain = (likelihood - polynomial_log_likelihood(some, degree)) / count
        if gain < wanted:
            raise Refusal(
                f"a {curve} explains the trace (log-likelihood gain a peak {gain:.2g} < {wanted:g})"
            )


def judge_spacing(tops: NDArray[np.intp], width: float) -> None:
    """Refuse peaks too wide for their spacing: a sine, or peaks that run together.

    All candidates count, also those that are no peaks in the end.
    """
    if tops.size < 2:
        return
    share = width / float(np.median(np.diff(tops)))
    if share > WIDTH_OF_SPACING:
        raise Refusal(
            f"the width is {share:.0%} of the spacing, {WIDTH_OF_SPACING:.0%} are allowed: "
            "mains pickup, or unresolved peaks"
        )


def find_jumps(y: FloatArray, tops: NDArray[np.intp], width: float, height: FloatArray) -> dict[int, Fault]:
    """Return which peaks rise or fall within one sample: a switching charge, not a peak.

    Args:
        y: the trace, shape (n,).
        tops: sample numbers of the peaks; ``height`` their fitted heights in units of y.
        width: full width in samples.
    """
    change = np.abs(np.diff(y))
    noise = MAD_TO_SIGMA * float(np.median(change))
    faults: dict[int, Fault] = {}
    for k, top in enumerate(tops):
        near = change[max(0, int(top - width)) : int(top + width) + 1]
        largest = float(np.max(near, initial=0.0))
        if largest > STEEPEST / width * abs(float(height[k])) + JUMP_SIGMAS * noise:
            share = largest / abs(float(height[k]))
            faults[k] = Fault(f"it jumps by {share:.0%} of its height in one sample")
    return faults
