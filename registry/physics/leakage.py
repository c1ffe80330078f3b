"""How much current does a gate leak, from which volts on?

The current into a gate against its volts, without the amplifier's offset:

    leakage_current = max over the sweep of |I(V) - I(0)|      (A),

I(V) being a smooth curve through the samples (``leak_fit``), so that noise makes no leak.
I(0) is the curve at zero volts where the sweep has it, else the offset given.  A leak that
does not stand out of the noise gets an upper bound (95 %).  Said in words beside it: the
resistance about zero volts, and the volts at which the leak passes ``level`` (0.1 nA
unless given: the lower end of what is taken as a fault, common practice).

A constant charging current C dV/dt of the lines is in I(0) and does not count.

Domain: sweeps of 20 samples or more through zero volts, one smooth current without
hysteresis, 1/f noise at most as large as the white noise.  Measured over 810 simulated sweeps
of 200 samples (resistances; diodes with a series resistance; Fowler-Nordheim tunnelling; 10 to
1,000 times the white noise), 68 % / 95 % intervals cover, by 1/f noise in units of the white:

    0     87 / 98 %        0.5    82 / 95 %        1     76 / 96 %

(resistances and diodes are too wide, 91 / 100 % in white noise; tunnelling 75 / 93 %), bias
below 0.2 standard uncertainties; good sweeps refused: about 1 % (their upturn passes for a
jump).  White and 1/f noise and glitches never got a value in 90 sweeps each,
mains and telegraph noise in 1 of 90.  Limits: a step between two
samples gets a value in about 2.5 % (3 of 120), mostly where it leaves few samples at an end; a step
smoothed over several samples is a leak here; a leak that clips the amplifier is
refused, not bounded.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from registry.physics.catalogue import check_given, facts, number
from registry.physics.leak_fit import LeakFit, fit_leak
from registry.physics.noise import profile_log_likelihood
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.screening import screen
from registry.physics.sources import source_digest
from registry.physics.sweeps import Trace, pick_trace
from registry.samples import FloatArray, Samples

__all__ = ["run"]

METHOD = facts("leakage")

#: Samples below which curve and noise cannot be told apart.
FEWEST_SAMPLES = 20
#: Volts at which the curve is looked at.
GRID = 201
#: Zero volts may lie outside the sweep by this share of it.
ZERO_OUTSIDE = 0.05
#: A leak is one if it is this many times its uncertainty, and gains this much log-likelihood.
SIGNIFICANCE, GAIN_OVER_CONSTANT = 5.0, 8.0
#: One-sided 95 % of a leak of unknown sign.
BOUND_SIGMAS = 1.96
#: Single samples farther off than this (in robust standard deviations) are left out, ...
OUTLIER = 8.0
#: ... up to this share of them.
OUTLIERS_ALLOWED = 0.02
#: Log-likelihood of a jump between two samples; places looked at, the likeliest of a long sweep.
GAIN_OF_JUMP = 18.0
JUMP_PLACES = 600
#: Leak that marks the onset, A.
LEVEL = 1e-10


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Find the largest leak of one sweep.

    Args:
        samples: a trace of a current in A against the gate's own volts.
        given: ``signal``, ``direction``, ``offset`` (current at zero volts), ``level``.

    Returns:
        leakage_current, a value or an upper bound.

    Raises:
        InputError: the samples are no such trace, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    settings["level"] = level = number(given, "level") or LEVEL
    conditions: dict[str, str | float] = {}
    warnings: list[str] = []
    try:
        trace = pick_trace(samples, given)
        conditions = trace.conditions()
        warnings += trace.warnings
        settings |= {"signal": trace.signal, "direction": trace.direction}
        if trace.signal_unit != "A":
            raise Refusal(f"the signal is in {trace.signal_unit}, a leak is a current in A")
        screen(trace.y, FEWEST_SAMPLES)
        return _answer(trace, given, level, settings, warnings)
    except Refusal as refusal:
        return refused_result(
            METHOD.name,
            METHOD.version,
            source_digest(METHOD.name),
            METHOD.quantities,
            refusal.reason,
            conditions=conditions,
            warnings=tuple(warnings),
            settings=settings,
        )


def _answer(
    trace: Trace,
    given: Mapping[str, Given],
    level: float,
    settings: Mapping[str, float | str | bool],
    warnings: list[str],
) -> Result:
    """Fit, judge, and word the result."""
    scale = float(np.ptp(trace.y))
    x, y = _without_outliers(trace.x, trace.y / scale, warnings)
    offset = given.get("offset")
    _check_zero(x, offset)
    grid = np.linspace(float(np.min(x)), float(np.max(x)), GRID)
    fit = fit_leak(x, y, grid, None if offset is None else float(offset.value) / scale)
    _refuse_jump(y, fit)
    leak, u = fit.leak, np.hypot(fit.u, offset.standard_uncertainty / scale if offset else 0.0)
    at = int(np.argmax(np.abs(leak)))
    largest, largest_u = abs(float(leak[at])), float(u[at])
    gain = profile_log_likelihood(y, fit.design) - profile_log_likelihood(y, np.ones((y.size, 1)))
    told = largest > SIGNIFICANCE * largest_u and (gain > GAIN_OVER_CONSTANT or offset is not None)
    conditions = trace.conditions()
    if told:
        shared = {}
        if offset is not None and offset.standard_uncertainty > 0.0:
            shared = {"offset": -float(np.sign(leak[at])) * offset.standard_uncertainty}
        quantity = Quantity(
            METHOD.main_quantity,
            "A",
            scale * largest,
            scale * largest_u,
            degrees_of_freedom=float(y.size - fit.design.shape[1]),
            shared=shared,
            conditions=conditions,
        )
        warnings.append(f"the largest leak is at {grid[at]:.4g} V")
    else:
        worst = scale * float(np.max(np.abs(leak) + BOUND_SIGMAS * u))
        quantity = Quantity(METHOD.main_quantity, "A", worst, bound="upper", conditions=conditions)
    warnings.append(_resistance(fit, scale))
    warnings += _onset(grid, scale * leak, scale * u, level)
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=(quantity,),
        warnings=tuple(warnings),
        parameters=("current_at_zero", "conductance", "turn_on_1", "turn_on_2")[: fit.design.shape[1]],
        covariance=scale**2 * fit.covariance,
        curves=(
            Curve("fit", x, scale * fit.fitted),
            Curve("leak", grid, scale * leak),
        ),
        settings=settings,
    )


def _check_zero(x: FloatArray, offset: Given | None) -> None:
    """Refuse a sweep that does not tell the current at zero volts."""
    outside = max(float(np.min(x)), -float(np.max(x)), 0.0)
    if offset is None and outside > ZERO_OUTSIDE * float(np.ptp(x)):
        raise Refusal(
            "the sweep does not reach zero volts, so the amplifier's offset is unknown: sweep through zero, "
            "or give offset=CURRENT"
        )


def _without_outliers(x: FloatArray, y: FloatArray, warnings: list[str]) -> tuple[FloatArray, FloatArray]:
    """Leave out single samples far off both their neighbours."""
    if y.size < 5:
        return x, y
    off = np.zeros(y.size)
    off[1:-1] = y[1:-1] - 0.5 * (y[:-2] + y[2:])
    robust = 1.4826 * float(np.median(np.abs(off[1:-1])))
    lone = (np.abs(off) > OUTLIER * robust) & (robust > 0.0)
    # the neighbours of an outlier are off as well, by half as much
    peak = np.abs(off)
    lone[1:-1] &= (peak[1:-1] > peak[:-2]) & (peak[1:-1] > peak[2:])
    count = int(np.count_nonzero(lone))
    if not count:
        return x, y
    if count > max(OUTLIERS_ALLOWED * y.size, 1.0):
        raise Refusal(f"{count} of {y.size} samples stand out alone: spikes hide the leak")
    warnings.append(f"{count} samples that stood out alone were left out")
    return x[~lone], y[~lone]


def _refuse_jump(y: FloatArray, fit: LeakFit) -> None:
    """Refuse a current that jumps between two samples: a range change or a switching charge."""
    rest = y - fit.fitted
    known = profile_log_likelihood(rest, fit.design)
    places = np.arange(2, y.size - 1)
    if places.size > JUMP_PLACES:
        places = np.sort(np.argsort(-np.abs(np.diff(y)))[:JUMP_PLACES] + 1)
    white, target = fit.noise.whiten(fit.design), fit.noise.whiten(rest)
    basis, _ = np.linalg.qr(white)
    steps = fit.noise.whiten((np.arange(y.size)[:, None] >= places).astype(float))
    steps -= basis @ (basis.T @ steps)
    target -= basis @ (basis.T @ target)
    gains = (steps.T @ target) ** 2 / np.maximum(np.sum(steps**2, axis=0), 1e-30)
    near = int(places[int(np.argmax(gains))])
    step = (np.arange(y.size) >= near).astype(float)
    gain = profile_log_likelihood(rest, np.column_stack([fit.design, step])) - known
    if gain > GAIN_OF_JUMP:
        raise Refusal(
            f"the current jumps at sample {near + 1} (log-likelihood gain {gain:.3g} > {GAIN_OF_JUMP:g}): "
            "a range change, a glitch of the amplifier, or switching; no smooth leak"
        )


def _resistance(fit: LeakFit, scale: float) -> str:
    """Say the resistance about zero volts, or its lower bound."""
    slope, u = abs(fit.slope) * scale, fit.slope_u * scale
    if slope > SIGNIFICANCE * u:
        return f"resistance about zero volts {1.0 / slope:.3g} ± {u / slope**2:.2g} ohm"
    return f"resistance about zero volts above {1.0 / (slope + BOUND_SIGMAS * u):.3g} ohm (95 %)"


def _onset(grid: FloatArray, leak: FloatArray, u: FloatArray, level: float) -> list[str]:
    """Say at which volts the leak passes the level, on either side of zero."""
    found = []
    for side in (1.0, -1.0):
        part = np.flatnonzero(side * grid >= 0.0)
        part = part[np.argsort(np.abs(grid[part]))]
        over = np.flatnonzero((np.abs(leak[part]) > level) & (np.abs(leak[part]) > SIGNIFICANCE * u[part]))
        if over.size:
            found.append(f"the leak passes {level:.3g} A at {grid[part[over[0]]]:.4g} V")
    return found or [f"no leak above {level:.3g} A"]
