"""Which shape has a Coulomb peak or a charge step?

Pure functions of the reduced energy u = (level - lead potential) / k_B T, every one of
the height 1 and safe for any finite u.  In gate volts u = lever_arm (V - V_0) / (k_B/e T).

Sources: C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646 for the two thermal peaks and
the resonant limit; E. B. Foxman et al., Phys. Rev. B 47 (1993) 10020 for the thermally
broadened Lorentzian.  That one is folded here in closed form,

    int (1/4) cosh^-2((u-v)/2) (g/2 pi) / (v^2 + g^2/4) dv
        = Re psi_1(1/2 + (g/2 + i u) / 2 pi) / 2 pi^2,

psi_1 being the trigamma function (sum over the poles of the Fermi function).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import constants
from scipy.special import expit

from registry.samples import FloatArray

__all__ = [
    "BOLTZMANN_EV",
    "MULTI_LEVEL_FWHM",
    "SINGLE_LEVEL_FWHM",
    "TEN_TO_NINETY",
    "fermi_step",
    "multi_level",
    "multi_level_slope",
    "single_level",
    "single_level_slope",
    "thermal_lorentzian",
    "thermal_lorentzian_fwhm",
    "thermal_lorentzian_slopes",
]

ComplexArray = NDArray[np.complex128]

#: k_B/e in eV/K, exact in the SI of 2019.
BOLTZMANN_EV = constants.k / constants.e
#: Full width at half maximum of ``single_level`` in k_B T: 4 ln(1 + sqrt 2).
SINGLE_LEVEL_FWHM = float(4.0 * np.log1p(np.sqrt(2.0)))
#: Full width at half maximum of ``multi_level`` in k_B T: root of u = sinh(u)/2, doubled.
MULTI_LEVEL_FWHM = 4.354637969930614
#: 10 % to 90 % width of ``fermi_step`` in k_B T: 2 ln 9.
TEN_TO_NINETY = float(2.0 * np.log(9.0))
#: Below this |u| the quotient of small numbers is replaced by its series.
SMALL = 1e-4
#: The Lorentzian's tail is taken as flat from this |u| on, where it is below 1e-15.
FARTHEST = 1e9
#: The recurrence lifts the argument of the polygamma functions by this much; from there
#: on the asymptotic series is exact to rounding.
LIFT = 10
#: Newton steps for a half width; from a start within a few per cent, four suffice.
NEWTON_STEPS = 6


def single_level(u: FloatArray) -> FloatArray:
    """Return cosh^-2(u/2): one level, h Gamma << k_B T << level spacing (Beenakker 1991)."""
    tail = np.exp(-np.abs(u))
    peak: FloatArray = 4.0 * tail / (1.0 + tail) ** 2
    return peak


def single_level_slope(u: FloatArray) -> FloatArray:
    """Return d single_level / du = -tanh(u/2) cosh^-2(u/2)."""
    slope: FloatArray = -np.tanh(0.5 * np.asarray(u)) * single_level(u)
    return slope


def multi_level(u: FloatArray) -> FloatArray:
    """Return u / sinh u: many levels, spacing << k_B T << charging energy (Beenakker 1991)."""
    size = np.abs(u)
    safe = np.where(size < SMALL, 1.0, size)
    peak: FloatArray = np.where(
        size < SMALL,
        1.0 - np.minimum(size, SMALL) ** 2 / 6.0,
        -2.0 * safe * np.exp(-safe) / np.expm1(-2.0 * safe),
    )
    return peak


def multi_level_slope(u: FloatArray) -> FloatArray:
    """Return d multi_level / du = (1/u - coth u) u / sinh u."""
    values = np.asarray(u, dtype=float)
    safe = np.where(np.abs(values) < SMALL, 1.0, values)
    slope: FloatArray = np.where(
        np.abs(values) < SMALL, -values / 3.0, (1.0 / safe - 1.0 / np.tanh(safe)) * multi_level(safe)
    )
    return slope


def fermi_step(u: FloatArray) -> FloatArray:
    """Return 1 / (1 + exp(-u)): occupation of a level by one lead, h Gamma << k_B T."""
    step: FloatArray = expit(np.asarray(u, dtype=float))
    return step


def thermal_lorentzian(u: FloatArray, g: FloatArray | float) -> FloatArray:
    """Return the Lorentzian of full width g (in k_B T) folded with the thermal peak.

    Height 1 at u = 0; ``g`` broadcasts against ``u``; g = 0 is ``single_level``.
    """
    gamma = np.asarray(g, dtype=float)
    peak: FloatArray = _folded(u, gamma) / _folded(np.zeros_like(gamma), gamma)
    return peak


def thermal_lorentzian_slopes(u: FloatArray, g: FloatArray | float) -> tuple[FloatArray, FloatArray]:
    """Return the derivatives of ``thermal_lorentzian`` by u and by g."""
    gamma = np.asarray(g, dtype=float)
    height = _folded(np.zeros_like(gamma), gamma)
    at_u, at_0 = _argument(u, gamma), _argument(np.zeros_like(gamma), gamma)
    second = _polygamma(at_u, 2)
    by_u = -second.imag / (4.0 * np.pi**3)
    by_g = second.real / (8.0 * np.pi**3)
    height_by_g = _polygamma(at_0, 2).real / (8.0 * np.pi**3)
    shape = _folded(u, gamma) / height
    return by_u / height, (by_g - shape * height_by_g) / height


def thermal_lorentzian_fwhm(g: FloatArray | float) -> tuple[FloatArray, FloatArray]:
    """Return the full width at half maximum in k_B T, and its derivative by g.

    Newton's method from sqrt(3.5255^2 + 4 g + g^2), right for g = 0 and large g and off
    by a few per cent between; vectorised over g >= 0.
    """
    gamma = np.asarray(g, dtype=float)
    half = 0.5 * np.sqrt(SINGLE_LEVEL_FWHM**2 + gamma * (gamma + 4.0))
    for _ in range(NEWTON_STEPS):
        by_u, _ = thermal_lorentzian_slopes(half, gamma)
        half = half - (thermal_lorentzian(half, gamma) - 0.5) / by_u
    by_u, by_g = thermal_lorentzian_slopes(half, gamma)
    return 2.0 * half, -2.0 * by_g / by_u


def _folded(u: FloatArray, g: FloatArray) -> FloatArray:
    """Return the unit-area convolution times k_B T."""
    folded: FloatArray = _polygamma(_argument(u, g), 1).real / (2.0 * np.pi**2)
    return folded


def _argument(u: FloatArray, g: FloatArray) -> ComplexArray:
    """Return 1/2 + (g/2 + i u) / 2 pi."""
    energy = np.clip(np.asarray(u, dtype=float), -FARTHEST, FARTHEST)
    argument: ComplexArray = 0.5 + (0.5 * g + 1j * energy) / (2.0 * np.pi)
    return argument


def _polygamma(z: ComplexArray, order: int) -> ComplexArray:
    """Return psi_1 (order 1) or psi_2 (order 2) for Re z >= 1/2.

    Recurrence and asymptotic series: NIST DLMF 5.15.1, 5.15.5, 5.15.8 and 5.15.9.
    """
    total = np.zeros_like(z)
    for k in range(LIFT):
        total += (z + k) ** -2 if order == 1 else -2.0 * (z + k) ** -3
    w = 1.0 / (z + LIFT)
    w2 = w * w
    if order == 1:
        series = 1 / 6 - w2 * (1 / 30 - w2 * (1 / 42 - w2 * (1 / 30 - w2 * (5 / 66 - w2 * 691 / 2730))))
        return np.asarray(total + w + w2 / 2 + w * w2 * series)
    series = 1 / 2 - w2 * (1 / 6 - w2 * (1 / 6 - w2 * (3 / 10 - w2 * (5 / 6 - w2 * 691 / 210))))
    return np.asarray(total - w2 - w * w2 - w2 * w2 * series)
