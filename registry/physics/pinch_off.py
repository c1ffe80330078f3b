"""What does a turn-on trace (current or conductance against one gate) say of the gate?

Method ``pinch-off``, version 1.  Electrons or holes, accumulation or depletion gates,
signals of either sign.  Noise is white plus 1/f; the curve is not given a form
(``psplines``), because a wrong form is far worse than none.

Domain, and what was measured in it on simulated truth (linear, mobility-degraded,
saturating, one- and three-step point-contact shapes; 200 to 800 samples; rise over white
noise 20 to 300; 1/f noise from none to as large as the white; 10-90 % rise from some 10
samples): over 2,000 traces 0.4 % are refused; the threshold has a mean error of -0.03 standard
uncertainties and its 95 % interval covers 97 %, the slope -0.06 and 98 %, the pinch-off
voltage 0.00 and 94 %.  False answers on 400 traces each: white, 1/f, line 0 %, cubic 0.5 %,
sine 0.3 %, one-sample step 1.8 %.
Between a rise over noise of 12 and 20 about one trace in twenty is refused, at 8 nearly
half; what is answered stays covered.  For a straight turn-on (no falling slope) threshold
and slope come out 0.3 to 0.4 standard uncertainties too large; the slope of the first of
several sharp steps at low signal to noise too small by half of one.  Answered wrongly: a
random walk (1/f^2) in about 6 %, a turn-on whose slope still grows at the end of the
window in about 5 %; a slow telegraph step that takes several samples looks like a turn-on.
Noise that grows with the signal is not modelled.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from registry.errors import InputError
from registry.physics import subthreshold, turn_on
from registry.physics.catalogue import check_given, facts, number
from registry.physics.psplines import curve_posterior
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.sources import source_digest
from registry.physics.sweeps import Trace, pick_directions
from registry.physics.trace_steps import refuse_single_sample_features
from registry.physics.turn_on import Estimate, TurnOn, find_turn_on
from registry.physics.turn_on_quantities import (
    LEVEL_SHARE,
    SweepFindings,
    sweep_quantities,
    with_value,
    without_value,
)
from registry.samples import FloatArray, Samples

__all__ = ["METHOD", "run"]

METHOD = facts("pinch-off")

#: Samples a sweep needs: a plateau, a turn-on and what comes after it.
FEWEST_SAMPLES = 40
#: Longer sweeps are averaged in blocks down to at most this many samples, for time.
MOST_SAMPLES = 4000

Settings = dict[str, float | str | bool]


@dataclass(frozen=True, eq=False)
class _Sweep:
    """One direction: its trace, in order of time, and what it says."""

    trace: Trace
    x: FloatArray
    findings: SweepFindings

    @property
    def found(self) -> TurnOn:
        """Return its turn-on."""
        return self.findings.found


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Find threshold, pinch-off, transconductance, swing, on-off ratio and hysteresis.

    Args:
        samples: a trace against a gate voltage; signal in A or S.
        given: ``signal``; ``direction`` (both, if not given); ``level``: conductance in S
            that defines pinch_off_voltage; ``bias``: drain-source volts, which turn a
            level into a current and a conductance's slope into a transconductance.

    Returns:
        Values of each direction carry ``{"direction": "up" | "down"}``;
        hysteresis_voltage, threshold up minus threshold down, carries none.  Refused if
        no direction has a threshold.

    Raises:
        InputError: no trace against a voltage, a signal in another unit, or a given that
            is unknown or impossible.
    """
    check_given(given, METHOD)
    if number(given, "bias") == 0.0:
        raise InputError(
            "bias=0", where="given bias", remedy="give the drain-source volts, or leave bias out"
        )
    settings = _settings(given)
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        traces = pick_directions(samples, given)
        conditions = traces[0].conditions() if len(traces) == 1 else {}
        warnings = tuple(warning for trace in traces for warning in trace.warnings)
        settings |= {"signal": traces[0].signal}
        return _answer(traces, given, settings)
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


def _settings(given: Mapping[str, Given]) -> Settings:
    """Return what determines the outcome besides the samples, defaults included."""
    settings: Settings = {name: one.value for name, one in given.items()}
    settings |= {"draws": float(turn_on.DRAWS), "seed": float(turn_on.SEED), "softer": turn_on.SOFTER}
    if "level" not in given:
        settings["level_share"] = LEVEL_SHARE
    return settings


def _answer(traces: tuple[Trace, ...], given: Mapping[str, Given], settings: Settings) -> Result:
    """Analyse each direction and word the result."""
    sweeps, refused = [], []
    for trace in traces:
        if trace.signal_unit not in ("A", "S"):
            raise InputError(
                f"signal {trace.signal!r} is in {trace.signal_unit!r}, "
                "a current (A) or conductance (S) is wanted",
                where=f"signal {trace.signal}",
                remedy="give unit and factor of the signal in a layout file, or choose another signal",
            )
        try:
            sweeps.append(_sweep(trace))
        except Refusal as refusal:
            refused.append((trace, refusal.reason))
    if not sweeps:
        raise Refusal("; ".join(dict.fromkeys(_worded(t, why, len(traces)) for t, why in refused)))
    quantities = [one for sweep in sweeps for one in sweep_quantities(sweep.findings, given)]
    quantities += [without_value(name, why, t.conditions()) for t, why in refused for name in _OF_A_SWEEP]
    quantities.append(_hysteresis(sweeps, refused))
    return Result(
        METHOD.name,
        METHOD.version,
        source_digest(METHOD.name),
        tuple(quantities),
        warnings=_warnings(traces, sweeps, refused),
        parameters=tuple(f"{name}[{s.trace.direction}]" for s in sweeps for name in _PARAMETERS),
        covariance=_block_diagonal([s.found.covariance for s in sweeps]),
        curves=tuple(curve for s in sweeps for curve in _curves(s)),
        settings=settings | {f"fit_samples[{s.trace.direction}]": float(s.x.size) for s in sweeps},
    )


#: Free parameters whose covariance is returned, for each direction.
_PARAMETERS = ("threshold_voltage", "largest_slope", "off_level")
_OF_A_SWEEP = tuple(name for name in METHOD.quantities if name != "hysteresis_voltage")


def _worded(trace: Trace, why: str, count: int) -> str:
    """Return the reason, with its direction where there are two."""
    return why if count == 1 else f"{trace.direction}: {why}"


def _sweep(trace: Trace) -> _Sweep:
    """Analyse one direction.

    Raises:
        Refusal: it has no trustworthy threshold.
    """
    if trace.x.size < FEWEST_SAMPLES:
        raise Refusal(f"{trace.x.size} samples are too few, {FEWEST_SAMPLES} are needed")
    refuse_single_sample_features(trace.y)
    x, y = _thinned(trace.x), _thinned(trace.y)
    posterior = curve_posterior(x, y)
    found = find_turn_on(posterior, x)
    order = np.argsort(found.carrier * x)
    at = found.threshold.value
    curve_at = float(np.interp(at, found.grid, found.curve)) - found.off.value
    swing = subthreshold.swing(
        found.carrier * x[order],
        found.sign * (y[order] - found.off.value),
        posterior.noise,
        found.sign * curve_at,
    )
    return _Sweep(trace, x, SweepFindings(found, swing, trace.signal_unit, trace.conditions()))


def _thinned(values: FloatArray) -> FloatArray:
    """Return ``values`` averaged in blocks, at most MOST_SAMPLES; the last part block is left out."""
    block = -(-values.size // MOST_SAMPLES)
    whole = values.size - values.size % block
    thinned: FloatArray = values[:whole].reshape(-1, block).mean(axis=1)
    return thinned


def _hysteresis(sweeps: list[_Sweep], refused: list[tuple[Trace, str]]) -> Quantity:
    """Return threshold up minus threshold down."""
    by_direction = {sweep.trace.direction: sweep.found.threshold for sweep in sweeps}
    if len(by_direction) == 2:
        up, down = by_direction["up"], by_direction["down"]
        both = Estimate(up.value - down.value, float(np.hypot(up.uncertainty, down.uncertainty)))
        return with_value("hysteresis_voltage", both, {})
    if refused:
        return without_value(
            "hysteresis_voltage", f"the sweep {refused[0][0].direction} has no threshold: {refused[0][1]}", {}
        )
    return without_value(
        "hysteresis_voltage", "needs a sweep up and a sweep down; one direction was used", {}
    )


def _warnings(
    traces: tuple[Trace, ...], sweeps: list[_Sweep], refused: list[tuple[Trace, str]]
) -> tuple[str, ...]:
    """Return all warnings, those of a direction named by it where there are two."""
    found = [warning for trace in traces for warning in trace.warnings]
    found += [_worded(s.trace, w, len(traces)) for s in sweeps for w in s.found.warnings]
    found += [f"sweep {trace.direction} refused: {why}" for trace, why in refused]
    found += [
        f"{s.trace.x.size} samples were averaged in blocks to {s.x.size}"
        for s in sweeps
        if s.x.size < s.trace.x.size
    ]
    return tuple(dict.fromkeys(found))


def _block_diagonal(blocks: list[FloatArray]) -> FloatArray:
    """Return the covariance of all directions: sweeps are independent of each other."""
    size = sum(block.shape[0] for block in blocks)
    whole, start = np.zeros((size, size)), 0
    for block in blocks:
        stop = start + block.shape[0]
        whole[start:stop, start:stop] = block
        start = stop
    return whole


def _curves(sweep: _Sweep) -> tuple[Curve, Curve]:
    """Return the mean curve and the tangent from off-level to the largest value."""
    found, direction = sweep.found, sweep.trace.direction
    reach = found.carrier * found.rise / found.slope.value
    volts = found.threshold.value + np.array([0.0, reach])
    level = found.off.value + np.array([0.0, found.sign * found.rise])
    return Curve(f"curve {direction}", found.grid, found.curve), Curve(f"tangent {direction}", volts, level)
