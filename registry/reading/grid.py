"""Which grid do rows of (slow, fast, signal) samples lie on?

Long form is put on a grid by the values of its axes, whatever their order: row by row,
to and fro, several passes, stopped half way.  Nothing is interpolated; a cell that was
not measured is NaN.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from registry.errors import InputError
from registry.reading.limits import ReadingLimits
from registry.samples import FloatArray

__all__ = ["Grid", "looks_like_grid", "to_grid"]

Direction = Literal["up", "down"]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Grid:
    """Samples on a grid.

    Attributes:
        axes: values along each axis, slowest first; strictly monotone.
        passes: for each pass and signal an array of the grid's shape, NaN where not measured.
        directions: for each pass the direction of the fast axis, one entry a row (a row
            is one combination of all slower axes; None where it has fewer than 2 samples).
    """

    axes: tuple[FloatArray, ...]
    passes: tuple[tuple[FloatArray, ...], ...]
    directions: tuple[tuple[Direction | None, ...], ...]


def looks_like_grid(slow: FloatArray, fast: FloatArray, tolerance: float) -> bool:
    """Tell whether ``slow`` is constant in blocks in each of which ``fast`` repeats itself.

    At least two blocks of two samples; the last block may be incomplete; every second
    block may run backwards.  Both of shape (n,).
    """
    if slow.size < 4 or not (np.isfinite(slow).all() and np.isfinite(fast).all()):
        return False
    edges = np.flatnonzero(np.abs(np.diff(slow)) > tolerance * np.ptp(slow)) + 1
    length = int(edges[0]) if edges.size else 0
    if length < 2 or np.any(np.diff(edges) != length) or slow.size - edges[-1] > length:
        return False
    close = tolerance * float(np.ptp(fast[:length]))
    if close == 0.0:
        return False
    whole = fast[: (fast.size // length) * length].reshape(-1, length)
    rest = fast[whole.size :]
    same = np.all(np.abs(whole - whole[0]) <= close, axis=1)
    turned = np.all(np.abs(whole - whole[0, ::-1]) <= close, axis=1)
    ends = (whole[0, : rest.size], whole[0, ::-1][: rest.size])
    return bool(np.all(same | turned)) and any(bool(np.all(np.abs(rest - end) <= close)) for end in ends)


def to_grid(
    axes: Sequence[FloatArray], signals: Sequence[FloatArray], *, where: str, limits: ReadingLimits
) -> Grid:
    """Put samples on the grid of their axis values.

    Args:
        axes: two or more, each of shape (n,), slowest first, finite.
        signals: each of shape (n,).
        where: file, for errors.
        limits: how sparse, how often repeated and how large the grid may be.

    Raises:
        InputError: the samples do not lie on a grid.
    """
    levels = [_levels(values, limits.grid_tolerance) for values in axes]
    shape = tuple(len(level.values) for level in levels)
    count = axes[0].size
    cells = math.prod(shape)
    if cells > limits.grid_fill * count:
        raise _no_grid(f"{count} samples would fill {cells} cells ({' x '.join(map(str, shape))})", where)
    cell = np.ravel_multi_index(tuple(level.index for level in levels), shape).astype(np.int64)
    nth = _occurrence(cell)
    passes = int(nth.max()) + 1
    if passes > limits.grid_passes or passes * cells * len(signals) * 8 > limits.file_arrays_bytes:
        raise _no_grid(f"one cell is measured {passes} times", where)
    rows = cells // shape[-1]
    directions = _directions(nth * rows + cell // shape[-1], axes[-1], passes, rows)
    placed = tuple(
        tuple(_placed(values, cell[nth == p], nth == p, shape) for values in signals) for p in range(passes)
    )
    grid = Grid(tuple(level.values for level in levels), placed, directions)
    mixed = len({d for d in directions[0] if d}) > 1
    return _fast_upwards(grid) if mixed else grid


@dataclass(frozen=True, eq=False)
class _Levels:
    values: FloatArray
    index: IntArray


def _levels(values: FloatArray, tolerance: float) -> _Levels:
    """Find the distinct values of one axis: in order of appearance if that is monotone."""
    unique, first, inverse = np.unique(values, return_index=True, return_inverse=True)
    apart = np.diff(unique) > tolerance * (unique[-1] - unique[0])
    group = np.concatenate(([0], np.cumsum(apart)))
    starts = np.concatenate(([0], np.flatnonzero(apart) + 1))
    appeared = np.minimum.reduceat(first, starts)
    kept = unique[starts]
    index = group[inverse].astype(np.int64)
    if kept.size > 1 and np.all(np.diff(appeared) < 0):
        return _Levels(kept[::-1].copy(), kept.size - 1 - index)
    return _Levels(kept, index)


def _occurrence(cell: IntArray) -> IntArray:
    """Number the samples of each cell 0, 1, 2 … in order of time."""
    order = np.argsort(cell, kind="stable")
    ordered = cell[order]
    fresh = np.concatenate(([True], ordered[1:] != ordered[:-1]))
    start = np.maximum.accumulate(np.where(fresh, np.arange(cell.size), 0))
    nth = np.empty_like(cell)
    nth[order] = np.arange(cell.size) - start
    return nth


def _directions(
    run: IntArray, fast: FloatArray, passes: int, rows: int
) -> tuple[tuple[Direction | None, ...], ...]:
    order = np.argsort(run, kind="stable")
    ordered = run[order]
    begins = np.concatenate(([0], np.flatnonzero(np.diff(ordered)) + 1))
    ends = np.concatenate((begins[1:], [run.size])) - 1
    moved = fast[order[ends]] - fast[order[begins]]
    sign = np.zeros(passes * rows)
    sign[ordered[begins]] = np.sign(moved)
    words: list[Direction | None] = [None if s == 0 else "up" if s > 0 else "down" for s in sign.tolist()]
    return tuple(tuple(words[p * rows : (p + 1) * rows]) for p in range(passes))


def _placed(
    values: FloatArray, cell: IntArray, mask: NDArray[np.bool_], shape: tuple[int, ...]
) -> FloatArray:
    grid = np.full(math.prod(shape), np.nan)
    grid[cell] = values[mask]
    return grid.reshape(shape)


def _fast_upwards(grid: Grid) -> Grid:
    fast = grid.axes[-1]
    if fast[0] < fast[-1]:
        return grid
    passes = tuple(tuple(values[..., ::-1].copy() for values in signals) for signals in grid.passes)
    return Grid((*grid.axes[:-1], fast[::-1].copy()), passes, grid.directions)


def _no_grid(why: str, where: str) -> InputError:
    return InputError(
        f"the rows do not lie on a grid of their axes: {why}",
        where=where,
        remedy="name one axis only (a trace), or the columns that hold the set values of the map in a layout",
    )
