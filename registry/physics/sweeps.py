"""Which samples of a trace does a method fit?

Picks the signal and the sweeps of one direction, averages repeats taken on the same
grid, and brings the samples into a state a fit can trust: finite, one sample a value
of x, in order of time.  What cannot be brought there is refused with the reason.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from registry.errors import InputError
from registry.physics.catalogue import word
from registry.physics.result import Given, Refusal
from registry.samples import Axis, FloatArray, Samples, Signal, Sweep

__all__ = ["Direction", "Trace", "pick_directions", "pick_signal", "pick_trace"]

Direction = Literal["up", "down"]

#: Two sweeps are on the same grid if no value differs by more than this share of a step.
SAME_GRID = 0.02
#: A few lost readings are left out; with more of them missing the noise model is wrong.
MISSING_ALLOWED = 0.05
#: Share of samples that may repeat the x of the one before (a stuck source repeats most).
DUPLICATES_ALLOWED = 0.2


@dataclass(frozen=True, eq=False)
class Trace:
    """One sweep (or the mean of several) ready for a fit.

    Attributes:
        x: swept axis in its unit, strictly monotone, in order of time, shape (n,);
            falling for a sweep down.
        y: signal in its unit, finite, shape (n,).
        direction: of the sweep.
        repeats: how many sweeps were averaged.
        axis, axis_unit, signal, signal_unit: names and units.
        at_source: whether the volts are those at the source behind a divider.
        warnings: plain sentences on what was done to the samples.
    """

    x: FloatArray
    y: FloatArray
    direction: Direction
    repeats: int
    axis: str
    axis_unit: str
    signal: str
    signal_unit: str
    at_source: bool = False
    warnings: tuple[str, ...] = ()

    def conditions(self) -> dict[str, str | float]:
        """Return what makes a series of its own of the quantities from this trace."""
        found: dict[str, str | float] = {"direction": self.direction}
        if self.at_source:
            found["level"] = "source"
        return found


def pick_signal(samples: Samples, given: Mapping[str, Given]) -> Signal:
    """Return the signal named by ``given["signal"]``, or the first one.

    Raises:
        InputError: there is no such signal.
    """
    names = [signal.name for signal in samples.signals]
    wanted = word(given, "signal", names[0])
    if wanted not in names:
        raise InputError(
            f"no signal {wanted!r}", where="given signal", remedy=f"use one of: {', '.join(names)}"
        )
    return samples.signal(wanted)


def pick_trace(samples: Samples, given: Mapping[str, Given]) -> Trace:
    """Return the trace of the wanted direction, or of the first sweep's direction.

    Raises:
        InputError: no trace against a voltage, no such signal or direction.
        Refusal: the samples cannot be brought into a usable state.
    """
    axis, signal = _voltage_axis(samples), pick_signal(samples, given)
    sweeps = _sweeps(samples)
    direction = word(given, "direction", sweeps[0].direction)
    chosen = [sweep for sweep in sweeps if sweep.direction == direction]
    if not chosen:
        raise InputError(
            f"no sweep {direction}",
            where="given direction",
            remedy=f"leave it out: the file has only sweeps {sweeps[0].direction}",
        )
    return _prepare(axis, signal, chosen)


def pick_directions(samples: Samples, given: Mapping[str, Given]) -> tuple[Trace, ...]:
    """Return one trace for each direction there is, the first sweep's direction first.

    With ``given["direction"]`` only that one.

    Raises:
        InputError: as ``pick_trace``.
        Refusal: as ``pick_trace``, if the first direction is unusable; an unusable
            second one is left out with a warning on the first.
    """
    first = pick_trace(samples, given)
    others = [sweep for sweep in _sweeps(samples) if sweep.direction != first.direction]
    if "direction" in given or not others:
        return (first,)
    try:
        second = _prepare(_voltage_axis(samples), pick_signal(samples, given), others)
    except Refusal as refusal:
        warning = f"the sweep {others[0].direction} was left out: {refusal.reason}"
        return (_with_warning(first, warning),)
    return (first, second)


def _with_warning(trace: Trace, warning: str) -> Trace:
    """Return ``trace`` with one more warning."""
    fields = {**trace.__dict__, "warnings": (*trace.warnings, warning)}
    return Trace(**fields)


def _voltage_axis(samples: Samples) -> Axis:
    """Return the swept axis, which must be the only one and a voltage."""
    if samples.shape != "trace" or len(samples.axes) != 1:
        raise InputError(
            f"a trace with one swept axis is wanted, this is a {samples.shape} with {len(samples.axes)} axes",
            where="samples",
            remedy="choose a method for that shape (see `millikeep methods`), or admit single sweeps",
        )
    axis = samples.axes[0]
    if axis.unit != "V":
        raise InputError(
            f"axis {axis.name!r} is in {axis.unit!r}, a gate voltage in V is wanted",
            where=f"axis {axis.name}",
            remedy="give the right unit for the axis in a layout file",
        )
    return axis


def _sweeps(samples: Samples) -> tuple[Sweep, ...]:
    """Return the sweeps told, or all samples as one."""
    if samples.sweeps:
        return samples.sweeps
    x = samples.axes[0].values
    finite = x[np.isfinite(x)]
    rising = finite.size < 2 or finite[-1] >= finite[0]
    return (Sweep(0, x.size, "up" if rising else "down"),)


def _prepare(axis: Axis, signal: Signal, sweeps: list[Sweep]) -> Trace:
    """Average or choose among the sweeps of one direction, then clean the samples."""
    warnings: list[str] = []
    columns = [(axis.values[s.start : s.stop], signal.values[s.start : s.stop]) for s in sweeps]
    repeats = [columns[0], *(c for c in columns[1:] if _same_grid(columns[0][0], c[0]))]
    if len(repeats) < len(columns):
        warnings.append(
            f"{len(columns) - len(repeats)} of {len(columns)} sweeps {sweeps[0].direction} are on "
            "another grid than the first and were not used"
        )
    x = np.mean([c[0] for c in repeats], axis=0)
    y = np.mean([c[1] for c in repeats], axis=0)
    x, y = _finite(x, y, warnings)
    x, y = _single_valued(x, y, sweeps[0].direction, warnings)
    at_source = axis.level == "source"
    if at_source:
        warnings.append(f"volts of {axis.name} are those at the source, not divided to the gate")
    return Trace(
        x=x,
        y=y,
        direction=sweeps[0].direction,
        repeats=len(repeats),
        axis=axis.name,
        axis_unit=axis.unit,
        signal=signal.name,
        signal_unit=signal.unit,
        at_source=at_source,
        warnings=tuple(warnings),
    )


def _same_grid(first: FloatArray, other: FloatArray) -> bool:
    """Tell whether two sweeps were taken at the same values of x."""
    if first.size != other.size or first.size < 2:
        return False
    step = float(np.nanmedian(np.abs(np.diff(first)))) if np.isfinite(first).sum() > 1 else 0.0
    return bool(np.nanmax(np.abs(first - other), initial=0.0) <= SAME_GRID * step)


def _finite(x: FloatArray, y: FloatArray, warnings: list[str]) -> tuple[FloatArray, FloatArray]:
    """Leave out a few lost samples; refuse an overload and larger gaps."""
    if np.any(np.isinf(x)) or np.any(np.isinf(y)):
        raise Refusal("the trace holds infinite samples: an instrument was overloaded")
    good = np.isfinite(x) & np.isfinite(y)
    lost = int(x.size - np.count_nonzero(good))
    if lost > MISSING_ALLOWED * x.size:
        raise Refusal(f"{lost} of {x.size} samples are missing")
    if lost:
        warnings.append(f"{lost} missing samples were left out")
    return np.asarray(x[good], dtype=float), np.asarray(y[good], dtype=float)


def _single_valued(
    x: FloatArray, y: FloatArray, direction: Direction, warnings: list[str]
) -> tuple[FloatArray, FloatArray]:
    """Average neighbours of equal x; refuse an axis that turns back."""
    if x.size < 2:
        raise Refusal(f"{x.size} samples are too few")
    forward = np.diff(x) if direction == "up" else -np.diff(x)
    if np.any(forward < 0.0):
        raise Refusal(f"the swept axis turns back {int(np.count_nonzero(forward < 0.0))} times in one sweep")
    repeated = int(np.count_nonzero(forward == 0.0))
    if repeated > DUPLICATES_ALLOWED * x.size:
        raise Refusal(f"{repeated} of {x.size} samples repeat the voltage of the one before")
    if not repeated:
        return x, y
    warnings.append(f"{repeated} samples at the voltage of the one before were averaged with it")
    starts = np.flatnonzero(np.append(True, forward > 0.0))
    counts = np.diff(np.append(starts, x.size))
    return x[starts], np.add.reduceat(y, starts) / counts
