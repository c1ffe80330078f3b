"""Where, roughly, do the two families of diamond edges run in a map?

Edges are lines V = V_n + s (bias - b_0) with one inverse slope s > 0 and one s < 0
common to all transitions n.  The strength of edges is summed along lines of many slopes;
the slope of either sign under which the sums are most concentrated is a family, the
highest sums are its lines, and lines of both that cross near zero bias are a transition.
A charge jump between two steps of a slow bias axis moves all later rows: it is found as the
shift that lets the sums before and after it agree best.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d, maximum_filter1d

from registry.physics.diamond_map import DiamondMap
from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["EdgeKind", "Geometry", "edge_kind", "find_lines"]

EdgeKind = Literal["step", "peak"]

#: Smoothing along the gate before edges are sought, in samples.
SMOOTHING = 1.5
#: Edge strength is cut at these, in robust standard deviations of the map: no glitch
#: and no bright diamond may outweigh a line.
LOWEST, HIGHEST = -2.0, 8.0
#: Robust standard deviation taken at least, as a share of the strongest edges: a map
#: nearly free of noise has strength in every tail.
LEAST_SPREAD = 0.04
#: Slopes tried differ by this many samples over the whole bias range ...
SLOPE_STEP = 1.5
#: ... from this many to this many times the gate range.
LEAST_SHIFT, LARGEST_SHIFT = 4.0, 1.5
#: Sums below so many standard deviations count nothing when slopes are compared.
LOOK_FROM = 3.0
#: A line must stand so many standard deviations out of the sums, and reach this share of
#: the best line of its family.
LEAST_Z, LEAST_SHARE = 6.0, 0.45
#: Share of the rows a line must pass inside the frame.
LEAST_ROWS = 0.25
#: Zero-bias offset looked for, as a share of the bias range.
LARGEST_OFFSET = 0.2
#: Crossings whose offsets agree within so many samples of edge distance are one cluster.
CROSSING_SPREAD = 4.0
#: A cluster of crossings must have this share of the weight of the best one; among those
#: the one nearest zero bias is it (the apexes of diamonds are crossings too).
CLUSTER_SHARE = 0.5
#: Shifts smaller than this many samples are left to the fit.
LEAST_JUMP = 3
#: The sums before and after a jump must agree this many times better once shifted.
JUMP_GAIN = 1.2
#: Fewest rows on either side of a jump.
JUMP_ROWS = 6
#: Maps are not looked at in more columns than this.
MOST_COLUMNS = 160


@dataclass(frozen=True, eq=False)
class Geometry:
    """Rough places of the edges.

    Attributes:
        kind: whether an edge is a step (current) or a peak (differential conductance).
        positions: gate volts of the transitions at zero bias, rising, shape (N,).
        rising, falling: dV_gate/dV_bias of the two families, positive and negative.
        offset: bias at which lines of a transition cross.
        shifts: gate volts by which each row is moved, shape (m,).
        jump: place in time of the first row after a jump, or None.
    """

    kind: EdgeKind
    positions: FloatArray
    rising: float
    falling: float
    offset: float
    shifts: FloatArray
    jump: int | None


def find_lines(data: DiamondMap, kind: EdgeKind | None = None) -> Geometry:
    """Return the geometry of the map.

    Args:
        data: the map.
        kind: what an edge is; None tells it from the map (``edge_kind``).

    Raises:
        Refusal: no two families of lines that cross near zero bias.
    """
    return _find(data, edge_kind(data) if kind is None else kind)


def edge_kind(data: DiamondMap) -> EdgeKind:
    """Tell whether edges are steps or peaks.

    A current turns its sign with the bias, a differential conductance does not.  A map of
    one sign of bias is told by its unit.
    """
    if data.bias[0] >= 0.0 or data.bias[-1] <= 0.0:
        return "peak" if data.signal_unit == "S" else "step"
    measured = np.any(np.isfinite(data.y), axis=1)
    bias = data.bias[measured]
    means = np.nanmean(data.y[measured], axis=1)
    far = np.argsort(np.abs(bias))
    zero = float(np.nanmedian(data.y[measured][far[: max(bias.size // 4, 1)]]))
    outer = far[far.size // 2 :]
    below, above = (means[outer[bias[outer] * sign > 0.0]] - zero for sign in (-1.0, 1.0))
    if not below.size or not above.size:
        return "peak" if data.signal_unit == "S" else "step"
    return "step" if float(np.mean(below)) * float(np.mean(above)) < 0.0 else "peak"


def _find(data: DiamondMap, kind: EdgeKind) -> Geometry:
    """Find the lines of one kind of edge."""
    sums = _Sums(data, kind)
    shifts, jump = np.zeros(data.bias.size), None
    if data.slow == "bias":  # a jump breaks lines, but in one half of the map only
        halves = np.array_split(np.arange(data.bias.size), 2)
        slopes = [sums.best_slope(sign, halves) for sign in (1.0, -1.0)]
        shifts, jump = _find_jump(sums, slopes, data.order)
        sums.shift_rows(shifts)
    slopes = [sums.best_slope(sign) for sign in (1.0, -1.0)]
    lines = [sums.lines(slope) for slope in slopes]
    positions, offset = _pair(lines, slopes, sums)
    return Geometry(kind, positions, slopes[0], slopes[1], offset, shifts * sums.step, jump)


class _Sums:
    """Edge strength of a map and its sums along lines of any slope."""

    def __init__(self, data: DiamondMap, kind: EdgeKind) -> None:
        columns = min(data.gate.size, MOST_COLUMNS)
        self.gate = np.linspace(data.gate[0], data.gate[-1], columns)
        self.step = float(self.gate[1] - self.gate[0])
        self.bias = data.bias
        self.strength = _strength(_resampled(data, self.gate), kind)
        self.span = float(data.bias[-1] - data.bias[0])

    def shift_rows(self, shifts: FloatArray) -> None:
        """Move every row back by its shift, in columns."""
        for row, shift in enumerate(np.round(shifts).astype(int)):
            if shift:
                moved = np.roll(self.strength[row], -shift)
                if shift > 0:
                    moved[-shift:] = 0.0
                else:
                    moved[:-shift] = 0.0
                self.strength[row] = moved

    def along(self, slope: float, which: NDArray[np.intp] | None = None) -> tuple[FloatArray, FloatArray]:
        """Return crossings with zero bias (volts) and the sums over rows there, both (2 n,)."""
        strength = self.strength if which is None else self.strength[which]
        bias = self.bias if which is None else self.bias[which]
        rows, columns = strength.shape
        half = columns // 2
        at = np.arange(-half, columns + half)
        shift = np.round(slope * bias / self.step).astype(int)
        index = at[None, :] + shift[:, None]
        inside = (index >= 0) & (index < columns)
        values = np.where(inside, np.take_along_axis(strength, np.clip(index, 0, columns - 1), 1), 0.0)
        count = np.sum(inside, axis=0)
        z = np.where(count >= LEAST_ROWS * rows, np.sum(values, axis=0) / np.sqrt(np.maximum(count, 1)), 0.0)
        return self.gate[0] + at * self.step, z

    def best_slope(self, sign: float, blocks: Sequence[NDArray[np.intp]] | None = None) -> float:
        """Return the inverse slope of the family of one sign, all rows or blocks of rows summed."""
        columns = self.strength.shape[1]
        shifts = np.arange(LEAST_SHIFT, LARGEST_SHIFT * columns, SLOPE_STEP)
        whole = np.arange(self.bias.size)
        score = []
        for shift in shifts:
            slope = sign * float(shift) * self.step / self.span
            sums = [self.along(slope, block)[1] for block in blocks or [whole]]
            score.append(sum(float(np.sum(np.maximum(z - LOOK_FROM, 0.0) ** 3)) for z in sums))
        best = int(np.argmax(score))
        if score[best] == 0.0:
            raise Refusal(f"no lines of {'rising' if sign > 0 else 'falling'} slope stand out of the map")
        return float(sign * shifts[best] * self.step / self.span)

    def lines(self, slope: float) -> tuple[FloatArray, FloatArray]:
        """Return where the lines of a family cross zero bias, and how they stand out."""
        at, z = self.along(slope)
        top = (z == maximum_filter1d(z, 7)) & (z > max(LEAST_Z, LEAST_SHARE * float(np.max(z))))
        if not np.any(top):
            word = "rising" if slope > 0 else "falling"
            raise Refusal(
                f"the best line of {word} slope stands {np.max(z):.2g} standard deviations out of the map, "
                f"{LEAST_Z:g} are needed"
            )
        return at[top], z[top]


def _resampled(data: DiamondMap, gate: FloatArray) -> FloatArray:
    """Return the map on equally spaced gate volts; NaN where it has none."""
    rows = np.empty((data.bias.size, gate.size))
    for row, values in enumerate(data.y):
        good = np.isfinite(values)
        if np.count_nonzero(good) < values.size / 2:
            rows[row] = np.nan
            continue
        rows[row] = np.interp(gate, data.gate[good], values[good])
        missing = np.interp(gate, data.gate, (~good).astype(float)) > 0.0
        rows[row, missing] = np.nan
    return rows


def _strength(y: FloatArray, kind: EdgeKind) -> FloatArray:
    """Return how much of an edge there is in every cell, in robust standard deviations."""
    lost = np.isnan(y)
    middle = np.nanmedian(np.where(np.all(lost, axis=1, keepdims=True), 0.0, y), axis=1, keepdims=True)
    filled = np.where(lost, middle, y)
    if kind == "step":
        raw = np.abs(gaussian_filter1d(filled, SMOOTHING, axis=1, order=1, mode="nearest"))
    else:
        bent = gaussian_filter1d(filled, SMOOTHING, axis=1, order=2, mode="nearest")
        size = filled - np.median(filled)
        raw = np.maximum(-bent * np.sign(np.sum(size * np.abs(size))), 0.0)
    level = float(np.median(raw))
    spread = max(1.4826 * float(np.median(np.abs(raw - level))), LEAST_SPREAD * float(np.percentile(raw, 98)))
    if spread == 0.0:
        raise Refusal("the map has no structure along the gate")
    strength = np.clip((raw - level) / spread, LOWEST, HIGHEST)
    strength[maximum_filter1d(lost, 5, axis=1)] = 0.0
    return np.asarray(strength - np.mean(strength), dtype=float)


def _find_jump(sums: _Sums, slopes: list[float], order: NDArray[np.intp]) -> tuple[FloatArray, int | None]:
    """Return each row's shift in columns, and where in time a large charge jump lies."""
    profile = sum(_traced_back(sums, slope) for slope in slopes)
    in_time = np.argsort(order)
    total = np.cumsum(np.asarray(profile)[in_time], axis=0)
    rows, columns = total.shape
    size = 2 * columns
    best = (0.0, 0, 0)
    reach = columns // 2
    for split in range(JUMP_ROWS, rows - JUMP_ROWS):
        before, after = total[split - 1], total[-1] - total[split - 1]
        product = np.fft.irfft(np.conj(np.fft.rfft(before, size)) * np.fft.rfft(after, size), size)
        lag = np.concatenate([product[-reach:], product[: reach + 1]])
        shift = int(np.argmax(lag)) - reach
        still = float(np.max(lag[reach - LEAST_JUMP + 1 : reach + LEAST_JUMP]))
        if abs(shift) >= LEAST_JUMP and lag[shift + reach] > JUMP_GAIN * max(still, 0.0):
            whole = float(before @ before + after @ after + 2.0 * lag[shift + reach])
            best = max(best, (whole, split, shift))
    if best[0] <= 1.1 * float(total[-1] @ total[-1]):
        return np.zeros(rows), None
    return np.where(order >= best[1], float(best[2]), 0.0), best[1]


def _traced_back(sums: _Sums, slope: float) -> FloatArray:
    """Return the edge strength of every row moved back along ``slope`` to zero bias."""
    columns = sums.strength.shape[1]
    shift = np.round(slope * sums.bias / sums.step).astype(int)
    index = np.arange(columns)[None, :] + shift[:, None]
    inside = (index >= 0) & (index < columns)
    return np.where(inside, np.take_along_axis(sums.strength, np.clip(index, 0, columns - 1), 1), 0.0)


def _pair(
    lines: list[tuple[FloatArray, FloatArray]], slopes: list[float], sums: _Sums
) -> tuple[FloatArray, float]:
    """Return the positions of crossings near zero bias, and the bias of these crossings."""
    (up, up_z), (down, down_z) = lines
    apart = slopes[0] - slopes[1]
    bias = (down[None, :] - up[:, None]) / apart
    weight = np.minimum(up_z[:, None], down_z[None, :])
    near = np.abs(bias) <= LARGEST_OFFSET * sums.span
    if not np.any(near):
        raise Refusal("no rising and falling lines cross near zero bias")
    spread = CROSSING_SPREAD * sums.step / apart
    candidates = bias[near]
    votes = np.array([np.sum(weight[near & (np.abs(bias - one) <= spread)]) for one in candidates])
    good = np.flatnonzero(votes >= CLUSTER_SHARE * np.max(votes))
    first = candidates[good[np.argmin(np.abs(candidates[good]))]]
    chosen = near & (np.abs(bias - first) <= spread)
    offset = float(np.average(bias[chosen], weights=weight[chosen]))
    pairs = sorted(zip(*np.nonzero(chosen), strict=True), key=lambda ij: -float(weight[ij]))
    positions: list[float] = []
    for i, j in pairs:
        place = float(up[i] + slopes[0] * bias[i, j])
        if all(abs(place - other) > CROSSING_SPREAD * sums.step for other in positions):
            positions.append(place)
    inside = np.array(sorted(positions))
    inside = inside[(inside >= sums.gate[0]) & (inside <= sums.gate[-1])]
    if not inside.size:
        raise Refusal("no transition lies inside the gate range")
    return inside, offset
