"""How cold do the electrons get, and which lever arm do widths against temperature mean?

Widths of peaks or steps, or electron temperatures, against the refrigerator's temperature
T follow (``thermal_series``)

    T_e = (T_0^n + T^n)^(1/n),     width = c (k_B/e) T_e / lever_arm,

T_0 being base_electron_temperature and c the shape's constant: 1 (k_B T in volts),
4 ln(1 + sqrt 2) = 3.5255 (full width of a single-level peak), 4.3546 (multi-level peak),
2 ln 9 = 4.3944 (10-90 % width of a step) (C. W. J. Beenakker, Phys. Rev. B 44 (1991)
1646; the law of T_e is common practice).  T_0 follows from where the widths stop falling
and needs no lever arm; where the temperatures are high enough to be the electrons' own,
the widths give the lever arm.

The coupling exponent is said in a warning with its uncertainty.

Domain: 7 or more points whose errors are independent and of one relative size (or of the
sizes stated), up to about 10 %, over temperatures from below T_0 to several times it.
Measured over 1,800 simulated tables of 8, 12 and 20 points (0.015 to 1 K, T_0 0.05 to 0.15 K,
n 2 to 5, errors 2 and 5 %; scale exact, unknown, or with a lever arm of 5 %), 68 % / 95 %
intervals cover

    base_electron_temperature  67 / 92 %,   lever_arm  70 / 95 %,

with a bias below 0.15 standard uncertainties on average.  No good table was refused.
Limits: a drift common to all points, and widths with a part that is not thermal (lifetime,
noise of the gate), are not seen in such a table unless they bend it.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from scipy import stats

from registry.errors import InputError
from registry.physics.catalogue import check_given, facts
from registry.physics.lineshapes import BOLTZMANN_EV, MULTI_LEVEL_FWHM, SINGLE_LEVEL_FWHM, TEN_TO_NINETY
from registry.physics.points import Points, pick_points, value_signals
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.sources import source_digest
from registry.physics.thermal_series import ThermalFit, fit_thermal
from registry.samples import FloatArray, Samples

__all__ = ["run"]

METHOD = facts("thermometry")

#: Width in k_B T / lever arm for every kind of width.
WIDTHS = {
    "thermal": 1.0,
    "single-level": SINGLE_LEVEL_FWHM,
    "multi-level": MULTI_LEVEL_FWHM,
    "ten-ninety": TEN_TO_NINETY,
}
#: Points below which base temperature, exponent, scale and scatter cannot be told apart.
FEWEST_POINTS = 7
#: Different temperatures, and the ratio of the highest to the lowest, needed.
FEWEST_TEMPERATURES = 5
LEAST_RANGE = 2.0
#: Relative scatter of the points about the curve at most.
LARGEST_SCATTER = 0.15
#: Log-likelihood the law must gain over widths that do not change with temperature.
GAIN_OVER_FLAT = 8.0
#: Log-likelihood T_0 must gain over zero, and its largest relative uncertainty, for a value.
GAIN_OVER_ZERO = 4.0
LARGEST_UNCERTAINTY = 0.3
#: Without a known scale T_0 must lie below this share of the highest temperature.
HIGHEST_BASE = 0.7
#: A misfit that chance makes this rarely is one.
CHANCE = 0.001


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Fit widths or electron temperatures against the refrigerator's temperature.

    Args:
        samples: the axis is the refrigerator's temperature in K; the signal is a width
            in V or an electron temperature in K; ``NAME_u`` holds its uncertainties.
        given: ``signal``, ``width`` (which width), ``lever_arm``.

    Returns:
        base_electron_temperature, a value or an upper bound; lever_arm for widths in V if
        it was not given and ``width`` was.

    Raises:
        InputError: the samples are no such table, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    signal = value_signals(samples, given)[0]
    if signal.unit not in ("V", "K"):
        raise InputError(
            f"signal {signal.name!r} is in {signal.unit!r}, a width in V or a temperature in K is wanted",
            where=f"signal {signal.name}",
            remedy="name the right signal with --given signal=NAME, or give its unit in a layout",
        )
    settings["signal"] = signal.name
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        points = pick_points(samples, signal, "K", FEWEST_POINTS)
        warnings = points.warnings
        _check_points(points)
        return _answer(points, given, settings)
    except Refusal as refusal:
        return refused_result(
            METHOD.name,
            METHOD.version,
            source_digest(METHOD.name),
            METHOD.quantities,
            refusal.reason,
            conditions=conditions,
            warnings=warnings,
            settings=settings,
        )


def _check_points(points: Points) -> None:
    """Refuse points that cannot be such a series."""
    if np.any(points.x <= 0.0) or np.any(points.y <= 0.0):
        raise Refusal("temperatures and widths must be above zero")
    different = np.unique(points.x).size
    if different < FEWEST_TEMPERATURES:
        raise Refusal(f"{different} different temperatures are too few, {FEWEST_TEMPERATURES} are needed")
    ratio = float(np.max(points.x) / np.min(points.x))
    if ratio < LEAST_RANGE:
        raise Refusal(
            f"the highest temperature is only {ratio:.2g} times the lowest, {LEAST_RANGE:g} are needed"
        )


def _answer(points: Points, given: Mapping[str, Given], settings: Mapping[str, float | str | bool]) -> Result:
    """Fit, judge, and word the result."""
    warnings = list(points.warnings)
    scale = _known_scale(points, given, warnings)
    log_width = np.log(points.y)
    relative_u = None if points.u is None else points.u / points.y
    fit = fit_thermal(points.x, log_width, relative_u, scale)
    if relative_u is not None:
        relative_u = _enlarged(points.x, log_width, relative_u, fit, warnings)
        fit = fit_thermal(points.x, log_width, relative_u, scale)
    _judge(points.x, log_width, fit, scale)
    spread = np.sqrt(np.diag(fit.covariance))
    told = "" if fit.exponent_told else " (hardly told by these points)"
    warnings.append(f"coupling exponent {fit.mean[1]:.2g} ± {spread[1]:.2g}{told}")
    curve_t = np.geomspace(np.min(points.x), np.max(points.x), 201)
    base, exponent, log_scale = fit.best
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=(_base(points, fit, scale), *_lever_arm(points, fit, given)),
        warnings=tuple(warnings),
        parameters=("base_electron_temperature", "coupling_exponent", "log_scale"),
        covariance=fit.covariance,
        curves=(
            Curve("fit", curve_t, np.exp(log_scale) * (base**exponent + curve_t**exponent) ** (1 / exponent)),
            Curve("electrons as cold as the refrigerator", curve_t, np.exp(log_scale) * curve_t),
        ),
        settings=settings,
    )


def _known_scale(
    points: Points, given: Mapping[str, Given], warnings: list[str]
) -> tuple[float, float] | None:
    """Return ln(width / T_e) and its uncertainty if they are known."""
    if points.signal_unit == "K":
        if "lever_arm" in given or "width" in given:
            warnings.append("the signal is a temperature: lever_arm and width were not used")
        return 0.0, 0.0
    if "lever_arm" not in given:
        return None
    if "width" not in given:
        warnings.append(
            "lever_arm was not used: say which width the signal is (--given width=" + "|".join(WIDTHS) + ")"
        )
        return None
    arm, u = float(given["lever_arm"].value), given["lever_arm"].standard_uncertainty
    return float(np.log(WIDTHS[str(given["width"].value)] * BOLTZMANN_EV / arm)), u / arm


def _enlarged(
    t: FloatArray, log_width: FloatArray, relative_u: FloatArray, fit: ThermalFit, warnings: list[str]
) -> FloatArray:
    """Return the stated uncertainties, enlarged if the points scatter more than they say."""
    base, exponent, log_scale = fit.best
    rest = (log_width - log_scale - np.log(base**exponent + t**exponent) / exponent) / relative_u
    freedom = t.size - 3
    misfit = float(np.sum(rest**2))
    if stats.chi2.sf(misfit, freedom) > CHANCE:
        return relative_u
    birge = float(np.sqrt(misfit / freedom))
    warnings.append(f"the points scatter {birge:.2g} times more than their uncertainties say: enlarged")
    return relative_u * birge


def _judge(t: FloatArray, log_width: FloatArray, fit: ThermalFit, scale: tuple[float, float] | None) -> None:
    """Refuse points that do not follow the law."""
    if fit.relative_error > LARGEST_SCATTER:
        raise Refusal(
            f"the points scatter by {fit.relative_error:.0%} about the curve, "
            f"{LARGEST_SCATTER:.0%} are allowed"
        )
    if scale is None and fit.gain_over_flat < GAIN_OVER_FLAT:
        raise Refusal(
            "the widths hardly grow with the temperature (log-likelihood gain "
            f"{fit.gain_over_flat:.2g} < {GAIN_OVER_FLAT:g})"
        )
    top = HIGHEST_BASE * float(np.max(t))
    if scale is None and fit.mean[0] > top:
        raise Refusal(
            f"no bend below {top:.3g} K: without a lever arm the temperatures must go well above the base"
        )
    base, exponent, log_scale = fit.best
    rest = log_width - log_scale - np.log(base**exponent + t**exponent) / exponent
    p = _misfit_chance(np.log(t), rest)
    if p < CHANCE:
        raise Refusal(f"the points do not follow the law: chance makes such a misfit in {p:.1g} of cases")


def _misfit_chance(x: FloatArray, rest: FloatArray) -> float:
    """Return how often chance lets a cubic explain so much of the residuals."""
    freedom = x.size - 3 - 4
    if freedom < 2:
        return 1.0
    z = (x - np.mean(x)) / np.ptp(x)
    design = np.vander(z, 4)
    after = rest - design @ np.linalg.lstsq(design, rest, rcond=None)[0]
    before, left = float(rest @ rest), float(after @ after)
    if before <= 1e-18 * x.size:
        return 1.0
    return float(stats.f.sf((before - left) / 4.0 / (left / freedom), 4, freedom))


def _base(points: Points, fit: ThermalFit, scale: tuple[float, float] | None) -> Quantity:
    """Return the base temperature or its upper bound.

    Raises:
        Refusal: not even a bound can be told.
    """
    name, u = METHOD.main_quantity, float(np.sqrt(fit.covariance[0, 0]))
    if fit.gain_over_zero > GAIN_OVER_ZERO and u < LARGEST_UNCERTAINTY * fit.mean[0]:
        shared = _shared(fit, scale)
        return Quantity(name, "K", float(fit.mean[0]), u, shared={"lever_arm": shared} if shared else {})
    if fit.upper > HIGHEST_BASE * float(np.max(points.x)):
        raise Refusal("the base temperature is not told: it may lie anywhere up to the highest temperature")
    return Quantity(name, "K", fit.upper, bound="upper")


def _shared(fit: ThermalFit, scale: tuple[float, float] | None) -> float:
    """Return what the given lever arm contributes to the base temperature, signed (K).

    The prior N(ln s, u^2) moves the posterior mean by covariance / u^2 for each unit of
    ln s; a larger lever arm is a smaller ln s.
    """
    if scale is None or scale[1] == 0.0:
        return 0.0
    return -float(fit.covariance[0, 2]) / scale[1]


def _lever_arm(points: Points, fit: ThermalFit, given: Mapping[str, Given]) -> tuple[Quantity, ...]:
    """Return the lever arm that the widths mean, where it is asked for."""
    if "lever_arm" in given and "width" in given:
        return ()
    if points.signal_unit == "K":
        return (Quantity("lever_arm", "eV/V", None, why="the signal is a temperature, not a width"),)
    if "width" not in given:
        why = "it is not known which width the signal is: give width=" + "|".join(WIDTHS)
        return (Quantity("lever_arm", "eV/V", None, why=why),)
    value = WIDTHS[str(given["width"].value)] * BOLTZMANN_EV / float(np.exp(fit.mean[2]))
    relative = float(np.sqrt(fit.covariance[2, 2]))
    if relative > LARGEST_UNCERTAINTY:
        why = f"the lever arm is uncertain by {relative:.0%}, {LARGEST_UNCERTAINTY:.0%} are allowed"
        return (Quantity("lever_arm", "eV/V", None, why=why),)
    return (Quantity("lever_arm", "eV/V", value, relative * value),)
