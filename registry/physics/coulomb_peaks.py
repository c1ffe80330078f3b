"""Where are the Coulomb peaks of a gate sweep, how far apart, how wide, how warm?

Peaks of a current or conductance, of either sign, are found, fitted each with its own
straight background (``peak_windows``), and judged.  The line shape is one of

    single-level   cosh^-2(u/2)        h Gamma << k_B T << level spacing
    multi-level    u / sinh u          level spacing << k_B T << charging energy
    lifetime       single-level folded with a Lorentzian, h Gamma ~ k_B T
    auto           the one that fits best, if one does

(C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646; E. B. Foxman et al., Phys. Rev. B 47
(1993) 10020).  A wrong shape biases widths and temperatures, not positions.

Domain: peaks at least 6 times the white noise of a sample (better 20), at least 4 samples
across, narrower than 45 % of their spacing; 1/f noise (exponent 0.8 to 1.2) at most as
large as the white noise; gain noise of any size.  Measured over 2,000 simulated traces of
five peaks, 12 samples across, 24 to 36 times the white noise, in equal parts (68 % / 95 %
intervals cover, for position, width, addition voltage):

    all                                             71 / 95    71 / 96    71 / 94 %
    single-level, white                             74 / 97    73 / 97    75 / 98 %
    multi-level, 1/f 0.5 times white                69 / 95    70 / 96    72 / 96 %
    single-level, 1/f = white, 3 % gain noise       65 / 93    66 / 94    64 / 92 %

with a bias below 0.05 standard uncertainties and 0.1 % of traces not answered in full.
Featureless traces (white, 1/f, line, cubic, mains sine, telegraph) answered: below
2.5 % of 1,000 each; a random walk without any peak: about 7 %.  Limits: two peaks nearer than
0.75 full widths pass as one; telegraph noise of 4 to 6 times the white noise may pass.
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from registry.physics.catalogue import check_given, facts, word
from registry.physics.lineshapes import (
    MULTI_LEVEL_FWHM,
    SINGLE_LEVEL_FWHM,
    multi_level,
    single_level,
    thermal_lorentzian,
    thermal_lorentzian_fwhm,
)
from registry.physics.peak_finding import find_candidates
from registry.physics.peak_fits import PeakFits, fit_windows, second_peak
from registry.physics.peak_judgement import (
    DECIDING_PEAKS,
    WIDTH_GUESS,
    find_faults,
    find_jumps,
    judge_evidence,
    judge_spacing,
    keep_inside,
)
from registry.physics.peak_quantities import Peaks, peak_quantities
from registry.physics.peak_windows import Model, Windows, cut_windows, middle, some_windows
from registry.physics.result import Curve, Given, Refusal, Result, refused_result
from registry.physics.screening import screen
from registry.physics.sources import source_digest
from registry.physics.sweeps import Trace, pick_trace
from registry.samples import FloatArray, Samples

__all__ = ["run"]

METHOD = facts("coulomb-peaks")

#: Samples below which no peak can be fitted with its noise.
FEWEST_SAMPLES = 20
#: Log-likelihood between the two thermal shapes below which the temperature is not told.
SHAPE_DECIDED = 4.0
#: The line shapes there are.
MODELS: tuple[Model, ...] = ("single-level", "multi-level", "lifetime")
#: The (slower) lifetime shape is tried where the misfit of the thermal ones is this many
#: standard deviations above what chance makes (gain of three parameters: 1.5 +- 1.2 a peak).
MISFIT_SIGMAS = 1.5
CHANCE_GAIN = 1.5


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Fit all Coulomb peaks of a trace.

    Args:
        samples: a trace against a gate voltage; any signal unit, peaks or dips.
        given: ``signal``, ``direction``, ``model``, ``lever_arm``, ``electron_temperature``.

    Returns:
        peak_position, peak_width for each ``peak 1`` ... in order of volts; the mean width;
        addition_voltage for each ``peak 1-2`` ... and over all; addition_energy and
        electron_temperature with a lever arm, lever_arm with a temperature.

    Raises:
        InputError: the samples are no such trace, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    settings["model"] = word(given, "model", "auto")
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        trace = pick_trace(samples, given)
        conditions, warnings = trace.conditions(), trace.warnings
        settings |= {"signal": trace.signal, "direction": trace.direction}
        screen(trace.y, FEWEST_SAMPLES)
        return _answer(trace, given, settings)
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


def _answer(trace: Trace, given: Mapping[str, Given], settings: dict[str, float | str | bool]) -> Result:
    """Find, fit, judge, and word the result."""
    order = slice(None) if trace.direction == "up" else slice(None, None, -1)
    x, y = trace.x[order], trace.y[order]
    warnings = list(trace.warnings)
    found = find_candidates(y)
    step = float(np.median(np.diff(x)))
    common = found.width * step
    judge_spacing(found.index, WIDTH_GUESS * found.width)
    tops, lost = keep_inside(found, x, common, warnings)
    scale = found.sign * float(np.max(found.height))
    wanted = str(settings["model"])
    faint = 0
    while True:
        windows = cut_windows(x / common, y / scale, tops, found.width)
        fits, undecided = _choose_model(windows, wanted)
        bad = find_jumps(y, tops, found.width, scale * fits.parameters[:, 0]) | find_faults(windows, fits)
        if not bad:
            break
        faint += sum(one.faint for one in bad.values())
        features = [k for k, one in bad.items() if not one.faint]
        warnings += [f"peak near {x[tops[k]]:.6g} V left out: {bad[k].why}" for k in features]
        lost = np.append(lost, tops[features])
        tops = np.delete(tops, list(bad))
        if not tops.size:
            raise Refusal(f"no usable peak: {next(iter(bad.values())).why}")
    if faint:
        warnings.append(f"{faint} bumps were left out: too faint for the noise")
    judge_evidence(windows, fits)
    settings["model_used"] = fits.model
    peaks = _in_volts(windows, fits, tops, lost, common)
    judge_spacing(np.round(peaks.position / step).astype(np.intp), float(np.median(peaks.width)) / step)
    quantities = peak_quantities(peaks, fits.model, undecided, given, trace.conditions(), warnings)
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=quantities,
        warnings=tuple(warnings),
        parameters=_parameter_names(fits),
        covariance=_covariance(fits, common, scale),
        curves=_curves(windows, fits, common, scale),
        settings=settings,
    )


def _choose_model(windows: Windows, wanted: str) -> tuple[PeakFits, str | None]:
    """Fit the wanted line shape, or the best of all; say if the thermal one is not told."""
    for model in MODELS:
        if wanted == model:
            return fit_windows(windows, model), None
    some = some_windows(windows, middle(windows.origin.size, DECIDING_PEAKS))
    single = fit_windows(some, "single-level")
    multi = fit_windows(some, "multi-level", single.noise)
    margin = single.log_likelihood(some) - multi.log_likelihood(some)
    best = single if margin >= 0.0 else multi
    undecided = None
    if abs(margin) < SHAPE_DECIDED:
        undecided = (
            f"single-level and multi-level fit alike (log-likelihood {abs(margin):.2g} apart, "
            f"{SHAPE_DECIDED:g} needed): give the model"
        )
    count = some.origin.size
    if float(np.sum(second_peak(some, best)[0])) > CHANCE_GAIN * count + MISFIT_SIGMAS * np.sqrt(
        CHANCE_GAIN * count
    ):
        broad = fit_windows(some, "lifetime", single.noise)
        gain = broad.log_likelihood(some) - best.log_likelihood(some)
        if gain > SHAPE_DECIDED + count and np.all(broad.free_ratio):
            best, undecided = broad, None
    whole = best if count == windows.origin.size else fit_windows(windows, best.model, best.noise)
    return whole, undecided


def _in_volts(
    windows: Windows,
    fits: PeakFits,
    tops: NDArray[np.intp],
    lost: NDArray[np.intp],
    common: float,
) -> Peaks:
    """Turn the fitted parameters into volts."""
    spread = np.sqrt(np.einsum("pii->pi", fits.covariance))
    width, width_u = fits.parameters[:, 2], spread[:, 2]
    thermal, thermal_u = _thermal(fits)
    broken = np.array(
        [np.any((lost > left) & (lost < right)) for left, right in pairwise(tops)],
        dtype=bool,
    )
    used = int(np.count_nonzero(windows.used)) - fits.parameters.size
    return Peaks(
        position=common * (windows.origin + fits.parameters[:, 1]),
        position_u=common * spread[:, 1],
        width=common * width,
        width_u=common * width_u,
        thermal=common * thermal,
        thermal_u=common * thermal_u,
        broken=broken,
        freedom=float(max(used, 1)),
    )


def _thermal(fits: PeakFits) -> tuple[FloatArray, FloatArray]:
    """Return k_B T in common widths and its uncertainty, each (P,)."""
    width = fits.parameters[:, 2]
    if fits.model != "lifetime":
        constant = SINGLE_LEVEL_FWHM if fits.model == "single-level" else MULTI_LEVEL_FWHM
        return width / constant, np.sqrt(fits.covariance[:, 2, 2]) / constant
    g = np.exp(fits.parameters[:, 5])
    factor, by_g = thermal_lorentzian_fwhm(g)
    by = np.stack([1.0 / factor, -width * by_g * g / factor**2], axis=1)
    part = fits.covariance[:, [2, 5], :][:, :, [2, 5]]
    return width / factor, np.sqrt(np.einsum("pi,pij,pj->p", by, part, by))


def _parameter_names(fits: PeakFits) -> tuple[str, ...]:
    """Return the names of all free parameters, peak after peak."""
    names = ("height", "centre", "width", "offset", "slope", "log_ratio")[: fits.parameters.shape[1]]
    return tuple(f"peak {k + 1} {name}" for k in range(fits.parameters.shape[0]) for name in names)


def _covariance(fits: PeakFits, common: float, scale: float) -> FloatArray:
    """Return the covariance of all parameters in SI; different peaks are independent."""
    units = np.array([scale, common, common, scale, scale / common, 1.0])[: fits.parameters.shape[1]]
    blocks = fits.covariance * np.outer(units, units)
    count, size = fits.parameters.shape
    full = np.zeros((count * size, count * size))
    for k in range(count):
        full[k * size : (k + 1) * size, k * size : (k + 1) * size] = blocks[k]
    return full


def _curves(windows: Windows, fits: PeakFits, common: float, scale: float) -> tuple[Curve, ...]:
    """Return every peak on its own background over its window, for drawing."""
    curves = []
    for k, (height, centre, width, offset, slope, *rest) in enumerate(fits.parameters):
        x = np.linspace(windows.x[k].min(), windows.x[k].max(), 121)
        if fits.model == "lifetime":
            g = float(np.exp(rest[0]))
            unit = thermal_lorentzian((x - centre) / width * thermal_lorentzian_fwhm(g)[0], g)
        elif fits.model == "multi-level":
            unit = multi_level((x - centre) / width * MULTI_LEVEL_FWHM)
        else:
            unit = single_level((x - centre) / width * SINGLE_LEVEL_FWHM)
        y = scale * (height * unit + offset + slope * x)
        curves.append(Curve(f"peak {k + 1}", common * (x + windows.origin[k]), y))
    return tuple(curves)
