"""How strong is the charge noise of a dot, and how does it fall with frequency?

A sensor or dot current against time has a Welch spectrum (``welch``) that is fitted by a
power law and a white floor, a Lorentzian added where two-level switching asks for it
(``spectrum_fit``).  In energy, with the lever arm and the slope of the signal,

    S_eps(f) = lever_arm^2 S_I(f) / (dI/dV)^2      (eV^2/Hz, one-sided),
    charge_noise_amplitude = sqrt(power-law part of S_eps at 1 Hz)      (eV/sqrt Hz),
    S_eps proportional to f^-noise_exponent

(E. J. Connors et al., Phys. Rev. B 100 (2019) 165305).  The white floor is not the
device's and not in the amplitude; noise of the amplifier that is itself 1/f is: measure it
off the slope and compare.

Domain: at least 512 evenly spaced samples (4,096 better), 1 Hz inside the spectrum, exponent
0.7 to 1.5, 1/f noise above the floor over a good part of the band.  Measured over 540
simulated series of 4,096 samples at 100 Hz (1 pA/sqrt Hz at 1 Hz; exponents 0.8, 1, 1.3;
white noise 0, 1, 3 pA a sample; time-domain synthesis), 68 % / 95 % intervals cover

    amplitude  68 / 94 %,   exponent  63 / 92 %      all nine cases together.

The exponent's intervals are too narrow (57 / 85 %) where the floor only just shows at the
upper end of the band, and it is then too small by up to 0.7 standard uncertainties; without
a floor too large by 0.5: band and floor cannot be told apart better.  Good series refused:
0.2 %.  Of 400 series each that hold no 1/f noise a value got: white, ramp, cubic, glitch,
mains 0 %; one step 0.3 %; random walk 1.3 %; telegraph noise 1.8 %.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from scipy import stats

from registry.errors import InputError
from registry.physics.catalogue import check_given, facts, number, word
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.screening import screen
from registry.physics.sources import source_digest
from registry.physics.spectrum_fit import (
    PowerLaw,
    Switching,
    fit_power_law,
    fit_switching,
    misfit_chance,
    pool,
    white_bound,
    white_gain,
)
from registry.physics.time_series import TimeSeries, pick_time_series
from registry.physics.welch import BIN_CORRELATION, Flags, Spectrum, find_lines, welch_spectrum
from registry.samples import Samples

__all__ = ["run"]

METHOD = facts("noise-spectrum")

#: Samples below which no spectrum with its uncertainty can be had.
FEWEST_SAMPLES = 512
#: The series is cut into segments of this share of it, 15 with their overlap; at least
#: so many are needed.
SEGMENT_SHARE = 8
FEWEST_SEGMENTS = 7
#: Ordinates needed between the limits of frequency.
FEWEST_ORDINATES = 24
#: Share of ordinates that lines may take.
LINES_ALLOWED = 0.25
#: 1 Hz may lie outside the spectrum by this factor.
OUTSIDE = 3.0
#: Log-likelihood a power law must gain over white noise for a value.
GAIN_OVER_WHITE = 6.0
#: Log-likelihood a Lorentzian must gain to be switching.
GAIN_OF_SWITCHING = 8.0
#: Exponents outside are drift, jumps or slow switching, not charge noise of the 1/f kind.
LOWEST_EXPONENT, HIGHEST_EXPONENT = 0.4, 1.7
#: Largest relative uncertainty of the amplitude, and largest uncertainty of the exponent.
LARGEST_UNCERTAINTY, LARGEST_EXPONENT_U = 0.3, 0.3
#: A segment or a misfit is odd if chance makes it this rarely in a whole series.
CHANCE = 1e-4


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Fit the spectrum of one time series.

    Args:
        samples: one axis, time in s, evenly spaced; the signal in A, eV, or V.
        given: ``signal``, ``lever_arm``, ``sensor_sensitivity`` (for a signal in A),
            ``volts=gate`` (a signal in V is gate volts, as of a tracked peak),
            ``segment``, ``lowest_frequency``, ``highest_frequency``.

    Returns:
        charge_noise_amplitude (a value or an upper bound) and noise_exponent.

    Raises:
        InputError: the samples are no such series, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    if number(given, "sensor_sensitivity") == 0.0:
        raise InputError(
            "sensor_sensitivity=0 turns no signal into energy",
            where=f"given to {METHOD.name}",
            remedy="give the slope dI/dV of the operating point, of either sign",
        )
    warnings: list[str] = []
    try:
        series = pick_time_series(samples, given)
        warnings += series.warnings
        settings["signal"] = series.signal
        screen(series.y, FEWEST_SAMPLES)
        return _answer(series, given, settings, warnings)
    except Refusal as refusal:
        return refused_result(
            METHOD.name,
            METHOD.version,
            source_digest(METHOD.name),
            METHOD.quantities,
            refusal.reason,
            warnings=tuple(warnings),
            settings=settings,
        )


def _answer(
    series: TimeSeries,
    given: Mapping[str, Given],
    settings: dict[str, float | str | bool],
    warnings: list[str],
) -> Result:
    """Take the spectrum, fit, judge, and word the result."""
    scale = float(np.std(series.y))
    whole = _spectrum(series, scale, given, settings)
    lines = find_lines(whole)
    warnings += _describe_lines(whole, lines, scale, series.unit)
    spectrum = whole.part(~lines)
    pooled = pool(spectrum)
    fit, switching = _fit(spectrum)
    _judge_segments(spectrum, fit)
    _judge_misfit(spectrum, fit)
    if switching is not None:
        warnings.append(
            f"two-level switching: corner at {switching.corner:.3g} Hz, rms "
            f"{scale * switching.rms():.3g} {series.unit}; it is not in the amplitude"
        )
    told = _judge_power_law(spectrum, fit, switching)
    quantities = _quantities(series, scale, spectrum, fit, told, given)
    freedom = 2.0 * float(np.sum(pooled.weight))
    warnings.append(
        f"spectrum of {whole.single.shape[1]} segments, {whole.nu:.3g} degrees of freedom an ordinate, "
        f"{freedom:.3g} in all"
    )
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=quantities,
        warnings=tuple(warnings),
        parameters=("log_density_at_1_hz", "exponent"),
        covariance=fit.covariance,
        curves=(
            Curve("spectrum", whole.f, scale**2 * whole.density),
            Curve("fit", whole.f, scale**2 * fit.density(whole.f)),
        ),
        settings=settings,
    )


def _spectrum(
    series: TimeSeries, scale: float, given: Mapping[str, Given], settings: dict[str, float | str | bool]
) -> Spectrum:
    """Return the spectrum between the limits of frequency, in units of ``scale`` squared a Hz."""
    n = series.y.size
    asked = number(given, "segment")
    length = n // SEGMENT_SHARE if asked is None else round(asked / series.interval)
    segments = (n - length) // max(length // 2, 1) + 1
    if length < 2 * FEWEST_ORDINATES or segments < FEWEST_SEGMENTS:
        raise Refusal(
            f"{segments} segments of {length} samples make no spectrum: {FEWEST_SEGMENTS} segments of "
            f"{2 * FEWEST_ORDINATES} samples are needed"
        )
    settings |= {"window": "hann", "overlap": 0.5, "samples_a_segment": float(length)}
    whole = welch_spectrum((series.y - np.mean(series.y)) / scale, series.interval, length)
    low = number(given, "lowest_frequency") or 0.0
    high = number(given, "highest_frequency") or np.inf
    spectrum = whole.part((whole.f >= low) & (whole.f <= high))
    if spectrum.f.size < FEWEST_ORDINATES:
        raise Refusal(f"{spectrum.f.size} ordinates are too few, {FEWEST_ORDINATES} are needed")
    if not spectrum.f[0] / OUTSIDE < 1.0 < spectrum.f[-1] * OUTSIDE:
        raise Refusal(
            f"the spectrum reaches from {spectrum.f[0]:.3g} to {spectrum.f[-1]:.3g} Hz: the amplitude "
            "at 1 Hz would be a guess"
        )
    if np.any(spectrum.density <= 0.0):
        raise Refusal("the spectrum is empty at some frequencies: the signal was made or filtered digitally")
    return spectrum


def _describe_lines(spectrum: Spectrum, lines: Flags, scale: float, unit: str) -> list[str]:
    """Name the lines left out; refuse a spectrum full of them."""
    if np.mean(lines) > LINES_ALLOWED or np.mean(lines[:FEWEST_ORDINATES]) > 0.5:
        raise Refusal(f"narrow lines take {np.mean(lines):.0%} of the spectrum")
    edges = np.flatnonzero(np.diff(np.concatenate(([False], lines, [False])).astype(np.int8)))
    width = float(np.median(np.diff(spectrum.f)))
    found = []
    for start, stop in zip(edges[::2], edges[1::2], strict=True):
        top = start + int(np.argmax(spectrum.density[start:stop]))
        rms = scale * float(np.sqrt(np.sum(spectrum.density[start:stop]) * width))
        found.append((rms, f"{spectrum.f[top]:.4g} Hz ({rms:.2g} {unit} rms)"))
    if not found:
        return []
    found.sort(reverse=True)
    more = f" and {len(found) - 6} more" if len(found) > 6 else ""
    return [f"lines left out at {', '.join(text for _, text in found[:6])}{more}"]


def _fit(spectrum: Spectrum) -> tuple[PowerLaw, Switching | None]:
    """Fit power law and floor, and a Lorentzian if that explains much more."""
    pooled = pool(spectrum)
    fit = fit_power_law(pooled)
    other = fit_switching(pooled, fit)
    if other is None or other.log_likelihood - fit.log_likelihood < GAIN_OF_SWITCHING:
        return fit, None
    return other, other


def _judge_segments(spectrum: Spectrum, fit: PowerLaw) -> None:
    """Refuse a series whose noise is another one in one part of it."""
    quotient = spectrum.single / fit.density(spectrum.f)[:, None]
    edges = [0, min(8, spectrum.f.size // 3), min(max(64, spectrum.f.size // 8), 2 * spectrum.f.size // 3)]
    counts = np.diff([*edges, spectrum.f.size])
    power = np.add.reduceat(quotient, edges, axis=0) / counts[:, None]
    freedom = (2.0 * counts / BIN_CORRELATION)[:, None]
    chance = stats.chi2.sf(power * freedom, freedom) * power.size
    band, segment = np.unravel_index(int(np.argmin(chance)), chance.shape)
    if chance[band, segment] < CHANCE:
        raise Refusal(
            f"the noise is not the same all the time: {power[band, segment]:.2g} times the mean in part "
            f"{segment + 1} of {power.shape[1]} (a jump, a glitch, a disturbance); use the rest of it"
        )


def _judge_misfit(spectrum: Spectrum, fit: PowerLaw) -> None:
    """Refuse a spectrum of another shape."""
    chance = misfit_chance(spectrum, fit, 5 if isinstance(fit, Switching) else 3)
    if chance < CHANCE:
        raise Refusal(
            f"the spectrum is no power law and floor (chance makes such a misfit in {chance:.1g} of cases): "
            "if a filter bends it, give highest_frequency"
        )


def _judge_power_law(spectrum: Spectrum, fit: PowerLaw, switching: Switching | None) -> str | None:
    """Return None if the power law is told, else why only a bound is.

    Raises:
        Refusal: not even a bound is sound.
    """
    gain = white_gain(pool(spectrum), fit)
    if switching is None and gain < GAIN_OVER_WHITE:
        return (
            f"no power law stands out of white noise (log-likelihood gain {gain:.2g} < {GAIN_OVER_WHITE:g})"
        )
    exponent, u = float(fit.mean[1]), float(np.sqrt(fit.covariance[1, 1]))
    amplitude_u = 0.5 * float(np.sqrt(fit.covariance[0, 0]))
    if switching is not None and (amplitude_u > LARGEST_UNCERTAINTY or u > LARGEST_EXPONENT_U):
        raise Refusal(
            f"two-level switching (corner {switching.corner:.3g} Hz) hides the noise beside it: its "
            f"amplitude is uncertain by {amplitude_u:.0%}"
        )
    if not LOWEST_EXPONENT <= exponent <= HIGHEST_EXPONENT:
        raise Refusal(
            f"the spectrum falls with the exponent {exponent:.2f} ± {u:.2f}, outside {LOWEST_EXPONENT:g} to "
            f"{HIGHEST_EXPONENT:g}: drift, a jump or slow switching rather than 1/f noise"
        )
    if amplitude_u > LARGEST_UNCERTAINTY or u > LARGEST_EXPONENT_U or fit.at_edge:
        raise Refusal(
            f"amplitude and exponent are uncertain by {amplitude_u:.0%} and {u:.2g}; "
            f"{LARGEST_UNCERTAINTY:.0%} and {LARGEST_EXPONENT_U:g} are allowed: measure longer"
        )
    return None


def _quantities(
    series: TimeSeries,
    scale: float,
    spectrum: Spectrum,
    fit: PowerLaw,
    told: str | None,
    given: Mapping[str, Given],
) -> tuple[Quantity, ...]:
    """Return amplitude and exponent in the units they are kept in.

    Raises:
        Refusal: the signal cannot be turned into energy; says the noise in its own unit.
    """
    pooled = pool(spectrum)
    if told is None:
        own = scale * float(np.exp(0.5 * fit.mean[0]))
        relative = 0.5 * float(np.sqrt(fit.covariance[0, 0]))
        exponent, exponent_u = float(fit.mean[1]), float(np.sqrt(fit.covariance[1, 1]))
        text = f"{own:.3g} {series.unit}/√Hz at 1 Hz (± {relative:.1%}), "
        text += f"exponent {exponent:.3g} ± {exponent_u:.2g}"
    else:
        own = scale * float(np.sqrt(white_bound(pooled)))
        text = f"below {own:.3g} {series.unit}/√Hz at 1 Hz (95 %, 1/f)"
    factor, parts = _energy(series, given, text)
    name, unit = METHOD.main_quantity, METHOD.quantities[METHOD.main_quantity]
    if told is not None:
        enlarged = own * factor * (1.0 + 1.645 * math.hypot(*parts.values()))
        return (
            Quantity(name, unit, enlarged, bound="upper"),
            Quantity("noise_exponent", "1", None, why=told),
        )
    value = own * factor
    shared = {source: value * part for source, part in parts.items() if part}
    u = float(np.sqrt((value * relative) ** 2 + sum(part**2 for part in shared.values())))
    freedom = 2.0 * float(np.sum(pooled.weight))
    return (
        Quantity(name, unit, value, u, degrees_of_freedom=freedom, shared=shared),
        Quantity("noise_exponent", "1", exponent, exponent_u, degrees_of_freedom=freedom),
    )


def _energy(series: TimeSeries, given: Mapping[str, Given], text: str) -> tuple[float, dict[str, float]]:
    """Return energy a signal unit, and the signed relative uncertainty each given brings.

    Raises:
        Refusal: something needed was not given.
    """
    if series.unit == "eV":
        return 1.0, {}
    if series.unit == "V" and word(given, "volts", "") != "gate":
        raise Refusal(
            "a signal in V is turned into energy only if it is gate volts (a tracked peak): give "
            f"volts=gate, or turn an amplifier's volts into A in a layout; in its own unit: {text}"
        )
    if series.unit not in ("A", "V"):
        raise Refusal(
            f"a signal in {series.unit} is not turned into energy; in its own unit the noise is {text}"
        )
    wanted = ["lever_arm", "sensor_sensitivity"] if series.unit == "A" else ["lever_arm"]
    missing = [name for name in wanted if name not in given]
    if missing:
        raise Refusal(f"no {' and no '.join(missing)} was given; in its own unit the noise is {text}")
    arm = given["lever_arm"]
    factor, parts = float(arm.value), {"lever_arm": arm.standard_uncertainty / float(arm.value)}
    if series.unit == "A":
        slope = given["sensor_sensitivity"]
        factor /= abs(float(slope.value))
        parts["sensor_sensitivity"] = -slope.standard_uncertainty / float(slope.value)
    return factor, parts
