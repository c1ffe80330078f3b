"""How fast does a position move with another gate's volts, and is it a straight line?

The line is fitted under white + 1/f noise in the order the points were taken (``noise``).
One jump of all later points is found and fitted along; curvature is tested for.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats

from registry.physics.noise import NoiseModel, fit_noise, gls_fit
from registry.physics.points import Points
from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["CrossLine", "fit_cross_line"]

#: A jump or curvature is one if chance makes it this rarely in a whole table.
CHANCE = 0.001
#: Places of a jump that are looked at: the largest differences of neighbours.
CANDIDATES = 12
#: Points needed on each side of a jump.
BESIDE_JUMP = 3
#: The slope at the ends of the range may differ by this share of its mean.
CURVATURE_ALLOWED = 0.3


@dataclass(frozen=True, eq=False)
class CrossLine:
    """A fitted line.

    Attributes:
        slope, u: in volts per volt.
        degrees_of_freedom: of ``u``.
        names: of the parameters: offset at the middle of the range, slope, jump if there.
        covariance: of those, in SI, shape (k, k).
        fitted: the fitted positions at the points, shape (n,), V.
        warnings: plain sentences.
    """

    slope: float
    u: float
    degrees_of_freedom: float
    names: tuple[str, ...]
    covariance: FloatArray
    fitted: FloatArray
    warnings: tuple[str, ...]


def fit_cross_line(points: Points) -> CrossLine:
    """Fit position against the other gate's volts.

    Raises:
        Refusal: the axis hardly moves, more than one jump, or a curve instead of a line.
    """
    half = 0.5 * float(np.ptp(points.x))
    if half == 0.0 or np.unique(points.x).size < 4:
        raise Refusal("the other gate's volts take fewer than 4 different values")
    if np.ptp(points.y) == 0.0:
        raise Refusal("the position is the same at all points: was it tracked?")
    z = (points.x - 0.5 * float(np.max(points.x) + np.min(points.x))) / half
    scale = float(np.ptp(points.y))
    weight = np.ones(z.size) if points.u is None else scale / points.u
    y = (points.y - float(np.mean(points.y))) / scale
    design = np.stack([np.ones(z.size), z], axis=1)
    warnings: list[str] = []
    jump = _find_jump(y * weight, design * weight[:, None], weight)
    if jump is not None:
        design = np.column_stack([design, _step(z.size, jump)])
        _check_jump(y * weight, design * weight[:, None], weight, jump)
    white_design, white_y = design * weight[:, None], y * weight
    coefficients, covariance = _fit(white_y, white_design, points.u is not None)
    if jump is not None:
        warnings.append(
            f"a jump of {scale * coefficients[2]:.3g} V after point {jump} was fitted along: a charge "
            "jump, or another peak from there on"
        )
    warnings += _judge_curvature(white_y, white_design, z, weight, float(coefficients[1]))
    factors = scale * np.array([1.0, 1.0 / half, 1.0])[: coefficients.size]
    covariance = covariance * np.outer(factors, factors)
    return CrossLine(
        slope=float(coefficients[1] * factors[1]),
        u=float(np.sqrt(covariance[1, 1])),
        degrees_of_freedom=float(z.size - coefficients.size),
        names=("offset", "slope", "jump")[: coefficients.size],
        covariance=covariance,
        fitted=float(np.mean(points.y)) + scale * (design @ coefficients),
        warnings=tuple(warnings),
    )


def _fit(y: FloatArray, design: FloatArray, known: bool) -> tuple[FloatArray, FloatArray]:
    """Return coefficients and covariance; ``known``: ``y`` has the stated noise 1 at least."""
    noise = fit_noise(y, design)
    if known:
        noise = NoiseModel(max(noise.white, 1.0), noise.pink, noise.exponent)
    fit = gls_fit(y, design, noise)
    return fit.coefficients, fit.covariance


def _step(n: int, place: int) -> FloatArray:
    """Return a step of height 1 from point ``place`` on, shape (n,)."""
    return (np.arange(n) >= place).astype(float)


def _find_jump(y: FloatArray, design: FloatArray, weight: FloatArray) -> int | None:
    """Return after how many points all later ones have jumped, or None."""
    n = y.size
    if n < design.shape[1] + 4:
        return None
    rest = (y - design @ np.linalg.lstsq(design, y, rcond=None)[0]) / weight
    order = np.argsort(-np.abs(np.diff(rest)))[:CANDIDATES] + 1
    best, least = None, CHANCE / n
    for place in order:
        p = _chance(y, design, _step(n, int(place)) * weight)
        if p < least:
            best, least = int(place), p
    return best


def _chance(y: FloatArray, design: FloatArray, column: FloatArray) -> float:
    """Return how often chance gives one more column so large a coefficient."""
    wider = np.column_stack([design, column])
    if np.linalg.matrix_rank(wider) < wider.shape[1]:
        return 1.0
    fit = gls_fit(y, wider)
    t = abs(float(fit.coefficients[-1])) / float(np.sqrt(fit.covariance[-1, -1]))
    return float(2.0 * stats.t.sf(t, y.size - wider.shape[1]))


def _check_jump(y: FloatArray, design: FloatArray, weight: FloatArray, jump: int) -> None:
    """Refuse a jump too near an end, and a second one."""
    if min(jump, y.size - jump) < BESIDE_JUMP:
        raise Refusal(
            f"the position jumps after point {jump} of {y.size}: with fewer than {BESIDE_JUMP} points on "
            "one side the slope is not told"
        )
    second = _find_jump(y, design, weight)
    if second is not None:
        raise Refusal(f"the position jumps more than once (after points {jump} and {second})")


def _judge_curvature(
    y: FloatArray, design: FloatArray, z: FloatArray, weight: FloatArray, slope: float
) -> list[str]:
    """Refuse a curve, warn of a slight one."""
    if z.size < design.shape[1] + 4 or _chance(y, design, z**2 * weight) > CHANCE:
        return []
    curve = gls_fit(y, np.column_stack([design, z**2 * weight])).coefficients[-1]
    change = abs(4.0 * float(curve))
    if change > CURVATURE_ALLOWED * abs(slope):
        raise Refusal(
            f"the position follows a curve: the slope changes by {change / max(abs(slope), 1e-300):.0%} of "
            f"its mean over the range, {CURVATURE_ALLOWED:.0%} are allowed; measure over less"
        )
    return [f"the slope changes by {change / abs(slope):.0%} over the range; the ratio is its mean"]
