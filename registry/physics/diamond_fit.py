"""Which lines do the edges of all rows lie on, when charge drifts from step to step?

Every transition n has two edges, in gate volts against the bias b from its offset

    V = V_n + c_n + s_n b + sign(b) d_n + drift(t),

one slope s_n and one d_n a family; d_n takes up how an edge is defined (degeneracy of the
level, k_B T ln 2 at most), c_n the crossing at another bias than b = 0.  The drift of the
charge around the dot moves all edges of one step t of the slow axis together.  It is a random
walk plus a part of its own in every step; both variances come from restricted likelihoods
(D. A. Harville, J. Am. Stat. Assoc. 72 (1977) 320), averaged over a grid, not maximised.  So the
distance of two edges of one row, and with it the lever arm, is hardly touched by drift where
the bias is the slow axis, while single slopes get the uncertainty that drift gives them.
A single jump between two steps is a term of its own if it gains enough.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from registry.physics.diamond_edges import Edges
from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["LineFit", "fit_lines"]

#: Edges a family of a transition needs at least; half of them at a sign of bias.
FEWEST = 6
#: Variances tried, in units of the mean variance of an edge: of the walk over the whole map,
#: and of each step alone.
WALKS = np.array([0.0, 0.03, 0.1, 0.3, 1.0, 3.0, 10.0, 30.0, 100.0, 300.0, 1000.0, 1e4])
OWN = np.array([0.0, 0.03, 0.1, 0.3, 1.0, 3.0, 10.0, 100.0])
#: Edges further from their line than this many standard deviations are left out ...
OUTLIER = 5.0
#: ... but no more than this share of all.
OUTLIERS_ALLOWED = 0.1
#: Log-likelihood a jump must gain beside its place: ln(steps) is added.
JUMP_GAIN = 5.0
#: Jumps with the largest steps of the drift are tried, so many.
JUMPS_TRIED = 3
#: Slow steps are pooled to at most so many.
MOST_STEPS = 160


@dataclass(frozen=True, eq=False)
class LineFit:
    """Lines of N transitions.

    Attributes:
        transition: their numbers in the geometry, shape (N,).
        comparable: whether each and the next are neighbours whose positions rest on edges
            at the same signs of bias, shape (N - 1,): else the distance of them would hold
            how an edge is defined, or a jump.
        values: position (V), rising slope, falling slope (V/V) of each, shape (3 N,).
        covariance: of these, shape (3 N, 3 N).
        offset: mean bias of the crossings beyond the geometry's, volts.
        freedom: edges less parameters.
        scatter: rms of the edges about their lines in units of the noise about the fits,
            drift taken out.
        drift: rms of the drift over the map, gate volts.
        jump: gate volts of a jump and first slow step after it, or None.
        left_out: number of edges left out as outliers.
        used: edges in the fit.
    """

    transition: NDArray[np.intp]
    comparable: NDArray[np.bool_]
    values: FloatArray
    covariance: FloatArray
    offset: float
    freedom: float
    scatter: float
    drift: float
    jump: tuple[float, int] | None
    left_out: int
    used: Edges


def fit_lines(edges: Edges, time: NDArray[np.intp], known_jump: int | None) -> LineFit:
    """Fit the lines of all transitions that show both families.

    Args:
        edges: from ``fit_edges``.
        time: slow step of every edge, shape (k,).
        known_jump: slow step a jump was found at, or None.

    Raises:
        Refusal: no transition shows both families over enough rows.
    """
    edges, time = _both_families(edges, time)
    steps = _pooled(time)
    jump = known_jump
    left_out = 0
    for _ in range(3):
        model = _Mixed(edges, steps, time, jump)
        if jump is None:
            jump = _jump_of(edges, steps, time, model)
            if jump is not None:
                model = _Mixed(edges, steps, time, jump)
        far = np.abs(model.scores) > OUTLIER
        if not np.any(far):
            break
        left_out += int(np.sum(far))
        if left_out > OUTLIERS_ALLOWED * (edges.gate.size + left_out):
            raise Refusal(f"{left_out} edges lie off the lines: this is no pattern of straight diamond edges")
        edges, time = _both_families(_pick(edges, ~far), time[~far])
        steps = _pooled(time)
    return _worded(edges, model, jump, left_out)


def _pick(edges: Edges, keep: NDArray[np.bool_]) -> Edges:
    """Return the edges with ``keep``."""
    arrays: dict[str, Any] = {
        name: value[keep] if isinstance(value, np.ndarray) else value
        for name, value in edges.__dict__.items()
    }
    return Edges(**arrays)


def _both_families(edges: Edges, time: NDArray[np.intp]) -> tuple[Edges, NDArray[np.intp]]:
    """Leave out transitions of which a family has too few edges."""
    keep = np.zeros(edges.gate.size, dtype=bool)
    for n in np.unique(edges.transition):
        own = edges.transition == n
        counts = [_firm(edges, own & (edges.rising == rising)) for rising in (True, False)]
        if min(counts) >= FEWEST:
            keep |= own & _one_sided_enough(edges, own)
    if not np.any(keep):
        raise Refusal(
            "no transition shows a rising and a falling edge: with one family alone slope and drift "
            "cannot be told apart"
        )
    return _pick(edges, keep), time[keep]


def _firm(edges: Edges, which: NDArray[np.bool_]) -> int:
    """Return how many edges of a family lie at signs of bias with enough of them for a slope."""
    signs = [int(np.sum(which & ((edges.bias > 0.0) == positive))) for positive in (True, False)]
    return sum(count for count in signs if count >= FEWEST // 2)


def _one_sided_enough(edges: Edges, own: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Return which edges of a transition lie at a sign of bias with enough of its family."""
    keep = np.zeros(own.size, dtype=bool)
    for rising in (True, False):
        for positive in (True, False):
            which = own & (edges.rising == rising) & ((edges.bias > 0.0) == positive)
            if np.sum(which) >= FEWEST // 2:
                keep |= which
    return keep


def _pooled(time: NDArray[np.intp]) -> NDArray[np.intp]:
    """Return the slow steps from 0, neighbours pooled where there are very many."""
    start = time - np.min(time)
    pool = int(np.max(start)) // MOST_STEPS + 1
    return np.asarray(start // pool, dtype=np.intp)


def _design(edges: Edges) -> tuple[FloatArray, list[int]]:
    """Return the columns, and for every transition the place of its first one.

    A transition has the columns: position, rising family beside it, slope rising, slope
    falling, then the sign columns it can bear.
    """
    columns: list[FloatArray] = []
    first = []
    for n in np.unique(edges.transition):
        own = (edges.transition == n).astype(float)
        up, down = own * edges.rising, own * ~edges.rising
        first.append(len(columns))
        columns += [own, up, up * edges.bias, down * edges.bias]
        for family in (up, down):
            signs = np.sign(edges.bias[family > 0.0])
            if np.unique(signs).size > 1:
                columns.append(family * np.sign(edges.bias))
    return np.stack(columns, axis=1), first


class _Mixed:
    """The mixed linear model, averaged over the variances of the drift."""

    def __init__(
        self, edges: Edges, steps: NDArray[np.intp], time: NDArray[np.intp], jump: int | None
    ) -> None:
        x, self.first = _design(edges)
        size = np.sqrt(np.sum(x**2, axis=0))
        self.jumps = False
        if jump is not None:
            after = (time >= jump).astype(float)
            known = (x / size) @ np.linalg.lstsq(x / size, after, rcond=None)[0]
            # A jump between the two signs of bias is what the sign columns already hold.
            self.jumps = float(np.sum((after - known) ** 2)) > 1e-3 * after.size
        if self.jumps:
            x = np.column_stack([x, after])
            size = np.append(size, np.sqrt(np.sum(after)))
        self.columns = x.shape[1]
        self.origin = float(np.mean(edges.gate))
        y = edges.gate - self.origin
        variance = edges.u**2
        unit = float(np.mean(variance))
        count = int(np.max(steps)) + 1
        t = np.arange(count)
        walk = np.minimum(t[:, None], t[None, :]) / max(count - 1, 1)
        parts = [
            (w, o, *self._at(x / size, y, variance / unit, steps, w * walk + o * np.eye(count)))
            for w in WALKS
            for o in OWN
        ]
        height = np.array([one[2] for one in parts])
        weight = np.exp(height - np.max(height))
        weight /= np.sum(weight)
        self.log_likelihood = float(np.max([one[6] for one in parts]))
        mean = sum(p * one[3] for p, one in zip(weight, parts, strict=True))
        spread = sum(
            p * (one[4] + np.outer(one[3] - mean, one[3] - mean))
            for p, one in zip(weight, parts, strict=True)
        )
        self.beta = np.asarray(mean) / size
        self.covariance = np.asarray(spread) / np.outer(size, size)
        self.freedom = float(y.size - self.columns)
        kappa = float(sum(p * one[5] for p, one in zip(weight, parts, strict=True)))
        self.scatter = float(np.sqrt(kappa / unit))
        walks = float(sum(p * one[5] * (one[0] / 6.0 + one[1]) for p, one in zip(weight, parts, strict=True)))
        self.drift_rms = float(np.sqrt(walks))
        best = parts[int(np.argmax(height))]
        shape = best[0] * walk + best[1] * np.eye(count)
        rest = y - x @ self.beta
        information = np.bincount(steps, unit / variance, minlength=count)
        pulled = np.bincount(steps, rest * unit / variance, minlength=count)
        self.drift = np.linalg.solve(np.eye(count) + shape * information, shape @ pulled)
        self.scores = (rest - self.drift[steps]) / np.sqrt(variance * kappa / unit)

    @staticmethod
    def _at(
        x: FloatArray, y: FloatArray, variance: FloatArray, steps: NDArray[np.intp], shape: FloatArray
    ) -> tuple[float, FloatArray, FloatArray, float, float]:
        """Return REML height, coefficients, their covariance, the scale, the ML height."""
        count = shape.shape[0]
        w = 1.0 / variance
        information = np.bincount(steps, w, minlength=count)
        xy = np.column_stack([x, y])
        gathered = np.zeros((count, xy.shape[1]))
        np.add.at(gathered, steps, xy * w[:, None])
        inner = np.eye(count) + shape * information[None, :]
        corrected = xy.T @ (xy * w[:, None]) - gathered.T @ np.linalg.solve(inner, shape @ gathered)
        a, b, c = corrected[:-1, :-1], corrected[:-1, -1], corrected[-1, -1]
        beta = np.linalg.solve(a, b)
        rest = max(float(c - b @ beta), 1e-300)
        p, n = x.shape[1], y.size
        kappa = rest / (n - p)
        log_v = float(np.sum(np.log(variance))) + float(np.linalg.slogdet(inner)[1])
        reml = -0.5 * ((n - p) * np.log(kappa) + log_v + float(np.linalg.slogdet(a)[1]))
        ml = -0.5 * (n * np.log(rest / n) + log_v)
        covariance: FloatArray = kappa * np.linalg.inv(a)
        return float(reml), np.asarray(beta, dtype=float), covariance, kappa, float(ml)


def _jump_of(edges: Edges, steps: NDArray[np.intp], time: NDArray[np.intp], model: _Mixed) -> int | None:
    """Return the slow step of a jump that gains enough likelihood, or None."""
    if model.drift.size < 2 * FEWEST:
        return None
    ends = slice(FEWEST // 2, -(FEWEST // 2))
    change = np.abs(np.diff(model.drift))[ends]
    best: tuple[float, int] | None = None
    for place in np.argsort(change)[::-1][:JUMPS_TRIED]:
        step = int(place) + FEWEST // 2 + 1
        first = int(np.min(time[steps >= step]))
        gain = _Mixed(edges, steps, time, first).log_likelihood - model.log_likelihood
        if gain > JUMP_GAIN + np.log(model.drift.size) and (best is None or gain > best[0]):
            best = (gain, first)
    return None if best is None else best[1]


def _worded(edges: Edges, model: _Mixed, jump: int | None, left_out: int) -> LineFit:
    """Turn coefficients into positions and slopes of each transition."""
    count = len(model.first)
    gradient = np.zeros((3 * count, model.columns))
    values = np.zeros(3 * count)
    crossing = np.zeros(count)
    for k, at in enumerate(model.first):
        position, beside, up, down = model.beta[at : at + 4]
        crossing[k] = -beside / (up - down)
        values[3 * k : 3 * k + 3] = model.origin + position + down * crossing[k], up, down
        by_beside = -1.0 / (up - down)
        by_up, by_down = -crossing[k] / (up - down), crossing[k] / (up - down)
        gradient[3 * k, at : at + 4] = (
            1.0,
            down * by_beside,
            down * by_up,
            crossing[k] + down * by_down,
        )
        gradient[3 * k + 1, at + 2] = gradient[3 * k + 2, at + 3] = 1.0
    size = None
    if jump is not None:
        size = (float(model.beta[-1]) if model.jumps else 0.0, jump)
    return LineFit(
        transition=np.unique(edges.transition),
        comparable=_comparable(edges),
        values=values,
        covariance=gradient @ model.covariance @ gradient.T,
        offset=float(np.mean(crossing)),
        freedom=model.freedom,
        scatter=model.scatter,
        drift=model.drift_rms,
        jump=size,
        left_out=left_out,
        used=edges,
    )


def _comparable(edges: Edges) -> NDArray[np.bool_]:
    """Return which neighbouring transitions rest on edges of the same families and signs."""
    numbers = np.unique(edges.transition)
    content = []
    for n in numbers:
        own = edges.transition == n
        content.append(
            {(bool(r), float(b)) for r, b in zip(edges.rising[own], np.sign(edges.bias[own]), strict=True)}
        )
    return np.array(
        [numbers[k + 1] - numbers[k] == 1 and content[k] == content[k + 1] for k in range(numbers.size - 1)],
        dtype=bool,
    )
