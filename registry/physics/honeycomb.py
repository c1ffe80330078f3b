"""What do the transition lines of a double dot say: ratios, addition voltages, the jump?

A line of dot i obeys a_ii V_i + a_ij V_j = const (constant-interaction model, W. G. van
der Wiel et al., Rev. Mod. Phys. 75 (2003) 1, section II).  Hence

    ratio i <- j            a_ij / a_ii = -dV_i/dV_j along the line
    addition voltage        distance along V_i from a line to the next, N_j fixed
    jump                    shift along V_i of a line where a line of dot j crosses it

Everything of one dot is a linear (or smooth) function of its segments' offsets and common
slope, and takes its uncertainty from their joint covariance.  Which segments belong
together is told by where they lie: neighbours side by side have the same N_j, neighbours
end to end with one line of the other dot between their ends differ by one in N_j.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations

import numpy as np

from registry.physics.gate_map import GateMap
from registry.physics.line_drift import SlopeFit
from registry.physics.line_places import Family
from registry.samples import FloatArray

__all__ = ["DotLines", "Spacing", "dot_lines", "jump_of", "spacing_of", "triple_points"]

#: Two segments are side by side if they overlap by this share of the longer one.
OVERLAP = 0.3
#: A spacing this many times the smallest one hides a line that was not found.
MISSED_LINE = 1.6
#: A pair this far from the median one (relative, or in standard uncertainties) is no pair.
ALIKE, ALIKE_SIGMAS = 0.3, 5.0
#: Ends of a cut line are at most this share of a spacing apart, along either dot's axis.
CUT_REACH = 0.6
#: So many pixels of slack in telling what lies between two ends.
SLACK = 4.0


@dataclass(frozen=True, eq=False)
class DotLines:
    """Segments of the lines of one dot, in volts.

    Attributes:
        axis: 0 if the dot is that of the fast gate, 1 of the slow gate.
        values: volts of its own gate at ``reference`` of the other gate for each of K
            segments, then the ratio; shape (K + 1,).
        covariance: shape (K + 1, K + 1).
        reference: volts of the other gate.
        ends: shape (K, 2): lowest and highest volts of the other gate on each segment.
        freedom: degrees of freedom.
    """

    axis: int
    values: FloatArray
    covariance: FloatArray
    reference: float
    ends: FloatArray
    freedom: float

    @property
    def ratio(self) -> float:
        """Pull of the other gate in units of the own gate's."""
        return float(self.values[-1])

    @property
    def ratio_u(self) -> float:
        """Standard uncertainty of the ratio."""
        return float(np.sqrt(self.covariance[-1, -1]))

    def own(self, k: int, other: FloatArray) -> FloatArray:
        """Return the own gate's volts on the line of segment ``k`` at ``other``."""
        return np.asarray(self.values[k] - self.ratio * (other - self.reference), dtype=float)


@dataclass(frozen=True, eq=False)
class Spacing:
    """A mean over pairs of segments.

    Attributes:
        value: V, along the dot's own gate.
        contrast: weights of the segments' offsets and 0 for the ratio, shape (K + 1,).
        pairs: how many were averaged.
        spread: largest deviation of a pair from the mean, in its standard uncertainties.
    """

    value: float
    contrast: FloatArray
    pairs: int
    spread: float

    def variance(self, lines: DotLines) -> float:
        """Return the variance of the mean, V^2."""
        return float(self.contrast @ lines.covariance @ self.contrast)


def dot_lines(family: Family, fit: SlopeFit, grid: GateMap, axis: int) -> DotLines:
    """Turn a family in pixels into the lines of the dot under gate ``axis``.

    Args:
        family, fit: from ``line_places`` and ``line_drift``.
        grid: the map they were found in.
        axis: 0 the fast gate's dot, 1 the slow gate's.
    """
    gates = (grid.x, grid.y)
    own, other = gates[axis], gates[1 - axis]
    step, other_step = float(own[1] - own[0]), float(other[1] - other[0])
    offsets, slope = fit.values[:-1], fit.slope
    size = offsets.size
    jacobian = np.zeros((size + 1, size + 1))
    if family.by_row == (axis == 0):
        values = own[0] + step * offsets
        ratio = -slope * step / other_step
        reference = other[0] + other_step * fit.reference
        jacobian[np.arange(size), np.arange(size)] = step
        jacobian[-1, -1] = -step / other_step
        ends = [(one.along.min(), one.along.max()) for one in family.segments]
    else:
        middle = float(np.mean([one.at.mean() for one in family.segments]))
        values = own[0] + step * (fit.reference + (middle - offsets) / slope)
        ratio = -step / (other_step * slope)
        reference = other[0] + other_step * middle
        jacobian[np.arange(size), np.arange(size)] = -step / slope
        jacobian[:-1, -1] = -step * (middle - offsets) / slope**2
        jacobian[-1, -1] = step / (other_step * slope**2)
        ends = [(one.at.min(), one.at.max()) for one in family.segments]
    return DotLines(
        axis,
        np.append(values, ratio),
        jacobian @ fit.covariance @ jacobian.T,
        float(reference),
        other[0] + other_step * np.array(ends, dtype=float),
        fit.freedom,
    )


def spacing_of(lines: DotLines, other: DotLines | None) -> Spacing | None:
    """Return the mean distance from line to next line along the own gate, None if none shows.

    Args:
        lines: of the dot.
        other: of the other dot, if its lines were found.
    """
    spans = _spans(lines, other)
    found = []
    for i, j in permutations(range(len(spans)), 2):
        if lines.values[j] > lines.values[i] and _side_by_side(spans, i, j):
            between = [
                k
                for k in range(len(spans))
                if lines.values[i] < lines.values[k] < lines.values[j]
                and _overlap(spans[k], spans[i]) > 0.0
                and _overlap(spans[k], spans[j]) > 0.0
            ]
            if not between:
                found.append((i, j))
    gaps = np.array([lines.values[j] - lines.values[i] for i, j in found])
    kept = [pair for pair, gap in zip(found, gaps, strict=True) if gap <= MISSED_LINE * gaps.min()]
    return _mean(lines, kept)


def jump_of(lines: DotLines, other: DotLines, steps: tuple[float, float]) -> Spacing | None:
    """Return the mean shift of a line where a line of the other dot crosses it, None if none shows.

    Args:
        lines: of the dot; ``other``: of the other dot.
        steps: volts a pixel of own and other gate.
    """
    return _mean(lines, [(i, j) for i, j, _, _ in _crossings(lines, other, steps)])


def triple_points(x: DotLines, y: DotLines, steps: tuple[float, float]) -> FloatArray:
    """Return pairs of triple points, shape (n, 2, 2): crossing, lower or upper one, volts (x, y)."""
    found = []
    for i, j, left, right in _crossings(x, y, steps):
        if left is not None and right is not None:
            found.append((_meet(x, i, y, left), _meet(x, j, y, right)))
    return np.array(found, dtype=float).reshape(-1, 2, 2)


def _meet(x: DotLines, i: int, y: DotLines, k: int) -> tuple[float, float]:
    """Return where segment ``i`` of the fast gate's dot meets ``k`` of the slow gate's."""
    matrix = np.array([[1.0, x.ratio], [y.ratio, 1.0]])
    right = np.array([x.values[i] + x.ratio * x.reference, y.values[k] + y.ratio * y.reference])
    place = np.linalg.solve(matrix, right)
    return float(place[0]), float(place[1])


def _spans(lines: DotLines, other: DotLines | None) -> FloatArray:
    """Return low and high end of each segment across the other dot's lines, shape (K, 2).

    In volts of the other gate, carried along the other dot's lines to one value of the
    own gate, so that the other dot's lines have one value each.
    """
    if other is None:
        return lines.ends
    k = np.arange(lines.ends.shape[0])
    own = lines.values[k, None] - lines.ratio * (lines.ends - lines.reference)
    return np.sort(lines.ends + other.ratio * (own - other.reference), axis=1)


def _overlap(a: FloatArray, b: FloatArray) -> float:
    """Return by how much two spans overlap, negative for a gap."""
    return float(min(a[1], b[1]) - max(a[0], b[0]))


def _side_by_side(spans: FloatArray, i: int, j: int) -> bool:
    """Tell whether two segments lie beside each other."""
    longer = max(float(np.ptp(spans[i])), float(np.ptp(spans[j])))
    return _overlap(spans[i], spans[j]) > OVERLAP * longer


def _crossings(
    lines: DotLines, other: DotLines, steps: tuple[float, float]
) -> list[tuple[int, int, int | None, int | None]]:
    """Return (lower, upper, other's segment before, other's segment after) of every crossing."""
    spacing, other_spacing = spacing_of(lines, other), spacing_of(other, lines)
    spans, other_spans = _spans(lines, other), _spans(other, lines)
    reach = CUT_REACH * _size(spacing, spans, other_spans)
    other_reach = CUT_REACH * _size(other_spacing, other_spans, spans)
    found = []
    for i, j in permutations(range(len(spans)), 2):
        gap = spans[j, 0] - spans[i, 1]
        if not (-SLACK * steps[1] < gap < other_reach and spans[j, 1] > spans[i, 1]):
            continue
        if abs(lines.values[j] - lines.values[i]) > reach:
            continue
        low, high = spans[i, 1] - SLACK * steps[1], spans[j, 0] + SLACK * steps[1]
        near = [k for k in range(len(other_spans)) if low < other.values[k] < high]
        place = 0.5 * (lines.values[i] + lines.values[j])
        before = [k for k in near if 0.0 <= place - other_spans[k, 1] + SLACK * steps[0] < reach]
        after = [k for k in near if 0.0 <= other_spans[k, 0] - place + SLACK * steps[0] < reach]
        if (before or after) and max(len(before), len(after)) == 1:
            found.append((i, j, before[0] if before else None, after[0] if after else None))
    return found


def _size(spacing: Spacing | None, spans: FloatArray, other_spans: FloatArray) -> float:
    """Return a spacing of lines, or what the length of the other dot's segments says of it."""
    if spacing is not None:
        return spacing.value
    return float(np.max(np.ptp(other_spans, axis=1)))


def _mean(lines: DotLines, pairs: list[tuple[int, int]]) -> Spacing | None:
    """Average the distances of pairs of segments."""
    if not pairs:
        return None
    contrasts = np.zeros((len(pairs), lines.values.size))
    for row, (i, j) in zip(contrasts, pairs, strict=True):
        row[i] -= 1.0
        row[j] += 1.0
    distances = contrasts @ lines.values
    errors = np.sqrt(np.maximum(np.einsum("pi,ij,pj->p", contrasts, lines.covariance, contrasts), 0.0))
    usual = float(np.median(distances))
    alike = np.abs(distances - usual) <= np.maximum(ALIKE * abs(usual), ALIKE_SIGMAS * errors)
    if not np.any(alike):
        return None
    contrasts, distances = contrasts[alike], distances[alike]
    mean = contrasts.mean(axis=0)
    apart = contrasts - mean
    own = np.sqrt(np.maximum(np.einsum("pi,ij,pj->p", apart, lines.covariance, apart), 1e-300))
    spread = float(np.max(np.abs(distances - distances.mean()) / own)) if distances.size > 1 else 0.0
    return Spacing(float(distances.mean()), mean, distances.size, spread)
