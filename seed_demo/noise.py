"""What noise lies on a simulated trace: white plus 1/f^beta, drawn from its spectrum.

Nothing here knows what is measured.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from seed_demo.devices import FloatArray

__all__ = ["Noise", "coloured_samples", "noise_series"]

# The drawn record is this many times longer than the part that is kept, so that the
# kept part is not periodic and holds power below its own lowest frequency.
_LONGER = 4


@dataclass(frozen=True)
class Noise:
    """Noise of one trace.

    Attributes:
        white: rms of the uncorrelated part, in the signal's unit.
        pink: expected rms about its own mean of the 1/f^beta part over the trace.
        exponent: beta.
    """

    white: float
    pink: float = 0.0
    exponent: float = 1.0

    def draw(self, count: int, rng: np.random.Generator) -> FloatArray:
        """Draw ``count`` samples in the order of time."""
        samples = self.white * rng.standard_normal(count)
        if self.pink > 0:
            samples += coloured_samples(count, self.pink, self.exponent, rng)
        return samples


def coloured_samples(count: int, rms: float, exponent: float, rng: np.random.Generator) -> FloatArray:
    """Draw 1/f^exponent noise whose EXPECTED variance about the mean of the samples is ``rms``^2.

    Spectral synthesis: independent normal amplitudes of sine and cosine at each frequency.
    One draw may be larger or smaller than ``rms``, as in nature.
    """
    length = _LONGER * count
    powers = np.zeros(length // 2 + 1)
    powers[1:-1] = np.arange(1, length // 2, dtype=np.float64) ** -exponent
    scale = rms / math.sqrt(_variance_about_mean(powers, count))
    return scale * _synthesise(powers, count, rng)


def noise_series(
    count: int, spacing: float, amplitude: float, exponent: float, white_rms: float, rng: np.random.Generator
) -> FloatArray:
    """Draw a time series with the one-sided density S(f) = amplitude^2 / f^exponent + 2 white_rms^2 spacing.

    Args:
        count: samples.
        spacing: seconds between samples.
        amplitude: square root of the 1/f density at 1 Hz, signal unit per root hertz.
        exponent: beta.
        white_rms: rms of the white part, signal unit.
        rng: source of the draw.
    """
    length = _LONGER * count
    resolution = 1.0 / (length * spacing)
    powers = np.zeros(length // 2 + 1)
    frequencies = resolution * np.arange(1, length // 2)
    powers[1:-1] = amplitude**2 * frequencies**-exponent * resolution
    return _synthesise(powers, count, rng) + white_rms * rng.standard_normal(count)


def _synthesise(powers: FloatArray, count: int, rng: np.random.Generator) -> FloatArray:
    """Sum sines and cosines of variance ``powers``, keep the first ``count`` samples."""
    length = 2 * (powers.size - 1)
    amplitudes = rng.standard_normal(powers.size) - 1j * rng.standard_normal(powers.size)
    return np.fft.irfft(0.5 * length * np.sqrt(powers) * amplitudes, length)[:count]


def _variance_about_mean(powers: FloatArray, count: int) -> float:
    """Expected mean square of ``count`` samples about their own mean."""
    length = 2 * (powers.size - 1)
    covariance = np.fft.irfft(0.5 * length * powers, length)
    lags = np.arange(1, count)
    mean_square = (count * covariance[0] + 2 * np.sum((count - lags) * covariance[1:count])) / count**2
    return float(covariance[0] - mean_square)
