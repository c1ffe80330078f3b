"""Which base temperature and coupling exponent explain widths against refrigerator temperature?

The electrons' temperature follows the refrigerator's, T, until their own heat load holds
them at T_0,

    T_e = (T_0^n + T^n)^(1/n),         width = s T_e,

n = 2 for conduction through the leads, 5 for electrons and phonons (common practice: the
heat flow is A (T_e^n - T^n); n - the coupling exponent - is fitted).  Errors are taken as
relative ones: in logarithms

    ln width = ln s + (1/n) ln(T_0^n + T^n) + error.

ln s and the error's variance are integrated out in closed form, T_0 and n on a grid; what
is returned are posterior means and standard deviations.  Priors: T_0 uniform, ln n uniform
between the limits below, ln s flat or as given.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from registry.samples import FloatArray

__all__ = ["EXPONENTS", "ThermalFit", "fit_thermal"]

#: Coupling exponents tried: from below thermal conduction to above every electron-phonon law.
EXPONENTS = np.exp(np.linspace(np.log(1.3), np.log(9.0), 40))
#: Base temperatures tried, in the highest temperature of the table; zoomed once.
LOWEST, HIGHEST, STEPS = 0.0, 3.0, 400
#: The grid is zoomed to where the log-posterior is this close to its maximum.
ZOOM = 14.0
#: Smallest relative error assumed: rounding of doubles.
ROUNDING = 1e-9


@dataclass(frozen=True, eq=False)
class ThermalFit:
    """Posterior of one series.

    Attributes:
        mean: of T_0 (K), n, ln s; shape (3,).  ``covariance``: of those, (3, 3).
        best: T_0, n, ln s of the most probable node.
        upper: 95 % upper bound of T_0 (K).
        gain_over_zero: log-likelihood T_0 gains over T_0 = 0.
        gain_over_flat: log-likelihood the model gains over widths that do not change.
        exponent_told: False if the posterior of n leans on its prior's limits.
        relative_error: rms of one point about the best curve.
    """

    mean: FloatArray
    covariance: FloatArray
    best: FloatArray
    upper: float
    gain_over_zero: float
    gain_over_flat: float
    exponent_told: bool
    relative_error: float


def fit_thermal(
    t: FloatArray,
    log_width: FloatArray,
    relative_u: FloatArray | None,
    scale: tuple[float, float] | None,
) -> ThermalFit:
    """Fit base temperature and coupling exponent.

    Args:
        t: refrigerator temperatures, K, shape (n,), above zero.
        log_width: ln of the widths, shape (n,).
        relative_u: known relative uncertainties, shape (n,); None: one unknown size.
        scale: ln s and its standard uncertainty (0: exact); None: unknown.
    """
    top = float(np.max(t))
    bases = top * np.linspace(LOWEST, HIGHEST, STEPS + 1)
    for _ in range(2):
        rest = log_width - _shape(t, bases)
        height, log_scale, variance = _marginal(rest, relative_u, scale)
        close = np.max(height, axis=1) > np.max(height) - ZOOM
        step = bases[1] - bases[0]
        low, high = bases[close][0] - step, bases[close][-1] + step
        if high - low > 0.5 * (bases[-1] - bases[0]):
            break
        bases = np.linspace(max(low, 0.0), high, STEPS + 1)
    return _summary(t, log_width, bases, height, log_scale, variance, _flat(log_width, relative_u))


def _shape(t: FloatArray, bases: FloatArray) -> FloatArray:
    """Return ln T_e for every base temperature and exponent, shape (B, N, n)."""
    n = EXPONENTS[None, :, None]
    high = np.maximum(bases[:, None, None], t)
    low = np.minimum(bases[:, None, None], t)
    out: FloatArray = np.log(high) + np.log1p((low / high) ** n) / n
    return out


def _marginal(
    rest: FloatArray, relative_u: FloatArray | None, scale: tuple[float, float] | None
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Integrate ln s (and the error's size) out of ``rest`` = ln s + error, shape (..., n)."""
    n = rest.shape[-1]
    weight = np.ones(n) if relative_u is None else relative_u**-2.0
    total = float(np.sum(weight))
    mean = rest @ weight / total
    spread = np.maximum(np.sum(weight * (rest - mean[..., None]) ** 2, axis=-1), ROUNDING**2 * total)
    if relative_u is None:
        if scale is None:
            return -0.5 * (n - 1) * np.log(spread), mean, spread / max(n - 3, 1) / n
        # An unknown error's size beside a known scale: its own scatter tells how far the
        # mean may be from ln s, iterated once with the prior's width.
        size = spread / max(n - 1, 1)
        prior = scale[1] ** 2
        posterior_variance = 1.0 / (n / size + 1.0 / max(prior, ROUNDING**2))
        posterior_mean = posterior_variance * (mean * n / size + scale[0] / max(prior, ROUNDING**2))
        full = spread + n * (mean - scale[0]) ** 2 / (1.0 + n * prior / size)
        return -0.5 * n * np.log(full) - 0.5 * np.log1p(n * prior / size), posterior_mean, posterior_variance
    height = -0.5 * spread
    if scale is None:
        return height, mean, np.full_like(mean, 1.0 / total)
    prior = max(scale[1] ** 2, ROUNDING**2)
    height = height - 0.5 * (mean - scale[0]) ** 2 / (prior + 1.0 / total)
    variance = 1.0 / (total + 1.0 / prior)
    return height, variance * (mean * total + scale[0] / prior), np.full_like(mean, variance)


def _flat(log_width: FloatArray, relative_u: FloatArray | None) -> float:
    """Return the log-likelihood of widths that do not change with temperature."""
    return float(_marginal(log_width[None, :], relative_u, None)[0][0])


def _summary(
    t: FloatArray,
    log_width: FloatArray,
    bases: FloatArray,
    height: FloatArray,
    log_scale: FloatArray,
    variance: FloatArray,
    flat: float,
) -> ThermalFit:
    """Take moments, the bound and the gains from the grid."""
    weight = np.exp(height - np.max(height))
    weight /= np.sum(weight)
    base, exponent = np.meshgrid(bases, EXPONENTS, indexing="ij")
    stack = np.stack([base, exponent, log_scale])
    mean = np.sum(weight * stack, axis=(1, 2))
    offset = stack - mean[:, None, None]
    covariance = np.einsum("bn,ibn,jbn->ij", weight, offset, offset)
    covariance[2, 2] += float(np.sum(weight * variance))
    cumulated = np.cumsum(np.sum(weight, axis=1))
    at = np.unravel_index(int(np.argmax(height)), height.shape)
    best = stack[:, at[0], at[1]]
    of_exponent = np.sum(weight, axis=0)
    rest = log_width - _shape(t, best[:1])[0, at[1]] - best[2]
    zero = _at_zero(t, log_width, height, bases)
    return ThermalFit(
        mean=mean,
        covariance=covariance,
        best=best,
        upper=float(np.interp(0.95, cumulated, bases)),
        gain_over_zero=float(np.max(height)) - zero,
        gain_over_flat=float(np.max(height)) - flat,
        exponent_told=bool(np.max(of_exponent[[0, -1]]) < 0.3 * np.max(of_exponent)),
        relative_error=float(np.sqrt(np.mean(rest**2))),
    )


def _at_zero(t: FloatArray, log_width: FloatArray, height: FloatArray, bases: FloatArray) -> float:
    """Return the log-posterior at T_0 = 0; if the grid does not reach it, it is far below."""
    return float(np.max(height[0])) if bases[0] == 0.0 else float(np.max(height) - ZOOM)
