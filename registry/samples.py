"""What one measured file is in memory: axes, signals, sweeps, all in SI.

``registry.reading`` makes these from files, ``registry.physics`` fits them; neither
knows the other.  Nothing here reads, fits or stores.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["Axis", "FloatArray", "Level", "Samples", "Shape", "Signal", "Sweep"]

FloatArray = NDArray[np.float64]
Level = Literal["gate", "source"]
Shape = Literal["trace", "map", "series"]


@dataclass(frozen=True, eq=False)
class Axis:
    """One independent variable.

    Attributes:
        name: as the file names it (``P1``, ``bias``, ``time``).
        unit: canonical unit (``V``, ``s``, ``K``, ``Hz``, ``T``, ``1``).
        values: shape (n,), in ``unit``; for a trace one value a sample, sweeps one
            after another; for a map the grid along this axis.
        level: for volts, whether they are at the gate or at the source behind the
            divider; None for an axis that is no voltage.
    """

    name: str
    unit: str
    values: FloatArray
    level: Level | None = None


@dataclass(frozen=True, eq=False)
class Signal:
    """One dependent variable on the axes of its ``Samples``.

    Attributes:
        name: as the file names it.
        unit: canonical unit (``A``, ``S``, ``V``, ``1``).
        values: shape (n,) for a trace or series, (n_slow, n_fast) for a map; NaN
            where a map was not measured.
    """

    name: str
    unit: str
    values: FloatArray


@dataclass(frozen=True)
class Sweep:
    """One monotone run of a trace: samples ``start`` (incl.) to ``stop`` (excl.)."""

    start: int
    stop: int
    direction: Literal["up", "down"]


@dataclass(frozen=True, eq=False)
class Samples:
    """A trace (one swept axis), a map (two or more axes) or a series (time axis).

    Attributes:
        shape: ``trace``, ``map`` or ``series``.
        axes: slowest first; one for a trace or series.
        signals: at least one; all on the same axes.
        sweeps: for a trace its monotone runs in order of time (one or more); for a
            map the direction of the fast axis as one entry a row only where rows
            differ; empty for a series.
        taken_at_us: microseconds since 1970 UTC if the file says when, else None.
        volts: gate name -> volts if the file told them (see layouts), else empty.
        volts_level: the level of ``volts``.
        settings: name -> (value, canonical unit) of the moment, if the file told.
        kind: a method's name or a free word if the layout gives it.
        derive: ``{"method": ..., "given": {...}}`` if the layout asks for it.
        notes: plain sentences about what reading had to decide.
    """

    shape: Shape
    axes: tuple[Axis, ...]
    signals: tuple[Signal, ...]
    sweeps: tuple[Sweep, ...] = ()
    taken_at_us: int | None = None
    volts: Mapping[str, float] = field(default_factory=dict)
    volts_level: Level = "gate"
    settings: Mapping[str, tuple[float, str]] = field(default_factory=dict)
    kind: str | None = None
    derive: Mapping[str, Any] | None = None
    notes: tuple[str, ...] = ()

    def signal(self, name: str | None = None) -> Signal:
        """Return the signal called ``name``, or the first one.

        Raises:
            KeyError: there is no such signal; the argument lists those there are.
        """
        if name is None:
            return self.signals[0]
        for signal in self.signals:
            if signal.name == name:
                return signal
        raise KeyError(f"no signal {name!r}; the file has {', '.join(s.name for s in self.signals)}")
