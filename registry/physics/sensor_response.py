"""How well does a charge sensor answer: where to sit, how steep, how large a step, how noisy?

The sensor's current against one of its gates.  The operating point is where |dI/dV| is
largest (or where it is told); sensitivity is |dI/dV| there.  One more charge on a
neighbouring dot moves the whole curve by ``shift`` volts of that gate, so that

    step = I(V - shift/2) - I(V + shift/2),     snr = |step| / noise,

the noise being that of one sample against its neighbours (Allan deviation), for a reading
as long as a sample.  For a longer reading white noise falls with the square root of its
time but 1/f noise does not, and a sweep cannot tell what the curve and what slow noise
did: then the snr is an upper bound.  A shorter reading needs a time series.

Source: the definitions are common practice, no source.

Domain: a flank whose 10-90 % width takes 15 samples or more and whose steepest place lies
inside the sweep; range of the curve 20 to 200 times the white noise of a sample; 1/f noise
at most as large as the white; noise alike all over the sweep (that which grows with the
slope, as charge noise does, is not modelled).  Measured over 900 simulated traces of 200
samples (a thermal and a broad peak, three peaks, a point contact, two plateaus; range 20,
50 and 200 times the noise, 1/f noise 0, 0.5 and 1 times the white; mean error in standard
uncertainties; 68 % / 95 % cover):

    sensitivity  +0.18  79 / 98     step  +0.28  73 / 97     snr  +0.15  70 / 95 %

The curve has no given form, so these intervals are somewhat wide; the means are above zero
because of two flanks alike the one that noise favours is taken (give ``flank``).
Refused 0.2 %.
Featureless traces answered, of 400 each: white, 1/f, line, glitch, jump 0, mains sine 2,
telegraph 1.  A sine of fewer than 1.8 periods in the sweep, and a charge jump smoothed by a
filter over many samples, look like a flank: limits.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from registry.errors import InputError
from registry.physics import sensor_slope
from registry.physics.catalogue import check_given, facts, number, word
from registry.physics.psplines import curve_posterior
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.screening import screen
from registry.physics.sensor_slope import OperatingPoint, find_operating_point
from registry.physics.sources import source_digest
from registry.physics.sweeps import Trace, pick_trace
from registry.physics.trace_steps import refuse_single_sample_features
from registry.samples import Samples

__all__ = ["run"]

METHOD = facts("sensor-response")

#: Samples a flank and its surroundings need.
FEWEST_SAMPLES = 40
#: Longer sweeps are refused: the time grows with samples, and averaging would change the noise.
MOST_SAMPLES = 4000
#: An integration this close (relative) to a sample's time is as long.
SAME_TIME = 0.01
#: A step smaller than this share of slope x shift means that the shift leaves the flank.
LINEAR_SHARE = 0.8
#: Normal quantile of a one-sided 95 % bound.
ONE_SIDED = 1.645
#: Largest relative uncertainty of step and signal-to-noise.
WIDEST = 0.3

Settings = dict[str, float | str | bool]
Conditions = Mapping[str, str | float]


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Find operating point, sensitivity, step and signal-to-noise of a sensor.

    Args:
        samples: a trace against a gate of the sensor; signal in A, or in S with ``bias``.
        given: ``signal``, ``direction``; ``flank`` (the steeper one); ``operating_point``
            (the steepest place); ``shift`` (for step and snr); ``integration_time`` and
            ``sample_time`` (for snr); ``bias`` (for a conductance).

    Returns:
        sensor_sensitivity, positive, sensor_step, signed, and sensor_snr.  The flank
        (rising or falling) and the integration time are conditions.

    Raises:
        InputError: no such trace, a signal in another unit, or a given that is unknown
            or impossible.
    """
    check_given(given, METHOD)
    for name in ("shift", "bias"):
        if number(given, name) == 0.0:
            raise InputError(
                f"{name}=0", where=f"given {name}", remedy=f"give the volts, or leave {name} out"
            )
    settings: Settings = {name: one.value for name, one in given.items()}
    settings |= {"draws": float(sensor_slope.DRAWS), "seed": float(sensor_slope.SEED)}
    settings |= {"softer": sensor_slope.SOFTER}
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        trace = pick_trace(samples, given)
        conditions, warnings = trace.conditions(), trace.warnings
        settings |= {"signal": trace.signal, "direction": trace.direction}
        _check_unit(trace, given)
        _screen(trace)
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


def _check_unit(trace: Trace, given: Mapping[str, Given]) -> None:
    """Hold the signal's unit against what a sensitivity in S needs."""
    if trace.signal_unit not in ("A", "S"):
        raise InputError(
            f"signal {trace.signal!r} is in {trace.signal_unit!r}, "
            "a current (A) or conductance (S) is wanted",
            where=f"signal {trace.signal}",
            remedy="give unit and factor of the signal in a layout file, or choose another signal",
        )
    if trace.signal_unit == "S" and "bias" not in given:
        raise Refusal("the signal is a conductance, its slope is in S/V: give bias for a current")


def _screen(trace: Trace) -> None:
    """Refuse what can be no sensor's curve."""
    screen(trace.y, FEWEST_SAMPLES)
    if trace.y.size > MOST_SAMPLES:
        raise Refusal(f"{trace.y.size} samples are too many, {MOST_SAMPLES} are allowed: average them first")
    refuse_single_sample_features(trace.y)


def _answer(trace: Trace, given: Mapping[str, Given], settings: Settings) -> Result:
    """Find the operating point and word the result."""
    posterior = curve_posterior(trace.x, trace.y)
    flank = word(given, "flank", "") or None
    found = find_operating_point(posterior, trace.x, trace.y, flank, number(given, "operating_point"))
    conditions = {**trace.conditions(), "flank": "rising" if found.slope > 0.0 else "falling"}
    scale = _Scale(given if trace.signal_unit == "S" else {})
    sensitivity = scale.quantity("sensor_sensitivity", abs(found.slope), found.slope_u, conditions)
    step, warnings = _step(found, given, scale, conditions)
    if trace.signal_unit == "A" and "bias" in given:
        warnings = (*warnings, "the signal is a current: bias was not used")
    snr = _snr(found, given, conditions)
    factors = np.array([1.0, scale.factor])
    width = float(np.ptp(found.curve)) / abs(found.slope)
    tangent_x = found.volts + 0.25 * width * np.array([-1.0, 1.0])
    return Result(
        METHOD.name,
        METHOD.version,
        source_digest(METHOD.name),
        (sensitivity, step, snr),
        warnings=(*trace.warnings, _place_sentence(trace, found), *warnings),
        parameters=("operating_voltage", "slope"),
        covariance=found.covariance * np.outer(factors, factors),
        curves=(
            Curve("curve", found.grid, found.curve),
            Curve("tangent", tangent_x, found.level + found.slope * (tangent_x - found.volts)),
            Curve("operating point", np.array([found.volts]), np.array([found.level])),
        ),
        settings=settings,
    )


class _Scale:
    """Turns the signal's unit into ampere: by the bias of a conductance, else by nothing."""

    def __init__(self, given: Mapping[str, Given]) -> None:
        self.bias = given.get("bias")
        self.factor = 1.0 if self.bias is None else float(self.bias.value)

    def quantity(self, name: str, value: float, u: float, conditions: Conditions) -> Quantity:
        """Return a quantity in its unit; a sensitivity is positive with either bias."""
        factor = abs(self.factor) if name == "sensor_sensitivity" else self.factor
        shared = {}
        if self.bias is not None and self.bias.standard_uncertainty:
            shared = {"bias": factor * value * self.bias.standard_uncertainty / self.factor}
        return Quantity(
            name,
            METHOD.quantities[name],
            factor * value,
            float(np.hypot(factor * u, sum(shared.values()))),
            shared=shared,
            conditions=dict(conditions),
        )


def _step(
    found: OperatingPoint, given: Mapping[str, Given], scale: _Scale, conditions: Conditions
) -> tuple[Quantity, tuple[str, ...]]:
    """Return what one charge changes, and a warning where it leaves the flank."""
    name = "sensor_step"
    if "shift" not in given:
        return _none(name, "no shift was given", conditions), ()
    shift = float(given["shift"].value)
    try:
        change, own = found.change(shift)
    except Refusal as refusal:
        return _none(name, refusal.reason, conditions), ()
    linear = -found.slope * shift
    warnings: tuple[str, ...] = ()
    if abs(change) < LINEAR_SHARE * abs(linear):
        warnings = (
            f"the step is {abs(change / linear):.0%} of slope times shift: the shift leaves the flank",
        )
    if own > WIDEST * abs(change):
        return _none(name, f"the step is uncertain by {own / max(abs(change), 1e-300):.0%}", conditions), ()
    plain = scale.quantity(name, change, own, conditions)
    # d step / d shift: half the slopes at both ends of the shift, from the curve itself.
    ends = np.interp(
        found.volts + 0.5 * shift * np.array([-1.02, -0.98, 0.98, 1.02]), found.grid, found.curve
    )
    by_shift = ((ends[0] - ends[3]) - (ends[1] - ends[2])) / 0.04 / shift
    part = scale.factor * float(by_shift) * given["shift"].standard_uncertainty
    shared = {**plain.shared, "shift": part} if part else plain.shared
    u = float(np.hypot(plain.standard_uncertainty or 0.0, part))
    return Quantity(name, plain.unit, plain.value, u, shared=shared, conditions=dict(conditions)), warnings


def _snr(found: OperatingPoint, given: Mapping[str, Given], conditions: Conditions) -> Quantity:
    """Return step over noise of a reading: of one sample, or an upper bound for a longer one."""
    name = "sensor_snr"
    if "shift" not in given:
        return _none(name, "no shift was given", conditions)
    ratio, conditions, why = _reading(given, conditions)
    if why is not None:
        return _none(name, why, conditions)
    try:
        change, own = found.change(float(given["shift"].value))
    except Refusal as refusal:
        return _none(name, refusal.reason, conditions)
    value = np.sqrt(ratio) * abs(change) / found.noise
    relative = float(np.hypot(own / max(abs(change), 1e-300), found.noise_u / found.noise))
    if relative > WIDEST:
        return _none(name, f"step over noise is uncertain by {relative:.0%}", conditions)
    shift = given["shift"]
    part = float(value * shift.standard_uncertainty / float(shift.value))
    u = float(np.hypot(relative * value, part))
    if ratio > 1.0:
        return Quantity(name, "1", float(value + ONE_SIDED * u), bound="upper", conditions=dict(conditions))
    shared = {"shift": part} if part else {}
    return Quantity(name, "1", float(value), u, shared=shared, conditions=dict(conditions))


def _reading(
    given: Mapping[str, Given], conditions: Conditions
) -> tuple[float, dict[str, str | float], str | None]:
    """Return the reading's time in samples, the conditions it makes, and why it cannot be had."""
    both = [name for name in ("integration_time", "sample_time") if name in given]
    if not both:
        return 1.0, {**conditions, "integration": "one sample"}, None
    if len(both) == 1:
        return 1.0, dict(conditions), "integration_time and sample_time need each other"
    time, sample = (float(given[name].value) for name in both)
    named = {**conditions, "integration_time": time}
    if time < (1.0 - SAME_TIME) * sample:
        return (
            1.0,
            named,
            f"a reading of {time:g} s is shorter than a sample ({sample:g} s): take a time series",
        )
    return (1.0 if time < (1.0 + SAME_TIME) * sample else time / sample), named, None


def _place_sentence(trace: Trace, found: OperatingPoint) -> str:
    """Return where the operating point is, which is no quantity of the list."""
    return f"operating point: {trace.axis} = {found.volts:.6g} V, standard uncertainty {found.volts_u:.2g} V"


def _none(name: str, why: str, conditions: Conditions) -> Quantity:
    """Return a quantity without a value."""
    return Quantity(name, METHOD.quantities[name], None, why=why, conditions=dict(conditions))
