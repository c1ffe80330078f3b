"""Which shape do fields make together: a trace, a map or a series?

One axis is a trace, or a series where the axis is time; two or more axes are a map.
Maps keep the order of the file: an axis may run downwards, which is the direction it was
swept in, unless rows differ; then the fast axis runs upwards and ``sweeps`` holds the
direction of each row.  Cells measured more than once become signals of their own,
``NAME (pass 2)`` and so on.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Final

import numpy as np

from registry.errors import InputError
from registry.reading.fields import RawField, axis_of, missing_units, signal_of
from registry.reading.grid import Grid, to_grid
from registry.reading.limits import ReadingLimits
from registry.reading.runs import monotone_runs
from registry.samples import Axis, FloatArray, Samples, Signal, Sweep

__all__ = ["shape_columns", "shape_grid"]

_TIME_NAMES: Final = frozenset(
    {"time", "t", "timestamp", "elapsed", "elapsed time", "elapsed_time", "datetime"}
)


def shape_columns(
    axes: Sequence[RawField], signals: Sequence[RawField], *, where: str, limits: ReadingLimits
) -> Samples:
    """Make samples of columns, each of shape (n,); axes slowest first.

    Raises:
        InputError: no signal, lengths differ, a unit is missing, or no grid.
    """
    _check_names(axes, signals, where)
    for field in (*axes, *signals):
        if field.values.shape != axes[0].values.shape or field.values.ndim != 1:
            raise InputError(
                f"{field.name!r} has shape {field.values.shape}, {axes[0].name!r} has {axes[0].values.shape}",
                where=where,
                remedy="axes and signals of one measurement need the same number of samples",
            )
    missing_units([*axes, *signals], where)
    axes, signals, notes = _without_unfilled_end(axes, signals)
    if not axes[0].values.size:
        raise InputError(
            "there is not one sample", where=where, remedy="check that the measurement was saved"
        )
    kept_axes = tuple(axis_of(field) for field in axes)
    kept_signals = tuple(signal_of(field) for field in signals)
    if len(kept_axes) > 1:
        grid = to_grid(
            [axis.values for axis in kept_axes],
            [signal.values for signal in kept_signals],
            where=where,
            limits=limits,
        )
        return _map_of(grid, kept_axes, kept_signals, notes)
    return replace(_line_of(kept_axes[0], kept_signals, notes), taken_at_us=_instant(axes[0], kept_axes[0]))


def shape_grid(axes: Sequence[RawField], signals: Sequence[RawField], *, where: str) -> Samples:
    """Make samples of signals of shape (n1, n2, …) on axes of shape (n1,), (n2,), …

    One axis under signals of shape (repeats, n) is a trace of repeated sweeps.

    Raises:
        InputError: no signal, shapes do not fit, or a unit is missing.
    """
    _check_names(axes, signals, where)
    missing_units([*axes, *signals], where)
    shape = signals[0].values.shape
    if len(axes) == 1 and len(shape) == 2:
        axes, signals = _unrolled(axes[0], signals, where)
        shape = signals[0].values.shape
    axes = [_along(field, at, shape, where) for at, field in enumerate(axes)]
    expected = tuple(field.values.size for field in axes)
    for field in signals:
        if field.values.shape != expected:
            raise InputError(
                f"signal {field.name!r} has shape {field.values.shape}, its axes have lengths {expected}",
                where=where,
                remedy="name one axis for every dimension of the signal, slowest first",
            )
    if 0 in shape:
        raise InputError(
            "there is not one sample", where=where, remedy="check that the measurement was saved"
        )
    kept_axes = tuple(axis_of(field) for field in axes)
    kept_signals = tuple(signal_of(field) for field in signals)
    if len(kept_axes) == 1:
        return replace(_line_of(kept_axes[0], kept_signals, ()), taken_at_us=_instant(axes[0], kept_axes[0]))
    notes = tuple(f"axis {axis.name!r} is not monotone" for axis in kept_axes if not _monotone(axis.values))
    return Samples("map", kept_axes, kept_signals, notes=notes)


def _check_names(axes: Sequence[RawField], signals: Sequence[RawField], where: str) -> None:
    if not axes or not signals:
        raise InputError(
            "there is no signal beside the axis",
            where=where,
            remedy="a measurement needs an axis and at least one signal; name both in a layout",
        )
    names = [field.name for field in (*axes, *signals)]
    double = sorted({name for name in names if names.count(name) > 1})
    if double:
        raise InputError(
            f"the name {double[0]!r} stands for {names.count(double[0])} columns",
            where=where,
            remedy="give them names of their own in a layout",
        )


def _without_unfilled_end(
    axes: Sequence[RawField], signals: Sequence[RawField]
) -> tuple[Sequence[RawField], Sequence[RawField], tuple[str, ...]]:
    """Drop the rows at the end in which nothing is a number: allocated, never measured."""
    filled = np.zeros(axes[0].values.shape, dtype=bool)
    for field in (*axes, *signals):
        filled |= ~np.isnan(np.asarray(field.values, dtype=np.float64))
    size = int(np.flatnonzero(filled)[-1]) + 1 if filled.any() else 0
    if size == filled.size:
        return axes, signals, ()
    cut = [[replace(f, values=f.values[:size]) for f in group] for group in (axes, signals)]
    return cut[0], cut[1], (f"{filled.size - size} unfilled rows at the end were left out",)


def _line_of(axis: Axis, signals: tuple[Signal, ...], notes: tuple[str, ...]) -> Samples:
    if axis.unit == "s" and axis.name.casefold() in _TIME_NAMES:
        if np.any(np.diff(axis.values) < 0):
            notes = (*notes, "time runs backwards somewhere in this series")
        return Samples("series", (axis,), signals, notes=notes)
    return Samples("trace", (axis,), signals, sweeps=monotone_runs(axis.values), notes=notes)


def _map_of(
    grid: Grid, axes: tuple[Axis, ...], signals: tuple[Signal, ...], notes: tuple[str, ...]
) -> Samples:
    on_grid = tuple(replace(axis, values=values) for axis, values in zip(axes, grid.axes, strict=True))
    kept: list[Signal] = []
    for number, arrays in enumerate(grid.passes, start=1):
        words = {word for word in grid.directions[number - 1] if word}
        swept = words.pop() if len(words) == 1 else "to and fro"
        if len(grid.passes) > 1:
            notes = (*notes, f"pass {number} of {len(grid.passes)} swept {on_grid[-1].name!r} {swept}")
        for signal, values in zip(signals, arrays, strict=True):
            name = signal.name if number == 1 else f"{signal.name} (pass {number})"
            kept.append(Signal(name, signal.unit, values))
    empty = int(np.isnan(grid.passes[0][0]).sum())
    if empty:
        notes = (*notes, f"{empty} of {grid.passes[0][0].size} cells have no value")
    return Samples("map", on_grid, tuple(kept), sweeps=_row_sweeps(grid), notes=notes)


def _row_sweeps(grid: Grid) -> tuple[Sweep, ...]:
    """One entry a row where the rows of the first pass differ in direction, else nothing."""
    rows = grid.directions[0]
    if len({word for word in rows if word}) < 2:
        return ()
    width = grid.axes[-1].size
    return tuple(Sweep(row * width, (row + 1) * width, word or "up") for row, word in enumerate(rows))


def _unrolled(
    axis: RawField, signals: Sequence[RawField], where: str
) -> tuple[list[RawField], list[RawField]]:
    repeats, length = signals[0].values.shape
    if axis.values.shape not in ((length,), (repeats, length)):
        raise InputError(
            f"axis {axis.name!r} has shape {axis.values.shape}, the signal {(repeats, length)}",
            where=where,
            remedy="name one axis for every dimension of the signal, slowest first",
        )
    values = np.broadcast_to(axis.values, (repeats, length)).reshape(-1)
    return [replace(axis, values=values)], [replace(f, values=f.values.reshape(-1)) for f in signals]


def _along(axis: RawField, dimension: int, shape: tuple[int, ...], where: str) -> RawField:
    """Reduce an axis given at every cell to its values along its own dimension."""
    if axis.values.ndim <= 1 or axis.values.shape != shape:
        return axis
    rows = np.moveaxis(axis.values, dimension, 0).reshape(shape[dimension], -1)
    if rows.size and not np.array_equal(rows, np.broadcast_to(rows[:, :1], rows.shape)):
        raise InputError(
            f"axis {axis.name!r} changes along the other axes too",
            where=where,
            remedy="this is no map on a grid: name all columns in long form, or set values as the axis",
        )
    return replace(axis, values=rows[:, 0])


def _instant(field: RawField, axis: Axis) -> int | None:
    """Return when the first sample was taken, if the axis counts from a known instant."""
    return None if field.start_us is None else field.start_us + round(float(axis.values[0]) * 1e6)


def _monotone(values: FloatArray) -> bool:
    steps = np.diff(values)
    return bool(np.all(steps > 0) or np.all(steps < 0))
