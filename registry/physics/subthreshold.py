"""How many gate volts make a decade of current below threshold?

An exponential on the off-level, I = a + b 10^(V/S), fitted by generalised least squares
under the noise of the trace to the samples below a small share of the current at
threshold.  S is n ln(10) k_B T/e for thermal carriers, n >= 1 (S. M. Sze, Physics of
Semiconductor Devices, 3rd ed., Wiley 2007, section 6.2.4; from memory).

On its way to the linear region every turn-on leaves the exponential, by about the share
of the threshold current.  So two tops are used, a factor 10^(1/2) apart, and the straight
line through the two swings is followed to top zero; half their difference enters the
uncertainty.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import least_squares

from registry.physics.noise import NoiseModel
from registry.physics.turn_on import Estimate
from registry.samples import FloatArray

__all__ = ["swing"]

#: Largest current fitted, as a share of the current at threshold (ln(1 + e^z): off by 4 %).
TOP_SHARE = 1.0 / 15.0
#: Factor between the two tops.
TOP_STEP = 10.0**0.5
#: Decades between noise and the larger top below which no swing is given ...
LEAST_DECADES = 1.0
#: ... counted from this many rms of the noise.
NOISE_FACTOR = 3.0
#: Samples wanted on those decades.
FEWEST_SAMPLES = 6
#: Largest relative standard uncertainty of a swing.
WIDEST_UNCERTAINTY = 0.3


def swing(turned: FloatArray, above: FloatArray, noise: NoiseModel, at_threshold: float) -> Estimate | str:
    """Return the subthreshold swing in V per decade, or why there is none.

    Args:
        turned: volts in the direction of turning on, rising, shape (n,).
        above: signal above the off-level, positive when on, shape (n,).
        noise: of the trace, in the signal's unit squared.
        at_threshold: signal above the off-level at the threshold voltage.
    """
    floor = NOISE_FACTOR * float(np.hypot(noise.white_rms(), noise.pink_rms(above.size)))
    top = TOP_SHARE * at_threshold
    if top <= 0.0 or np.log10(top / floor) < LEAST_DECADES:
        decades = max(float(np.log10(top / floor)), 0.0) if top > 0.0 else 0.0
        return f"only {decades:.2f} decades lie between noise and threshold, {LEAST_DECADES:g} is needed"
    tops = (top, top / TOP_STEP)
    ends = [_last_below(above, one) for one in tops]
    if np.count_nonzero(above[: ends[1]] > floor) < FEWEST_SAMPLES:
        return f"fewer than {FEWEST_SAMPLES} samples lie between noise and threshold"
    high, low = (_exponential(turned[:end], above[:end], noise) for end in ends)
    if high is None or low is None:
        return "no exponential fits the current below threshold"
    difference = high.value - low.value
    value = low.value - difference / (TOP_STEP - 1.0)
    uncertainty = float(np.hypot(low.uncertainty, 0.5 * difference))
    if value <= 0.0 or uncertainty > WIDEST_UNCERTAINTY * value:
        return "the current below threshold is not exponential enough to name a swing"
    return Estimate(value, uncertainty)


def _last_below(above: FloatArray, top: float) -> int:
    """Return how many samples come before the signal passes ``top`` for good."""
    over = np.flatnonzero(above > top)
    return int(over[0]) if over.size else above.size


def _exponential(volts: FloatArray, above: FloatArray, noise: NoiseModel) -> Estimate | None:
    """Fit off-level, size at the last sample and swing; return the swing."""
    size, span = float(above[-1]), float(volts[-1] - volts[0])
    half = np.flatnonzero(above < 0.1 * size)
    if not half.size or size <= 0.0:
        return None
    guess = max(float(volts[-1] - volts[half[-1]]), span / volts.size)
    whitened = noise.whiten(above)

    def residuals(p: FloatArray) -> FloatArray:
        # The swing is fitted by its logarithm, which keeps it positive.
        model = size * (p[0] + p[1] * 10.0 ** ((volts - volts[-1]) / np.exp(p[2])))
        return noise.whiten(model) - whitened

    fit = least_squares(residuals, [0.0, 1.0, np.log(guess)], method="lm", max_nfev=200)
    if fit.status <= 0:
        return None
    jacobian = np.asarray(fit.jac, dtype=float)
    covariance = np.linalg.pinv(jacobian.T @ jacobian)
    found = float(np.exp(fit.x[2]))
    return Estimate(found, found * float(np.sqrt(covariance[2, 2])))
