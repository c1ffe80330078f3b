"""How steep are the parallel lines of a family, when charges drift while the map is taken?

Places of the lines of one family, in order of time t (row of the map),

    at = a[segment] + slope * along + w(t) + e,
    cov(w(t), w(t')) = sigma_w^2 min(t, t'),     var e = sigma_e^2 v,

a common random walk w of the dot's own charge and independent errors e.  The ratio
sigma_w^2 / sigma_e^2 has no sharp value in a map: the answer is the mean over its
posterior on a grid of restricted likelihoods (REML: D. A. Harville, J. Am. Stat. Assoc.
72 (1977) 320), the scatter between grid points included.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from registry.physics.line_places import Segment
from registry.samples import FloatArray

__all__ = ["SlopeFit", "fit_slope"]

#: Places are averaged to at most so many before the fit, which costs their cube.
MOST_PLACES = 240
#: Ratios sigma_w^2 / sigma_e^2 a row tried; 0 has this prior probability.
WALKS = np.geomspace(3e-4, 10.0, 12)
NO_WALK_PRIOR = 0.05
#: Smallest error of a place assumed, pixels: rounding.
SMALLEST_ERROR = 1e-6


@dataclass(frozen=True, eq=False)
class SlopeFit:
    """Offsets of all segments and their common slope, in pixels.

    Attributes:
        values: a[0] ... a[K-1], slope; ``at`` at ``along = reference``; shape (K + 1,).
        covariance: shape (K + 1, K + 1).
        reference: where along the lines the offsets hold.
        freedom: places used less free numbers.
        walk: posterior mean of sigma_w, pixels a square root of a row.
        error: posterior mean of sigma_e of a typical place, pixels.
    """

    values: FloatArray
    covariance: FloatArray
    reference: float
    freedom: float
    walk: float
    error: float

    @property
    def slope(self) -> float:
        """``at`` over ``along``, pixels a pixel."""
        return float(self.values[-1])

    @property
    def slope_u(self) -> float:
        """Standard uncertainty of the slope."""
        return float(np.sqrt(self.covariance[-1, -1]))


def fit_slope(segments: tuple[Segment, ...], by_row: bool) -> SlopeFit:
    """Fit the common slope of a family's segments.

    Args:
        segments: at least one, with 5 places or more.
        by_row: ``along`` is the row, else ``at`` is.
    """
    at, along, variance, owner = _thinned(segments)
    reference = float(np.mean(along))
    design = np.zeros((at.size, len(segments) + 1))
    design[np.arange(at.size), owner] = 1.0
    design[:, -1] = along - reference
    # The row of a place along columns is that of the line: its own row holds its error.
    time = along if by_row else design @ np.linalg.lstsq(design, at)[0]
    time = time - float(np.min(time))
    usual = float(np.median(variance))
    walk = np.minimum.outer(time, time)
    ratios = np.append(0.0, WALKS)
    prior = np.append(NO_WALK_PRIOR, np.full(WALKS.size, (1.0 - NO_WALK_PRIOR) / WALKS.size))
    fits = [_fit_at(at, design, np.diag(variance / usual) + ratio * walk) for ratio in ratios]
    height = np.array([one[2] for one in fits]) + np.log(prior)
    weight = np.exp(height - height.max())
    weight /= weight.sum()
    values = np.array([one[0] for one in fits])
    mean = weight @ values
    apart = values - mean
    covariance = np.einsum("g,gij->ij", weight, np.array([one[1] for one in fits]))
    covariance += np.einsum("g,gi,gj->ij", weight, apart, apart)
    error = np.array([one[3] for one in fits])
    return SlopeFit(
        mean,
        covariance,
        reference,
        float(at.size - design.shape[1]),
        float(np.sqrt(weight @ (error**2 * ratios))),
        float(weight @ error),
    )


def _thinned(segments: tuple[Segment, ...]) -> tuple[FloatArray, FloatArray, FloatArray, NDArray[np.intp]]:
    """Return place, along, relative variance and segment, neighbours averaged if too many."""
    total = sum(one.at.size for one in segments)
    group = -(-total // MOST_PLACES)
    parts = []
    for k, one in enumerate(segments):
        starts = np.arange(0, one.at.size, group)
        counts = np.diff(np.append(starts, one.at.size))
        parts.append(
            (
                np.add.reduceat(one.at, starts) / counts,
                np.add.reduceat(one.along, starts) / counts,
                np.add.reduceat(one.variance, starts) / counts**2,
                np.full(starts.size, k, dtype=np.intp),
            )
        )
    at, along, variance, owner = (np.concatenate(columns) for columns in zip(*parts, strict=True))
    return at, along, variance, owner


def _fit_at(
    at: FloatArray, design: FloatArray, shape: FloatArray
) -> tuple[FloatArray, FloatArray, float, float]:
    """Return values, covariance, restricted log-likelihood and sigma_e at one shape of noise."""
    lower = np.linalg.cholesky(shape)
    white = np.linalg.solve(lower, np.column_stack([design, at]))
    q, r = np.linalg.qr(white[:, :-1])
    values = np.linalg.solve(r, q.T @ white[:, -1])
    rest = white[:, -1] - white[:, :-1] @ values
    freedom = at.size - design.shape[1]
    square = max(float(rest @ rest) / freedom, SMALLEST_ERROR**2)
    inverse = np.linalg.inv(r)
    log_det = 2.0 * float(np.sum(np.log(np.diag(lower))) + np.sum(np.log(np.abs(np.diag(r)))))
    return values, square * inverse @ inverse.T, -0.5 * (freedom * np.log(square) + log_det), np.sqrt(square)
