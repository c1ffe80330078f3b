"""Where exactly does each transition line cross the rows (or columns) of a map?

The line pixels of a family are joined to segments: what a crossing with another family
cuts apart is two segments.  A segment is followed row by row (column by column for a
family that runs along the fast axis): in a window about the line each cut is

    y(d) = b_0 + b_1 d + h T((d - delta) / w),    T a Fermi step, or cosh^-2 for ridges,

with its own b_0, b_1; height h of the segment, width w of the family.  The displacement
delta follows from linear least squares (one Gauss-Newton step a round, three rounds).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_dilation, label

from registry.physics.gate_map import Flags, level_rows
from registry.physics.line_finding import Lines
from registry.samples import FloatArray

__all__ = ["Family", "Segment", "place_lines"]

IndexArray = NDArray[np.intp]

#: Shortest segment, in pixels of the map that lines were found in, along the counted axis.
SHORTEST = 6
#: Distance kept from lines of another family, same pixels.
CLEARANCE = 3
#: Gap in a segment that is closed, same pixels.
GAP = 2
#: Rows (columns) of a segment that must give a place.
FEWEST_CUTS = 5
#: Widths w tried, pixels; a step between two pixels has the smallest.
WIDTHS = np.geomspace(0.15, 4.0, 16)
#: Half window in widths w, at least and at most so many pixels.
WINDOW_WIDTHS, LEAST_WINDOW, LARGEST_WINDOW = 7.0, 5, 16
#: A displacement beyond this share of the half window, or so many robust standard
#: deviations, is an outlier: something else crosses there.
FAR, OUTLYING = 0.6, 4.0
#: A segment whose slope (pixels a pixel) is so far from the family's is something else.
NOT_PARALLEL = 0.13
#: Rounds of displacement fits.
ROUNDS = 3


@dataclass(frozen=True, eq=False)
class Segment:
    """One piece of a line: places ``at`` on the measured axis over ``along``, in pixels.

    Attributes:
        at: place on the fast axis (slow axis where not ``by_row``), shape (k,).
        along: row (column), shape (k,).
        variance: relative variance of each place, shape (k,).
        height: of the step, in the signal's unit.
        height_u: its standard uncertainty from the scatter of the cuts.
    """

    at: FloatArray
    along: FloatArray
    variance: FloatArray
    height: float
    height_u: float

    def line(self) -> tuple[float, float]:
        """Return offset and slope of ``at`` over ``along`` by least squares."""
        slope, offset = np.polyfit(self.along, self.at, 1)
        return float(offset), float(slope)


@dataclass(frozen=True, eq=False)
class Family:
    """Segments of parallel lines.

    Attributes:
        by_row: whether places are on the fast axis, a row each.
        normal: direction of the normal, degrees from the fast axis in pixels.
        width: w, pixels.
        segments: in no order.
    """

    by_row: bool
    normal: float
    width: float
    segments: tuple[Segment, ...]


@dataclass(frozen=True, eq=False)
class _Cut:
    """Windows of one segment: distance to its line, signal, both (k, window)."""

    distance: FloatArray
    signal: FloatArray


def place_lines(z: FloatArray, lines: list[Lines], block: tuple[int, int], ridges: bool) -> list[Family]:
    """Return every family with at least one segment, in the order of ``lines``.

    Args:
        z: the map (ny, nx) at full resolution.
        lines: line pixels found in the map averaged in ``block`` (y, x) pixels.
        block: pixels averaged.
        ridges: lines are ridges, not steps.
    """
    found = []
    everything = np.any([one.ridge for one in lines], axis=0)
    z = level_rows(z, _grow(_enlarge(everything, block, z.shape), CLEARANCE * max(block)))
    for k, one in enumerate(lines):
        others = [other.ridge for j, other in enumerate(lines) if j != k]
        blocked = np.any(others, axis=0) if others else np.zeros_like(one.ridge)
        family = _place_family(z, one, blocked, everything, block, ridges)
        if family is not None:
            found.append(family)
    return found


def _place_family(
    z: FloatArray, one: Lines, blocked: Flags, everything: Flags, block: tuple[int, int], ridges: bool
) -> Family | None:
    """Follow all segments of a family; None if there is none."""
    if not one.by_row:
        z, blocked, everything = z.T, blocked.T, everything.T
        block = (block[1], block[0])
    ridge = one.ridge if one.by_row else one.ridge.T
    starts = _join(ridge & ~_grow(blocked, CLEARANCE), one.normal if one.by_row else 90.0 - one.normal, block)
    if not starts:
        return None
    occupied = _enlarge(everything, block, z.shape)
    most = LARGEST_WINDOW * max(1, block[1])
    width = _width_of(z, starts, LEAST_WINDOW + 2 * block[1], ridges)
    half = int(np.clip(np.ceil(WINDOW_WIDTHS * width), LEAST_WINDOW, most))
    segments = [_follow(z, start, occupied, half, block[1], width, ridges) for start in starts]
    width = _width_of(z, [one for one in segments if one is not None], half, ridges)
    segments = [
        _follow(z, one, occupied, half, block[1], width, ridges) for one in segments if one is not None
    ]
    kept = _parallel([one for one in segments if one is not None])
    return Family(one.by_row, one.normal, width, kept) if kept else None


def _parallel(segments: list[Segment]) -> tuple[Segment, ...]:
    """Leave out segments that are not parallel to the others: pieces of something else."""
    if not segments:
        return ()
    slopes = np.array([one.line()[1] for one in segments])
    sizes = np.array([one.at.size for one in segments])
    order = np.argsort(slopes)
    middle = slopes[order][np.searchsorted(np.cumsum(sizes[order]), 0.5 * sizes.sum())]
    close = np.abs(slopes - middle) < NOT_PARALLEL
    return tuple(one for one, good in zip(segments, close, strict=True) if good)


def _enlarge(flags: Flags, block: tuple[int, int], shape: tuple[int, ...]) -> Flags:
    """Return flags of the averaged map at full resolution."""
    full = np.repeat(np.repeat(flags, block[0], axis=0), block[1], axis=1)
    missing = [(0, wanted - there) for wanted, there in zip(shape, full.shape, strict=True)]
    return np.pad(full, missing, mode="edge")


def _grow(flags: Flags, by: int) -> Flags:
    """Return the flags spread by ``by`` pixels to all sides."""
    return np.asarray(binary_dilation(flags, np.ones((2 * by + 1, 2 * by + 1), dtype=bool)))


def _join(ridge: Flags, normal: float, block: tuple[int, int]) -> list[Segment]:
    """Join line pixels to segments, in full pixels."""
    reach = np.zeros((2 * GAP + 1, 2 * GAP + 1), dtype=bool)
    for k in range(-GAP, GAP + 1):
        across = round(-k * float(np.tan(np.radians(normal))))
        reach[GAP + k, int(np.clip(GAP + across, 0, 2 * GAP))] = True
    names, count = label(_grow(ridge, 0) | np.asarray(binary_dilation(ridge, reach)), np.ones((3, 3)))
    found = []
    rows, columns = np.nonzero(ridge)
    owner = names[rows, columns]
    for name in range(1, count + 1):
        mine = owner == name
        along, at = rows[mine].astype(float), columns[mine].astype(float)
        if np.unique(along).size >= SHORTEST:
            full = (block[1] * (at + 0.5) - 0.5, block[0] * (along + 0.5) - 0.5)
            found.append(Segment(full[0], full[1], np.ones(at.size), 1.0, 1.0))
    return found


def _window(z: FloatArray, segment: Segment, half: int) -> tuple[FloatArray, IndexArray, _Cut]:
    """Cut a window about a segment's line in every row it spans; return rows' places too."""
    offset, slope = segment.line()
    rows = np.arange(int(np.ceil(segment.along.min())), int(np.floor(segment.along.max())) + 1)
    line = offset + slope * rows
    centre = np.round(line).astype(np.intp)
    fits = (centre - half >= 0) & (centre + half < z.shape[1])
    rows, line, centre = rows[fits], line[fits], centre[fits]
    columns = centre[:, None] + np.arange(-half, half + 1)
    return line, rows, _Cut(columns - line[:, None], z[rows[:, None], columns])


def _shapes(distance: FloatArray, width: float, ridges: bool) -> tuple[FloatArray, FloatArray]:
    """Return the shape T and its derivative by the distance."""
    step = 1.0 / (1.0 + np.exp(-np.clip(distance / width, -60.0, 60.0)))
    bell = step * (1.0 - step)
    if ridges:
        return 4.0 * bell, 4.0 * bell * (1.0 - 2.0 * step) / width
    return step, bell / width


def _without_line(distance: FloatArray, values: FloatArray) -> FloatArray:
    """Return each row of ``values`` freed of its best straight line."""
    centred = distance - distance.mean(axis=1, keepdims=True)
    slope = np.sum(centred * values, axis=1) / np.sum(centred**2, axis=1)
    return np.asarray(values - values.mean(axis=1, keepdims=True) - slope[:, None] * centred, dtype=float)


def _width_of(z: FloatArray, segments: list[Segment], half: int, ridges: bool) -> float:
    """Return the width w, pixels, that fits the windows of all segments best."""
    cuts = [cut for cut in (_window(z, one, half)[2] for one in segments) if cut.distance.shape[0]]
    cost = np.zeros(WIDTHS.size)
    for k, width in enumerate(WIDTHS):
        for cut in cuts:
            rest = _without_line(cut.distance, cut.signal)
            shape = _without_line(cut.distance, _shapes(cut.distance, float(width), ridges)[0])
            cost[k] -= np.sum(rest * shape) ** 2 / np.sum(shape**2)
    best = int(np.argmin(cost))
    if best in (0, WIDTHS.size - 1):
        return float(WIDTHS[best])
    low, middle, high = cost[best - 1 : best + 2]
    shift = 0.5 * (low - high) / (low - 2.0 * middle + high)
    return float(WIDTHS[best] * (WIDTHS[1] / WIDTHS[0]) ** shift)


def _follow(
    z: FloatArray, start: Segment, occupied: Flags, half: int, block: int, width: float, ridges: bool
) -> Segment | None:
    """Find the segment's place in every free row; None if too few rows give one."""
    segment = start
    for _ in range(ROUNDS):
        line, rows, cut = _window(z, segment, half)
        free = _free(occupied, rows, line, half, block)
        if np.count_nonzero(free) < FEWEST_CUTS:
            return None
        line, rows = line[free], rows[free]
        distance, signal = cut.distance[free], _without_line(cut.distance[free], cut.signal[free])
        shape, by_distance = (_without_line(distance, part) for part in _shapes(distance, width, ridges))
        power = np.sum(shape**2)
        height = float(np.sum(shape * signal) / power)
        if height == 0.0:
            return None
        rest = signal - height * shape
        weight = np.sum(by_distance**2, axis=1)
        delta = -np.sum(by_distance * rest, axis=1) / (height * weight)
        kept = np.abs(delta) < FAR * half
        if np.count_nonzero(kept) < FEWEST_CUTS:
            return None
        spread = 1.4826 * float(np.median(np.abs(delta[kept] - np.median(delta[kept]))))
        kept &= np.abs(delta - np.median(delta[kept])) <= OUTLYING * spread + 1e-9
        if np.count_nonzero(kept) < FEWEST_CUTS:
            return None
        by_row = np.sum(shape * signal, axis=1) / np.sum(shape**2, axis=1)
        scatter = float(np.std(by_row, ddof=1)) / np.sqrt(by_row.size)
        segment = replace(
            start,
            at=(line + delta)[kept],
            along=rows[kept].astype(float),
            variance=(1.0 / (height**2 * weight))[kept],
            height=height,
            height_u=scatter,
        )
    return segment


def _free(occupied: Flags, rows: IndexArray, line: FloatArray, half: int, block: int) -> Flags:
    """Tell the rows in whose window no other line lies."""
    own = 2 * block + 1
    offsets = np.array([k for k in range(-half, half + 1) if abs(k) > own], dtype=np.intp)
    columns = np.round(line).astype(np.intp)[:, None] + offsets
    return np.asarray(~np.any(occupied[rows[:, None], columns], axis=1), dtype=bool)
