"""Where about are the peaks of a trace, and how wide?

First guesses only: positions to a fraction of a width, one width for all.  Whether a
candidate is a peak is decided by the fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d
from scipy.signal import find_peaks, peak_widths

from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["MAD_TO_SIGMA", "Candidates", "find_candidates"]

IndexArray = NDArray[np.intp]

#: A first look takes peaks of at least this share of the tallest.
FIRST_LOOK = 0.5
#: The trace is then smoothed by a Gaussian of this many widths (sigma), which broadens
#: a peak by about a tenth and lowers it by a fifth.
SMOOTHING = 0.2
#: A candidate stands out by this many times the smoothed noise ...
NOISE_FACTOR = 5.0
#: ... and by this share of the tallest one.
LEAST_SHARE = 0.04
#: Its width lies within this factor of the common one.
WIDTH_FACTOR = 2.5
#: Factor from the median absolute deviation of normal noise to its standard deviation.
MAD_TO_SIGMA = 1.4826


@dataclass(frozen=True, eq=False)
class Candidates:
    """First guesses.

    Attributes:
        sign: +1 for peaks, -1 for dips.
        index: sample numbers of the tops, ascending, shape (P,).
        height: above their surroundings, positive, shape (P,).
        width: common full width at half maximum in samples.
    """

    sign: float
    index: IndexArray
    height: FloatArray
    width: float


def find_candidates(y: FloatArray) -> Candidates:
    """Look for peaks of either sign.

    Args:
        y: samples in order of x, shape (n,), n >= 6.

    Raises:
        Refusal: there are none.
    """
    level = _without_slope(y)
    middle = float(np.median(level))
    sign = 1.0 if np.max(level) - middle >= middle - np.min(level) else -1.0
    upright = sign * level
    width = _common_width(upright)
    smooth = gaussian_filter1d(upright, SMOOTHING * width, mode="nearest")
    noise = MAD_TO_SIGMA * float(np.median(np.abs(upright - smooth)))
    # a Gaussian of sigma s leaves 1 / sqrt(2 sqrt(pi) s) of white noise, s >= 0.3 samples
    quiet = noise / np.sqrt(max(1.0, 2.0 * np.sqrt(np.pi) * SMOOTHING * width))
    tops, found = find_peaks(smooth, prominence=NOISE_FACTOR * quiet)
    if not tops.size:
        raise Refusal("no peak stands out of the noise")
    prominence = found["prominences"]
    widths = peak_widths(smooth, tops, rel_height=0.5)[0]
    common = float(np.median(widths[prominence >= FIRST_LOOK * np.max(prominence)]))
    good = (prominence >= LEAST_SHARE * np.max(prominence)) & (widths > common / WIDTH_FACTOR)
    tops, prominence = _apart(tops[good], prominence[good], 0.5 * common)
    return Candidates(sign, tops, prominence, common)


def _without_slope(y: FloatArray) -> FloatArray:
    """Take off the line through the medians of the first and the last third."""
    third = y.size // 3
    rise = float(np.median(y[-third:]) - np.median(y[:third])) / (y.size - third)
    return y - rise * np.arange(y.size)


def _common_width(y: FloatArray) -> float:
    """Return the median width in samples of the tallest peaks of the raw trace."""
    tops, found = find_peaks(y, prominence=0.0)
    if not tops.size:
        raise Refusal("no peak is in the trace")
    tall = tops[found["prominences"] >= FIRST_LOOK * np.max(found["prominences"])]
    return float(np.median(peak_widths(y, tall, rel_height=0.5)[0]))


def _apart(tops: IndexArray, height: FloatArray, least: float) -> tuple[IndexArray, FloatArray]:
    """Keep the taller of any two tops nearer than ``least`` samples."""
    kept: list[int] = []
    for k in np.argsort(-height):
        if all(abs(int(tops[k]) - int(tops[other])) >= least for other in kept):
            kept.append(int(k))
    order = np.sort(np.array(kept, dtype=np.intp))
    return tops[order], height[order]
