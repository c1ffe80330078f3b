"""Where does a dot's level cross its lead, seen by a charge sensor, and how warm is the lead?

A Fermi step on a straight background,

    y = a + b V + step / (1 + exp(-(V - V_0) / w)),     w = k_B T / (lever arm),

fitted by generalised least squares under white + 1/f noise.  Valid for h Gamma << k_B T;
with the spin degeneracy of the first electron V_0 lies k_B T ln 2 beside the level
(C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646).

Domain: one step at least 5 times the white noise of a sample (better 20), 4 thermal
widths inside the sweep and narrower than 45 % of it, 1/f noise (exponent 0.8 to 1.2) at
most as large as the white noise.  Measured over 2,000 simulated traces of 200 samples,
step 30 times the white noise, 1/f noise 0, 0.5 or 1 times the white noise in equal parts
(68 % / 95 % intervals cover, for position, step, temperature):

    all      68 / 93    72 / 95    70 / 94 %,  bias below 0.08 standard uncertainties
    0        76 / 98    76 / 98    73 / 97 %
    0.5      65 / 92    70 / 93    70 / 93 %
    1        67 / 94    71 / 94    70 / 94 %

Outside: at 10 times the noise 64 / 92 %, the width too small by 0.13 standard
uncertainties; with an exponent of 1.3 62 / 90 %.  Good traces refused: 0.3 %.  Featureless
traces (white, 1/f, line, cubic, mains sine, telegraph) answered: below
2.5 % of 1,000 each (0 to 0.2 % of 600).
A single charge jump smoothed by a filter over several samples looks like a step: limit.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from registry.physics.catalogue import check_given, facts
from registry.physics.lineshapes import fermi_step
from registry.physics.noise import profile_log_likelihood
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.screening import screen
from registry.physics.sources import source_digest
from registry.physics.step_fit import StepFit, candidates, fit_step, gains, jacobian_of, step_design
from registry.physics.sweeps import Trace, pick_trace
from registry.physics.thermal_width import Estimate, thermal_quantities
from registry.samples import FloatArray, Samples

__all__ = ["run"]

METHOD = facts("dot-transition")

#: Samples below which neither noise nor step can be told.
FEWEST_SAMPLES = 20
#: Log-likelihood a step must gain over a straight line, and over a cubic.
GAIN_OVER_LINE = 8.0
GAIN_OVER_CUBIC = 4.0
#: Log-likelihood a second step must gain to count as one, and its least relative size.
GAIN_OF_SECOND = 10.0
SECOND_SIZE = 0.2
#: The step must be this many times its standard uncertainty, and its sample-to-sample noise.
STEP_SIGNIFICANCE = 5.0
LEAST_SNR = 5.0
#: The thermal width w in sampling steps (narrower: a jump between two samples), ...
NARROWEST = 0.4
#: ... and the 10-90 % width (4.39 w) as a share of the swept range at most.
WIDEST = 0.45
#: Distance of the step from either end of the sweep, in thermal widths w.
INSIDE = 4.0
#: Largest relative uncertainty of the width.
WIDTH_UNCERTAINTY = 0.3


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Fit one charge-sensor step.

    Args:
        samples: a trace against a gate voltage; any signal unit, any sign of the step.
        given: ``signal``, ``direction``, ``lever_arm``, ``electron_temperature``.

    Returns:
        transition_voltage, sensor_step (for a signal in A), and electron_temperature or
        lever_arm where the other one is given.

    Raises:
        InputError: the samples are no such trace, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        trace = pick_trace(samples, given)
        conditions, warnings = trace.conditions(), trace.warnings
        settings |= {"signal": trace.signal, "direction": trace.direction, "model": "fermi-step"}
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
    """Fit, judge, and word the result."""
    middle = 0.5 * float(trace.x[0] + trace.x[-1])
    half_span = 0.5 * float(abs(trace.x[-1] - trace.x[0]))
    z = (trace.x - middle) / half_span
    scale = float(np.ptp(trace.y))
    fit = fit_step(z, trace.y / scale)
    warnings = (*trace.warnings, *_judge(z, trace.y / scale, fit))
    to_volts = np.array([1.0, 1.0 / half_span, 1.0, half_span, 1.0])
    factors = to_volts * np.array([scale, scale, scale, 1.0, 1.0])
    covariance = fit.covariance * np.outer(factors, factors)
    spread = np.sqrt(np.diag(covariance))
    freedom = float(trace.x.size - fit.parameters.size)
    width = float(np.exp(fit.parameters[4])) * half_span
    conditions = trace.conditions()
    if "lever_arm" in given and "electron_temperature" in given:
        warnings += ("lever_arm and electron_temperature are both given: the temperature was not used",)
    quantities = (
        Quantity(
            "transition_voltage",
            "V",
            float(middle + half_span * fit.parameters[3]),
            float(spread[3]),
            degrees_of_freedom=freedom,
            conditions=conditions,
        ),
        _step_quantity(trace, scale * float(fit.parameters[2]), float(spread[2]), freedom),
        *thermal_quantities(Estimate(width, width * float(spread[4]), freedom), None, given, conditions),
    )
    grid = np.linspace(-1.0, 1.0, max(401, z.size))
    line = fit.parameters[0] + fit.parameters[1] * grid
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=quantities,
        warnings=warnings,
        parameters=("offset", "slope", "step", "centre", "log_width"),
        covariance=covariance,
        curves=(
            Curve("fit", middle + half_span * grid, scale * fit.model(grid)),
            Curve("background", middle + half_span * grid, scale * line),
        ),
        settings=settings,
    )


def _step_quantity(trace: Trace, step: float, u: float, freedom: float) -> Quantity:
    """Return sensor_step, which is kept in ampere, for a signal in ampere only."""
    unit = METHOD.quantities["sensor_step"]
    conditions = trace.conditions()
    if trace.signal_unit != unit:
        why = f"the signal is in {trace.signal_unit}, sensor_step is kept in {unit}"
        return Quantity("sensor_step", unit, None, why=why, conditions=conditions)
    return Quantity("sensor_step", unit, step, u, degrees_of_freedom=freedom, conditions=conditions)


def _judge(z: FloatArray, y: FloatArray, fit: StepFit) -> tuple[str, ...]:
    """Refuse a step that is none; return warnings about one that is."""
    _judge_step(z, y, fit)
    _judge_width(z, fit)
    return _judge_second(z, y, fit)


def _judge_step(z: FloatArray, y: FloatArray, fit: StepFit) -> None:
    """Refuse what is no step: a line or a cubic does as well, or noise does."""
    step, u = abs(float(fit.parameters[2])), float(np.sqrt(fit.covariance[2, 2]))
    snr = step / fit.noise.white_rms()
    if snr < LEAST_SNR:
        raise Refusal(f"the step is only {snr:.2g} times the noise of a sample, {LEAST_SNR:g} are needed")
    if step < STEP_SIGNIFICANCE * u:
        raise Refusal(f"the step is only {step / u:.2g} times its uncertainty, {STEP_SIGNIFICANCE:g} needed")
    likelihood = profile_log_likelihood(y, step_design(z, fit))
    for degree, wanted, curve in ((1, GAIN_OVER_LINE, "straight line"), (3, GAIN_OVER_CUBIC, "cubic")):
        gain = likelihood - profile_log_likelihood(y, np.vander(z, degree + 1))
        if gain < wanted:
            raise Refusal(
                f"a {curve} explains the trace (log-likelihood gain of a step {gain:.2g} < {wanted:g})"
            )


def _judge_width(z: FloatArray, fit: StepFit) -> None:
    """Refuse a step too narrow, too wide, too near an end, or of unknown width."""
    width, centre = float(np.exp(fit.parameters[4])), float(fit.parameters[3])
    relative = float(np.sqrt(fit.covariance[4, 4]))
    step = 2.0 / (z.size - 1)
    if width < NARROWEST * step:
        raise Refusal(
            f"the step is a jump: thermal width {width / step:.2g} sampling steps, {NARROWEST:g} needed "
            "(a charge jump, or too coarse a sweep)"
        )
    if 4.394 * width > WIDEST * 2.0:
        raise Refusal(f"the step fills {4.394 * width / 2.0:.0%} of the sweep, {WIDEST:.0%} are allowed")
    if 1.0 - abs(centre) < INSIDE * width:
        raise Refusal(
            f"the step lies {max(1.0 - abs(centre), 0.0) / width:.2g} widths inside, {INSIDE:g} needed"
        )
    if relative > WIDTH_UNCERTAINTY:
        raise Refusal(f"the width is uncertain by {relative:.0%}, {WIDTH_UNCERTAINTY:.0%} are allowed")


def _judge_second(z: FloatArray, y: FloatArray, fit: StepFit) -> tuple[str, ...]:
    """Refuse a trace with a second step of comparable size; warn of a small one."""
    known = jacobian_of(fit.parameters, z)
    rest = y - fit.model(z)
    centre, width = candidates(z)
    shapes = fermi_step((z[:, None] - centre) / width)
    amplitude, gain, _ = gains(z, rest, shapes, fit.noise, known)
    best = int(np.argmax(gain))
    wider = np.column_stack([known, shapes[:, best]])
    true_gain = profile_log_likelihood(rest, wider) - profile_log_likelihood(rest, known)
    if true_gain < GAIN_OF_SECOND:
        return ()
    share = abs(float(amplitude[best] / fit.parameters[2]))
    if share > SECOND_SIZE:
        raise Refusal(f"more than one step: a second one of {share:.0%} of the first")
    return (f"a second, small step ({share:.0%} of the first) is in the trace",)
