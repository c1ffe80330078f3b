"""Which spectrum has a series, how well is each ordinate known, which bins are mains lines?

Welch's mean of modified periodograms (P. D. Welch, IEEE Trans. Audio Electroacoust. 15
(1967) 70): Hann window, 50 % overlap, a straight line taken from every segment.  One-sided,
variance = int_0^inf S df.  With K segments an ordinate is S chi^2_nu / nu,

    nu = 2 K / (1 + (K - 1) / (18 K)),

and neighbouring bins, correlated through the window by 4/9 and 1/36, count as 1/1.94 bins.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, signal, stats

from registry.samples import FloatArray

__all__ = ["BIN_CORRELATION", "Spectrum", "find_lines", "welch_spectrum"]

Flags = NDArray[np.bool_]

#: 1 + 2 (4/9 + 1/36): variance of a mean over bins in units of independent ones (Hann).
BIN_CORRELATION = 1.0 + 2.0 * (4.0 / 9.0 + 1.0 / 36.0)
#: Bins left out at the lower end: the mean, and those the fitted line takes noise from.
LOWEST_BINS = 3
#: A bin stands out if chance makes it this rarely in the whole spectrum, ...
LINE_CHANCE = 0.002
#: ... with this margin for the baseline, a running median over so many bins.
LINE_MARGIN = 1.3
BASELINE_BINS = 31
#: Bins on each side of an outstanding one that the window fills as well.
LINE_REACH = 2


@dataclass(frozen=True, eq=False)
class Spectrum:
    """A one-sided spectrum.

    Attributes:
        f: frequencies in Hz, shape (m,), the lowest bins and Nyquist left out.
        density: mean over the segments, signal unit squared a Hz, shape (m,).
        single: of each segment, shape (m, K).
        nu: degrees of freedom of one ordinate of ``density``.
    """

    f: FloatArray
    density: FloatArray
    single: FloatArray
    nu: float

    def part(self, keep: Flags) -> Spectrum:
        """Return the spectrum of the bins ``keep`` (m,) alone."""
        return Spectrum(self.f[keep], self.density[keep], self.single[keep], self.nu)


def welch_spectrum(y: FloatArray, interval: float, length: int) -> Spectrum:
    """Return the spectrum of evenly spaced samples.

    Args:
        y: shape (n,), finite.
        interval: between samples, s.
        length: samples a segment, at most n.
    """
    f, _, single = signal.spectrogram(  # type: ignore[call-overload]  # stubs know no name for detrend
        y,
        1.0 / interval,
        window="hann",
        nperseg=length,
        noverlap=length // 2,
        detrend="linear",
    )
    segments = single.shape[1]
    nu = 2.0 * segments / (1.0 + (segments - 1) / (18.0 * segments))
    inside = slice(LOWEST_BINS, (length + 1) // 2)
    kept = np.asarray(single[inside], dtype=float)
    return Spectrum(np.asarray(f[inside], dtype=float), np.mean(kept, axis=1), kept, nu)


def find_lines(spectrum: Spectrum) -> Flags:
    """Return which bins belong to narrow lines (mains, pick-up), shape (m,).

    The baseline is the running median of f S(f), level for 1/f noise.
    """
    level = spectrum.f * spectrum.density
    shape = spectrum.nu / 2.0
    middle = float(stats.gamma.ppf(0.5, shape, scale=1.0 / shape))
    baseline = ndimage.median_filter(level, size=BASELINE_BINS, mode="nearest") / middle
    most = LINE_MARGIN * float(stats.gamma.isf(LINE_CHANCE / level.size, shape, scale=1.0 / shape))
    out = level > most * baseline
    reached: Flags = ndimage.binary_dilation(out, iterations=LINE_REACH)
    return reached
