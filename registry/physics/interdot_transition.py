"""Where do two dots share an electron, seen by a charge sensor, and how strongly are they coupled?

A trace along a detuning axis in gate volts V,

    y = a + b V + (step/2) p + kink (V - V_0) p,     p = (e / Omega) tanh(Omega / (2 k_B T)),
    e = lever_arm (V - V_0),     Omega = sqrt(e**2 + 4 t**2),

with t the tunnel coupling (gap 2 t) and the lever arm the differential one along the
sweep (eV/V).  b is the direct pull of the gate on the sensor; the kink is the change of
the sensor's slope once the charge has moved it along its flank (back-action).
Source: L. DiCarlo et al., Phys. Rev. Lett. 92 (2004) 226801.

Domain: one transition, its 10-90 % width 5 to 30 % of the sweep, step at least 15 times the
white noise of a sample, 1/f noise (exponent near 1) at most as large as the white.  Measured
on traces of 200 samples made by diagonalising the Hamiltonian, width 15 % of the sweep, step
30 times the noise, 1/f noise 0, 0.5 and 1 times the white in equal parts, lever arm and
temperature given exactly (mean error in standard uncertainties; 68 % / 95 % cover):

    2t/k_BT  traces  position          step              tunnel coupling
    3        600     +0.03  68 / 95    +0.08  69 / 94    +0.15  71 / 95  (6 % of them bounds)
    5        1,000   +0.03  70 / 95    +0.13  70 / 94    +0.14  69 / 95
    12       600     +0.02  69 / 95    +0.14  70 / 94    +0.15  71 / 94
    0        600     +0.05  72 / 95    +0.69  63 / 97    bounds, which all hold; 0.5 % get a value

Refused 0.2 %.  The means lie above 0.1 because the gap's likelihood is skewed.  Where the
width is thermal the step comes out too large by 0.7 standard uncertainties, because a
gap that is not there cannot be negative either.  At 15 times the noise 2 % are refused
and the coupling comes out 0.3 uncertainties too large (67 / 94 %), at 10 times a quarter is refused.
With only lever arm or temperature given the shape must tell both: hardly below a step of
300 times the noise (there, at 2t = 3 k_BT, three of four have values, 75 / 97 %, temperature
79 / 99 %); below it nearly all answers are bounds (97 to 99 % hold), and the step's interval
covers 61 to 65 / 90 %.
Featureless traces answered, of 250 each: white, 1/f, line, cubic, glitch, jump, telegraph 0,
mains sine 2.  A charge jump smoothed by a filter over several samples looks like a
transition: limit.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from registry.physics.catalogue import check_given, facts
from registry.physics.interdot_fit import GapRow, Node, design_of, fit_gaps, fit_ungapped
from registry.physics.interdot_judgement import FEWEST_SAMPLES, judge, judge_start
from registry.physics.interdot_quantities import (
    Findings,
    Mean,
    mean_of,
    quantities,
    shared_parts,
    width_prior,
)
from registry.physics.noise import profile_log_likelihood
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.screening import screen
from registry.physics.sources import source_digest
from registry.physics.step_fit import fit_step
from registry.physics.sweeps import Trace, pick_trace
from registry.samples import FloatArray, Samples

__all__ = ["run"]

METHOD = facts("interdot-transition")

#: Log-likelihood that a free width gains over the given one from which the given are wrong.
CONTRADICTED = 8.0

Settings = dict[str, float | str | bool]


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Fit one interdot transition.

    Args:
        samples: a trace along detuning in gate volts; any signal unit, any sign of the step.
        given: ``signal``, ``direction``, ``lever_arm``, ``electron_temperature``.

    Returns:
        transition_voltage, sensor_step (for a signal in A), tunnel_coupling (a value or an
        upper bound) where lever arm, temperature or both are given, and electron_temperature
        or lever_arm where only the other one is.

    Raises:
        InputError: the samples are no such trace, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: Settings = {name: one.value for name, one in given.items()}
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        trace = pick_trace(samples, given)
        conditions, warnings = trace.conditions(), trace.warnings
        settings |= {"signal": trace.signal, "direction": trace.direction, "model": "two-level"}
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


def _answer(trace: Trace, given: Mapping[str, Given], settings: Settings) -> Result:
    """Fit, judge, and word the result."""
    middle = 0.5 * float(trace.x[0] + trace.x[-1])
    half_span = 0.5 * float(abs(trace.x[-1] - trace.x[0]))
    z, scale = (trace.x - middle) / half_span, float(np.ptp(trace.y))
    found, warnings = _fit(z, trace.y / scale, given, half_span)
    conditions = trace.conditions()
    learnt, more = quantities(found, given, conditions)
    position, step = (_mean(found, index) for index in (4, 2))
    position_u, position_parts = shared_parts(position, given, {}, found.prior)
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=(
            Quantity(
                "transition_voltage",
                "V",
                middle + half_span * position.value,
                half_span * position_u,
                degrees_of_freedom=found.freedom,
                shared={name: half_span * part for name, part in position_parts.items()},
                conditions=conditions,
            ),
            _step_quantity(trace, step, 2.0 * scale, found, given),
            *learnt,
        ),
        warnings=(*trace.warnings, *warnings, *more),
        parameters=("offset", "slope", "half_step", "kink", "centre", "log_width"),
        covariance=_covariance(found.row.best, half_span, scale),
        curves=_curves(found.row, middle, half_span, scale, z.size),
        settings=settings,
    )


def _fit(
    z: FloatArray, y: FloatArray, given: Mapping[str, Given], half_span: float
) -> tuple[Findings, tuple[str, ...]]:
    """Fit and judge on the reduced axis; hold the given width against the trace."""
    step = fit_step(z, y)
    judge_start(z, step)
    prior = width_prior(given, half_span)
    row, ungapped = fit_gaps(z, y, step, prior)
    contradiction = None
    if prior is not None:
        free = fit_ungapped(z, y, step)
        freely, told_so = (profile_log_likelihood(y, design_of(n, z)) for n in (free, row.best))
        if free.parameters[5] < prior.mean and freely - told_so > CONTRADICTED:
            width, told = (half_span * float(np.exp(w)) for w in (free.parameters[5], prior.mean))
            contradiction = (
                f"the transition is narrower (k_B T of {width:.3g} V at most) than lever_arm and "
                f"electron_temperature allow ({told:.3g} V): check them"
            )
            (row, ungapped), prior = fit_gaps(z, y, step, None), None
    warnings = judge(z, y, row)
    return Findings(row, ungapped, prior, half_span, float(max(z.size - 7, 1)), contradiction), warnings


def _mean(found: Findings, index: int) -> Mean:
    """Return the mean of one of the six parameters over the row."""
    values = np.array([node.parameters[index] for node in found.row.nodes])
    gradient = np.zeros((values.size, 6))
    gradient[:, index] = 1.0
    return mean_of(found.row, values, gradient, found.prior)


def _step_quantity(
    trace: Trace, step: Mean, scale: float, found: Findings, given: Mapping[str, Given]
) -> Quantity:
    """Return sensor_step, which is kept in ampere, for a signal in ampere only."""
    unit, conditions = METHOD.quantities["sensor_step"], trace.conditions()
    if trace.signal_unit != unit:
        why = f"the signal is in {trace.signal_unit}, sensor_step is kept in {unit}"
        return Quantity("sensor_step", unit, None, why=why, conditions=conditions)
    u, parts = shared_parts(step, given, {}, found.prior)
    return Quantity(
        "sensor_step",
        unit,
        scale * step.value,
        scale * u,
        degrees_of_freedom=found.freedom,
        shared={name: scale * part for name, part in parts.items()},
        conditions=conditions,
    )


def _covariance(node: Node, half_span: float, scale: float) -> FloatArray:
    """Return the covariance of the likeliest fit at its gap, in SI."""
    factors = np.array([scale, scale / half_span, scale, scale / half_span, half_span, 1.0])
    covariance: FloatArray = node.covariance * np.outer(factors, factors)
    return covariance


def _curves(row: GapRow, middle: float, half_span: float, scale: float, samples: int) -> tuple[Curve, Curve]:
    """Return the likeliest fit and its background, for drawing."""
    grid = np.linspace(-1.0, 1.0, max(401, samples))
    a, b, *_ = row.best.parameters
    volts = middle + half_span * grid
    return (
        Curve("fit", volts, scale * row.best.model(grid)),
        Curve("background", volts, scale * (a + b * grid)),
    )
