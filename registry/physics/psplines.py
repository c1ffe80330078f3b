"""Which smooth curves agree with a trace whose noise is white plus 1/f?

A curve is a cubic B-spline on equal knots; its prior is that second differences of
neighbouring coefficients are small (P-splines: P. H. C. Eilers, B. D. Marx, Stat. Sci.
11 (1996) 89).  How small is found by REML, and not everywhere alike: differences may be
larger where the curve bends (a few rounds of re-estimating their local size), else a
sharp turn-on would be smoothed and a straight part would keep the noise.  The share of
1/f noise is not fixed but kept as a handful of weighted possibilities, because a curve
of unknown shape and slow noise are hard to tell apart.  The answer is that mixture: its
mean curve and draws from it.

Samples are in order of time, so the noise is diagonal in the DCT-II (``noise``); the
exponent of the 1/f noise is held at 1.  Cost: about n m² for m coefficients, some 20
times.

Not here: what the curve means (``turn_on``).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.fft import dct
from scipy.interpolate import BSpline
from scipy.linalg import eigh
from scipy.ndimage import gaussian_filter1d

from registry.physics.noise import NoiseModel
from registry.samples import FloatArray

__all__ = ["CurvePosterior", "curve_posterior"]

DEGREE = 3
#: Order of the differences held small: a straight line costs nothing.
ORDER = 2
#: One coefficient for so many samples ...
SAMPLES_PER_COEFFICIENT = 5
#: ... within these bounds: fewer cannot draw a turn-on, more cost time.
COEFFICIENTS = (20, 80)
#: Shares of 1/f noise in the variance (Jeffreys nodes) and those tried before adapting.
PINK_SHARES = np.sin(np.linspace(0.0, 1.45, 6)) ** 2
FIRST_SHARES = PINK_SHARES[1::2]
#: Rounds of re-estimating where the curve bends, twice; width of the kernel in knots.
ROUNDS = 4
KERNEL = 2.0
#: Local stiffness may differ from its geometric mean by this factor.
STIFFNESS_RANGE = 1e4
#: log10 of the penalty, tried in these steps; at STRAIGHT the curve is a line.
LOG_PENALTIES = np.linspace(-8.0, 8.0, 65)
STRAIGHT = 11.0
#: Possibilities with less weight than this are left out of the mixture.
LEAST_WEIGHT = 0.02
#: Smallest noise assumed, relative to the range of the samples: below it the sums of
#: squares lose all digits.
NOISE_FLOOR = 1e-6
#: Keeps the normal equations invertible where knots hold no sample; relative.
RIDGE = 1e-10


@dataclass(frozen=True, eq=False)
class _Part:
    """The curve under one share of 1/f noise, in coordinates where all is diagonal."""

    criterion: float
    straight: float
    log_penalty: float
    stiffness: FloatArray
    vectors: FloatArray
    scores: FloatArray
    variance: float
    noise: NoiseModel
    weight: float = 1.0

    def shrink(self, softer: float) -> FloatArray:
        """Return the factors 1 + penalty x stiffness with the penalty 10^-softer as large."""
        shrink: FloatArray = 1.0 + 10.0 ** (self.log_penalty - softer) * self.stiffness
        return shrink

    def mean(self, softer: float) -> FloatArray:
        """Return the mean coefficients, shape (m,)."""
        mean: FloatArray = self.vectors @ (self.scores / self.shrink(softer))
        return mean


@dataclass(frozen=True, eq=False)
class CurvePosterior:
    """Smooth curves that agree with a trace.

    Attributes:
        knots: B-spline knots, shape (m + 4,), in the unit of x.
        noise: mean noise of the mixture, in the unit of y squared.
        gain_over_line: log restricted likelihood of the curve over that of a straight
            line, each with its best share of 1/f noise.
    """

    knots: FloatArray
    noise: NoiseModel
    gain_over_line: float
    _parts: tuple[_Part, ...]
    _middle: float
    _scale: float

    def mean(self, softer: float = 0.0) -> FloatArray:
        """Return the mean coefficients (m,) with the penalty divided by 10**softer."""
        total: FloatArray = np.sum([part.weight * part.mean(softer) for part in self._parts], axis=0)
        return self._middle + self._scale * total

    def draws(self, count: int, rng: np.random.Generator, softer: float = 0.0) -> FloatArray:
        """Return about ``count`` curves as coefficients, shape (m, ~count)."""
        found = []
        for part in self._parts:
            number = max(1, round(count * part.weight))
            spread = np.sqrt(part.variance / part.shrink(softer))
            normal = rng.normal(size=(spread.size, number))
            found.append(part.mean(softer)[:, None] + part.vectors @ (spread[:, None] * normal))
        return self._middle + self._scale * np.hstack(found)

    def values(self, x: FloatArray) -> FloatArray:
        """Return the matrix (len(x), m) that turns coefficients into values at x."""
        return _design(self.knots, x)

    def slopes(self, x: FloatArray) -> FloatArray:
        """Return the matrix (len(x), m) that turns coefficients into derivatives at x."""
        unit = np.eye(self.knots.size - DEGREE - 1)
        slopes: FloatArray = BSpline(self.knots, unit, DEGREE).derivative()(_inside(self.knots, x))
        return slopes

    def grid(self, per_knot: int) -> FloatArray:
        """Return equally spaced x over the trace, ``per_knot`` in each knot interval."""
        low, high = self.knots[DEGREE], self.knots[-DEGREE - 1]
        return np.linspace(low, high, per_knot * (self.knots.size - 2 * DEGREE - 1) + 1)


def curve_posterior(x: FloatArray, y: FloatArray) -> CurvePosterior:
    """Find the curves that agree with a trace.

    Args:
        x: shape (n,), strictly monotone, in order of time.
        y: shape (n,), finite, not all equal.

    Returns:
        Their posterior; deterministic.
    """
    middle, scale = float(np.mean(y)), float(np.ptp(y))
    knots = _knots(x)
    problem = _Problem(_design(knots, x), (y - middle) / scale)
    stiffness = np.ones(problem.differences.shape[0])
    for _ in range(2):
        parts = [problem.solve(share, stiffness) for share in FIRST_SHARES]
        best = int(np.argmin([part.criterion for part in parts]))
        stiffness = problem.adapt(FIRST_SHARES[best], parts[best], ROUNDS)
    parts = [problem.solve(share, stiffness) for share in PINK_SHARES]
    lowest = min(part.criterion for part in parts)
    weights = np.exp([lowest - part.criterion for part in parts])
    weights[weights < LEAST_WEIGHT * np.sum(weights)] = 0.0
    weights /= np.sum(weights)
    kept = tuple(replace(p, weight=float(w)) for p, w in zip(parts, weights, strict=True) if w > 0.0)
    white = sum(p.weight * p.variance * p.noise.white for p in kept)
    pink = sum(p.weight * p.variance * p.noise.pink for p in kept)
    noise = NoiseModel(scale**2 * white, scale**2 * pink, 1.0)
    return CurvePosterior(knots, noise, min(p.straight for p in parts) - lowest, kept, middle, scale)


class _Problem:
    """One trace on one B-spline basis, in the DCT where its noise is diagonal."""

    def __init__(self, design: FloatArray, y: FloatArray) -> None:
        self.n, self.m = design.shape
        self.design: FloatArray = dct(design, type=2, axis=0, norm="ortho")
        self.y: FloatArray = dct(y, type=2, norm="ortho")
        self.differences: FloatArray = np.diff(np.eye(self.m), n=ORDER, axis=0)
        self._normal: dict[float, tuple[NoiseModel, FloatArray, FloatArray, float, float]] = {}

    def solve(self, share: float, local: FloatArray) -> _Part:
        """Find the REML penalty for one share of 1/f noise.

        ``local`` (m - 2,) are relative stiffnesses.  The generalised eigenvectors of
        penalty and normal matrix make the criterion a sum over m terms (profile REML).
        """
        noise, normal, projected, squares, log_det = self._equations(float(share))
        penalty = (self.differences * local[:, None]).T @ self.differences
        stiffness, vectors = eigh(penalty, normal)
        stiffness = np.maximum(stiffness, 0.0)
        stiffness[:ORDER] = 0.0
        scores: FloatArray = vectors.T @ projected
        freedom, order = self.n - ORDER, self.m - ORDER
        logs = np.append(LOG_PENALTIES, STRAIGHT)
        shrink = 1.0 + 10.0 ** logs[:, None] * stiffness
        rest = np.maximum(squares - np.sum(scores**2 / shrink, axis=1), freedom * NOISE_FLOOR**2)
        criterion = 0.5 * (
            log_det
            + np.sum(np.log(shrink), axis=1)
            - order * np.log(10.0) * logs
            - np.sum(np.log(local))
            + freedom * np.log(rest / freedom)
        )
        at = int(np.argmin(criterion[:-1]))
        variance = float(rest[at]) / freedom
        return _Part(
            float(criterion[at]),
            float(criterion[-1]),
            float(logs[at]),
            stiffness,
            vectors,
            scores,
            variance,
            noise,
        )

    def adapt(self, share: float, part: _Part, rounds: int) -> FloatArray:
        """Re-estimate how strongly the curve bends at each knot; return stiffnesses (m - 2,)."""
        local = np.ones(self.differences.shape[0])
        for _ in range(rounds):
            spread = (self.differences @ part.vectors) / np.sqrt(part.shrink(0.0))
            size = (self.differences @ part.mean(0.0)) ** 2 + part.variance * np.sum(spread**2, axis=1)
            size = gaussian_filter1d(size, KERNEL, mode="nearest")
            local = np.exp(np.mean(np.log(size))) / size
            local = np.clip(local, 1.0 / STIFFNESS_RANGE, STIFFNESS_RANGE)
            part = self.solve(share, local)
        return local

    def _equations(self, share: float) -> tuple[NoiseModel, FloatArray, FloatArray, float, float]:
        """Return noise of unit variance, B'WB, B'Wy, y'Wy and log|B'WB| - log|W|."""
        if share not in self._normal:
            unit = NoiseModel(0.0, 1.0, 1.0)
            noise = NoiseModel(1.0 - share, share / unit.pink_rms(self.n) ** 2, 1.0)
            weight = 1.0 / noise.variances(self.n)
            weighted = self.design * weight[:, None]
            normal = self.design.T @ weighted
            normal[np.diag_indices(self.m)] += RIDGE * np.trace(normal) / self.m
            log_det = float(np.linalg.slogdet(normal)[1] - np.sum(np.log(weight)))
            squares = float(np.sum(weight * self.y**2))
            self._normal[share] = (noise, normal, weighted.T @ self.y, squares, log_det)
        return self._normal[share]


def _knots(x: FloatArray) -> FloatArray:
    """Return equal knots over x with three beyond each end, shape (m + 4,)."""
    low, high = float(np.min(x)), float(np.max(x))
    m = int(np.clip(x.size // SAMPLES_PER_COEFFICIENT, *COEFFICIENTS))
    step = (high - low) / (m - DEGREE)
    return low + step * np.arange(-DEGREE, m + 1, dtype=np.float64)


def _inside(knots: FloatArray, x: FloatArray) -> FloatArray:
    """Return x held inside the knots, against rounding at the ends."""
    return np.clip(x, knots[DEGREE], knots[-DEGREE - 1])


def _design(knots: FloatArray, x: FloatArray) -> FloatArray:
    """Return the values of the m B-splines at x, shape (len(x), m)."""
    matrix: FloatArray = BSpline.design_matrix(_inside(knots, x), knots, DEGREE).toarray()
    return matrix
