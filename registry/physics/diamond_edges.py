"""Where exactly does each row of constant bias cut each diamond edge?

Around its rough place every edge is fitted with its own

    step:  a + b F(u) + c ln(1 + exp u)           (current; c: the plateau may rise)
    peak:  a + b 4 F(u) F(-u) + c F(u)            (differential conductance)

u = +-(V - V_edge)/w rising into the transport window, F(u) = 1/(1 + exp(-u)), and one
common w = k_B T/(lever arm).  For a single level the step is exact: the current through
it is proportional to the Fermi function of the nearer lead while the other lead is far
(C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646); with a degenerate level the same
function is shifted by at most k_B T ln 2, alike in all rows of one sign of bias.  Only rows
in which both edges of a window, and those of neighbouring windows, are well apart are used.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from registry.physics.diamond_lines import EdgeKind, Geometry
from registry.physics.diamond_map import DiamondMap
from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["Edges", "fit_edges"]

#: Widths w tried first, in gate samples.
WIDTHS = np.array([0.4, 0.6, 0.9, 1.3, 1.9, 2.8, 4.0, 6.0])
#: Half length of the first and least windows, in gate samples.
FIRST_REACH, LEAST_REACH = 10.0, 4.0
#: Half length of the final windows, and least one, in widths w.
REACH, SHORTEST = 6.0, 4.2
#: An edge narrower than this many gate samples has no sub-sample position.
NARROWEST = 0.4
#: A window may use this share of the distance to the next edge on either side.
SHARE = 0.42
#: A transition outside the frame is taken to be no nearer than this share of a spacing.
NEARER = 0.9
#: Rough places may be wrong by this many samples.
SEARCH = 4.0
#: An edge must stand this many times its standard uncertainty out of the noise.
SIGNIFICANCE = 3.0
#: The common width is told from about so many edges.
DECIDING_EDGES = 60
#: Fewest edges of a map.
FEWEST_EDGES = 24
#: Gauss-Newton steps of the final fit, and the largest one in widths.
STEPS, LARGEST_STEP = 12, 0.7


@dataclass(frozen=True, eq=False)
class Edges:
    """One entry an edge of a row, each array of shape (k,).

    Attributes:
        transition: number of the transition, from 0.
        rising: whether it is of the family of positive slope.
        row: number of the bias row.
        bias: volts from the zero-bias offset of the geometry.
        gate: fitted gate volts.
        u: their standard uncertainty from the noise about the fit.
        height: step or peak height in the signal's unit, signed.
        width: common w, gate volts (a number).
        noise: rms about the fits (a number).
        ramp: rise of the plateau over w relative to the step, median (a number).
        tried: how many edges were looked for.
    """

    transition: NDArray[np.intp]
    rising: NDArray[np.bool_]
    row: NDArray[np.intp]
    bias: FloatArray
    gate: FloatArray
    u: FloatArray
    height: FloatArray
    width: float
    noise: float
    ramp: float
    tried: int


@dataclass(frozen=True, eq=False)
class _Places:
    """Edges to fit: rough places, room on either side (volts), side of the window."""

    transition: NDArray[np.intp]
    rising: NDArray[np.bool_]
    row: NDArray[np.intp]
    bias: FloatArray
    gate: FloatArray
    inside: FloatArray
    outside: FloatArray
    side: FloatArray

    def pick(self, keep: NDArray[np.bool_]) -> _Places:
        """Return those with ``keep``."""
        return _Places(**{name: value[keep] for name, value in self.__dict__.items()})


def fit_edges(data: DiamondMap, geometry: Geometry) -> Edges:
    """Fit every usable edge of the map.

    Raises:
        Refusal: too few usable edges, or edges narrower than a sample.
    """
    step = float(np.median(np.diff(data.gate)))
    places = _places(data, geometry)
    first = places.pick(np.minimum(places.inside, places.outside) >= LEAST_REACH * step)
    _need(first.gate.size)
    width = _best_width(data, first, geometry.kind, step, WIDTHS * step, FIRST_REACH * step)
    for _ in range(2):
        reach = max(REACH * width, LEAST_REACH * step)
        room = np.minimum(places.inside, places.outside)
        chosen = places.pick(room >= max(SHORTEST * width, LEAST_REACH * step))
        _need(chosen.gate.size)
        width = _best_width(data, chosen, geometry.kind, step, width * np.geomspace(0.75, 1.33, 7), reach)
    if width < NARROWEST * step:
        raise Refusal(
            f"edges are {width / step:.2g} gate samples wide, {NARROWEST:g} needed: sweep the gate finer"
        )
    return _final(data, chosen, geometry.kind, step, width, max(REACH * width, LEAST_REACH * step))


def _need(count: int) -> None:
    """Refuse where there are too few edges."""
    if count < FEWEST_EDGES:
        raise Refusal(
            f"only {count} places of rows have edges far enough from each other, {FEWEST_EDGES} are needed"
        )


def _places(data: DiamondMap, geometry: Geometry) -> _Places:
    """Return all places where an edge should be, with the room around it."""
    columns: dict[str, list[NDArray[Any]]] = {}
    bias = data.bias - geometry.offset
    rows = np.arange(bias.size)
    apart = geometry.rising - geometry.falling
    known = _with_neighbours(geometry.positions, float(data.gate[0]), float(data.gate[-1]))
    for n, position in enumerate(geometry.positions):
        for rising in (True, False):
            slope = geometry.rising if rising else geometry.falling
            right = (bias > 0.0) == rising  # whether the edge is the right one of the window
            spacing = np.abs(np.where(right, known[n + 2], known[n]) - position)
            window = np.abs(bias) * apart
            found: dict[str, NDArray[Any]] = {
                "transition": np.full(rows.size, n),
                "rising": np.full(rows.size, rising),
                "row": rows,
                "bias": bias,
                "gate": position + slope * bias + geometry.shifts,
                "inside": SHARE * window,
                "outside": SHARE * (spacing - window),
                "side": np.where(right, -1.0, 1.0),
            }
            for name, values in found.items():
                columns.setdefault(name, []).append(values)
    arrays: dict[str, Any] = {name: np.concatenate(values) for name, values in columns.items()}
    return _Places(**arrays)


def _with_neighbours(positions: FloatArray, low: float, high: float) -> FloatArray:
    """Return the positions between one more on either side, which the frame may hide.

    Its windows can reach into the frame: it is taken to lie just outside, but not nearer
    than most of the least spacing seen.
    """
    least = NEARER * float(np.min(np.diff(positions))) if positions.size > 1 else 0.0
    before = min(low, float(positions[0]) - least)
    after = max(high, float(positions[-1]) + least)
    return np.concatenate([[before], positions, [after]])


@dataclass(frozen=True, eq=False)
class _Windows:
    """Samples around every place: distance into the window (volts), signal, use."""

    x: FloatArray
    y: FloatArray
    use: NDArray[np.bool_]


def _windows(data: DiamondMap, places: _Places, step: float, reach: float) -> tuple[_Windows, _Places]:
    """Cut the samples; places that leave the frame or miss samples fall out."""
    half = int(np.ceil((reach + SEARCH * step) / step)) + 1
    centre = np.searchsorted(data.gate, places.gate)
    index = centre[:, None] + np.arange(-half, half + 1)[None, :]
    framed = (index >= 0) & (index < data.gate.size)
    index = np.clip(index, 0, data.gate.size - 1)
    x = (data.gate[index] - places.gate[:, None]) * places.side[:, None]
    y = data.y[places.row[:, None], index]
    inside = np.minimum(places.inside, reach)
    outside = np.minimum(places.outside, reach)
    wanted = (x <= inside[:, None]) & (x >= -outside[:, None])
    use = wanted & framed & np.isfinite(y)
    reached = (np.max(np.where(use, x, -np.inf), axis=1) >= inside - 1.5 * step) & (
        np.min(np.where(use, x, np.inf), axis=1) <= -outside + 1.5 * step
    )
    whole = reached & (np.sum(wanted & ~np.isfinite(y), axis=1) == 0) & (np.sum(use, axis=1) >= 7)
    return _Windows(x[whole], np.where(use, y, 0.0)[whole], use[whole]), places.pick(whole)


def _columns(u: FloatArray, kind: EdgeKind) -> tuple[FloatArray, FloatArray]:
    """Return the columns (..., 3) of the shape and their derivatives by u."""
    u = np.clip(u, -60.0, 60.0)
    fermi = 1.0 / (1.0 + np.exp(-u))
    bell = fermi * (1.0 - fermi)
    one, zero = np.ones_like(u), np.zeros_like(u)
    if kind == "step":
        return np.stack([one, fermi, np.logaddexp(0.0, u)], -1), np.stack([zero, bell, fermi], -1)
    slope = 4.0 * bell * (1.0 - 2.0 * fermi)
    return np.stack([one, 4.0 * bell, fermi], -1), np.stack([zero, slope, bell], -1)


def _linear(columns: FloatArray, windows: _Windows) -> tuple[FloatArray, FloatArray]:
    """Return coefficients (k, 3) and squared residuals (k,) of the best linear fits."""
    used = columns * windows.use[..., None]
    normal = np.einsum("kni,knj->kij", used, used)
    ridge = 1e-9 * np.trace(normal, axis1=1, axis2=2)[:, None, None] * np.eye(3)
    right = np.einsum("kni,kn->ki", used, windows.y)
    a = np.linalg.solve(normal + ridge, right[..., None])[..., 0]
    rest = (windows.y - np.einsum("kni,ki->kn", used, a)) * windows.use
    return a, np.einsum("kn,kn->k", rest, rest)


def _search(
    windows: _Windows, kind: EdgeKind, width: float, places: _Places, step: float
) -> tuple[FloatArray, FloatArray]:
    """Return the best shift of every place on a grid (volts), and its squared residuals."""
    reach = np.minimum(SEARCH * step, 0.4 * np.minimum(places.inside, places.outside))
    best = np.full(windows.x.shape[0], np.inf)
    shift = np.zeros_like(best)
    pieces = int(np.clip(np.ceil(2.0 * SEARCH * step / (0.6 * width)), 6, 24))
    for part in np.linspace(-1.0, 1.0, pieces + 1):
        columns, _ = _columns((windows.x - (part * reach)[:, None]) / width, kind)
        _, rss = _linear(columns, windows)
        better = rss < best
        best[better], shift[better] = rss[better], (part * reach)[better]
    return shift, best


def _best_width(
    data: DiamondMap, places: _Places, kind: EdgeKind, step: float, widths: FloatArray, reach: float
) -> float:
    """Return the common width of least squared residuals."""
    some = np.zeros(places.gate.size, dtype=bool)
    some[:: max(places.gate.size // DECIDING_EDGES, 1)] = True
    windows, kept = _windows(data, places.pick(some), step, reach)
    if not kept.gate.size:
        _need(0)
    # A few edges out of place must not decide: the best nine tenths of each are summed.
    totals = []
    for width in widths:
        shift, _ = _search(windows, kind, float(width), kept, step)
        _, _, rss, _ = _refine(windows, kind, float(width), shift, 3)
        totals.append(float(np.sum(np.sort(rss)[: max(int(0.9 * rss.size), 1)])))
    return float(widths[int(np.argmin(totals))])


def _refine(
    windows: _Windows, kind: EdgeKind, width: float, shift: FloatArray, steps: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return shifts (k,), coefficients (k, 3), squared residuals, unit variances of the shifts."""
    shift = shift.copy()
    for _ in range(steps):
        columns, by_u = _columns((windows.x - shift[:, None]) / width, kind)
        a, rss = _linear(columns, windows)
        by_shift = -np.einsum("kni,ki->kn", by_u, a) / width
        full = np.concatenate([columns, by_shift[..., None]], axis=-1) * windows.use[..., None]
        size = np.sqrt(np.einsum("kni,kni->ki", full, full)) + 1e-300
        full /= size[:, None, :]
        inverse = np.linalg.inv(np.einsum("kni,knj->kij", full, full) + 1e-10 * np.eye(4))
        rest = (windows.y - np.einsum("kni,ki->kn", columns, a)) * windows.use
        move = np.einsum("kj,knj,kn->k", inverse[:, 3, :], full, rest) / size[:, 3]
        shift += np.clip(move, -LARGEST_STEP * width, LARGEST_STEP * width)
    return shift, a, rss, inverse[:, 3, 3] / size[:, 3] ** 2


def _final(
    data: DiamondMap, places: _Places, kind: EdgeKind, step: float, width: float, reach: float
) -> Edges:
    """Fit all edges with the common width and keep those that are edges."""
    windows, kept = _windows(data, places, step, reach)
    _need(kept.gate.size)
    start, _ = _search(windows, kind, width, kept, step)
    shift, a, rss, variance = _refine(windows, kind, width, start, STEPS)
    freedom = np.sum(windows.use, axis=1) - 4.0
    noise = float(np.sqrt(np.median(rss / freedom)))
    columns, _ = _columns((windows.x - shift[:, None]) / width, kind)
    used = columns * windows.use[..., None]
    inverse = np.linalg.inv(np.einsum("kni,knj->kij", used, used) + 1e-12 * np.eye(3))
    significant = np.abs(a[:, 1]) > SIGNIFICANCE * noise * np.sqrt(inverse[:, 1, 1])
    u = noise * np.sqrt(variance)
    placed = np.abs(shift) <= np.minimum(SEARCH * step + width, 0.5 * np.minimum(kept.inside, kept.outside))
    good = significant & placed & np.isfinite(u) & (u < width)
    if np.count_nonzero(good) < FEWEST_EDGES:
        raise Refusal(
            f"only {np.count_nonzero(good)} of {good.size} edges stand out of the noise, "
            f"{FEWEST_EDGES} are needed"
        )
    kept_a = a[good]
    return Edges(
        transition=kept.transition[good],
        rising=kept.rising[good],
        row=kept.row[good],
        bias=kept.bias[good],
        gate=(kept.gate + kept.side * shift)[good],
        u=u[good],
        height=kept_a[:, 1],
        width=width,
        noise=noise,
        ramp=float(np.median(np.abs(kept_a[:, 2] / kept_a[:, 1]))),
        tried=int(good.size),
    )
