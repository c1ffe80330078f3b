"""Which smooth curve of current against gate volts fits a leak, and how well is it known?

    I(V) = I_0 + G V + a_+ s((V - V_1)/v_0) + a_- s((-V - V_1)/v_0),     s(u) = ln(1 + exp u),

each s counted from its value at V = 0: a resistance plus, on either side, a turn-on that
begins like an exponential and goes on like a straight line.  V_1 and v_0 are taken from a
grid of shapes; results are means over the shapes, weighted by their likelihood under
white + 1/f noise (``noise``), so that the doubt about the shape is in the uncertainty.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from registry.physics.noise import NoiseModel, fit_noise
from registry.samples import FloatArray

__all__ = ["LeakFit", "fit_leak"]

#: Onsets V_1 tried, in the largest volts of that side; above 1 the shape is an exponential.
ONSETS = (0.0, 0.15, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0, 1.2)
#: Sharpness v_0 tried, in the same unit.
SHARPNESS = (0.015, 0.03, 0.06, 0.12, 0.25)
#: A side shorter than this share of the sweep gets no turn-on of its own.
LEAST_SIDE = 0.15
#: Log-likelihood a turn-on must gain to be used: three numbers more.
GAIN_OF_TURN_ON = 4.0
#: Passes: the noise is estimated anew about the best curve.
PASSES = 3


#: Sign of the side, V_1 and v_0 of a turn-on (V).
Shape = tuple[float, float, float]
#: The turn-on above and below zero volts, where there is one.
Shapes = list[Shape | None]
#: Shapes tried with their weights.
Mixture = list[tuple[Shapes, float]]


@dataclass(frozen=True, eq=False)
class LeakFit:
    """A mean over curves.

    Attributes:
        grid: volts, shape (g,); ``leak``: I(V) - I(0), or less the offset, A; ``u``: its standard
            uncertainty.
        slope, slope_u: dI/dV at V = 0 (A/V).
        fitted: the best curve at the samples, shape (n,), A.
        design: its columns, shape (n, p); ``covariance`` of their coefficients.
        noise: about it.
    """

    grid: FloatArray
    leak: FloatArray
    u: FloatArray
    slope: float
    slope_u: float
    fitted: FloatArray
    design: FloatArray
    covariance: FloatArray
    noise: NoiseModel


def fit_leak(x: FloatArray, y: FloatArray, grid: FloatArray, offset: float | None = None) -> LeakFit:
    """Fit the current ``y`` (A), in order of time, against gate volts ``x``, each (n,).

    Args:
        grid: volts at which the leak is wanted, shape (g,).
        offset: the current without a leak (A); None: the curve at V = 0.
    """
    shapes: Shapes = [None, None]
    noise = fit_noise(y, _design(x, shapes))
    mixtures: dict[int, Mixture] = {}
    for _ in range(PASSES):
        for side, reach in enumerate((float(np.max(x)), -float(np.min(x)))):
            if reach > LEAST_SIDE * np.ptp(x):
                shapes, mixtures[side] = _best(x, y, shapes, side, reach, noise)
        noise = fit_noise(y, _design(x, shapes))
    # the doubt about the shape on one side hardly touches the leak on the other
    means = [_mean(x, y, grid, mixture, noise, offset) for mixture in mixtures.values()]
    upper, lower = means[0], means[-1]
    mean, u = np.where(np.append(grid, 0.0) >= 0.0, upper, lower)
    coefficients, covariance, _ = _solve(x, y, shapes, noise)
    design = _design(x, shapes)
    return LeakFit(
        grid=grid,
        leak=mean[:-1],
        u=u[:-1],
        slope=float(mean[-1]),
        slope_u=float(u[-1]),
        fitted=design @ coefficients,
        design=design,
        covariance=covariance,
        noise=noise,
    )


def _shape(x: FloatArray, shape: Shape) -> FloatArray:
    """Return one turn-on, zero at V = 0, shape as ``x``."""
    sign, onset, sharpness = shape
    out: FloatArray = np.logaddexp(0.0, (sign * x - onset) / sharpness) - np.logaddexp(
        0.0, -onset / sharpness
    )
    return sharpness * out


def _design(x: FloatArray, shapes: Shapes) -> FloatArray:
    """Return the columns 1, V and the turn-ons there are, shape (n, p)."""
    return np.stack([np.ones(x.size), x, *(_shape(x, one) for one in shapes if one is not None)], axis=1)


def _solve(
    x: FloatArray, y: FloatArray, shapes: Shapes, noise: NoiseModel
) -> tuple[FloatArray, FloatArray, float]:
    """Return coefficients, covariance and log-likelihood (a constant left out)."""
    design, target = noise.whiten(_design(x, shapes)), noise.whiten(y)
    norm = np.linalg.norm(design, axis=0)
    u, values, vt = np.linalg.svd(design / norm, full_matrices=False)
    inverse = np.where(values > 1e-9 * values[0], 1.0 / values, 0.0)
    projected = u.T @ target
    coefficients = vt.T @ (inverse * projected) / norm
    covariance = (vt.T * inverse**2) @ vt / np.outer(norm, norm)
    return coefficients, covariance, 0.5 * float(projected @ projected)


def _best(
    x: FloatArray,
    y: FloatArray,
    shapes: Shapes,
    side: int,
    reach: float,
    noise: NoiseModel,
) -> tuple[Shapes, Mixture]:
    """Return the best shapes with that side's chosen anew, and all tried with their weights."""
    without = [None if k == side else one for k, one in enumerate(shapes)]
    tried = [without]
    for onset in ONSETS:
        for sharpness in SHARPNESS:
            one = list(without)
            one[side] = (1.0 if side == 0 else -1.0, onset * reach, sharpness * reach)
            tried.append(one)
    gain = np.array([_solve(x, y, one, noise)[2] for one in tried])
    gain[1:] -= GAIN_OF_TURN_ON
    weight = np.exp(gain - np.max(gain))
    best = tried[int(np.argmax(gain))]
    return best, [(one, float(w)) for one, w in zip(tried, weight, strict=True) if w > 1e-4]


def _mean(
    x: FloatArray,
    y: FloatArray,
    grid: FloatArray,
    mixture: Mixture,
    noise: NoiseModel,
    offset: float | None,
) -> FloatArray:
    """Return leak on the grid and slope at zero (last), averaged over shapes, and their u: (2, g + 1)."""
    step = 1e-4 * float(np.ptp(x))
    wanted = np.concatenate([grid, [step, -step, 0.0]])
    means, variances, weights = [], [], []
    for one, weight in mixture:
        coefficients, covariance, _ = _solve(x, y, one, noise)
        rows = _design(wanted, one)
        slope = (rows[-3] - rows[-2]) / (2.0 * step)
        rows = np.vstack([rows[:-3] - (rows[-1] if offset is None else 0.0), slope])
        means.append(rows @ coefficients)
        variances.append(np.einsum("gp,pq,gq->g", rows, covariance, rows))
        weights.append(weight)
    share = np.array(weights)[:, None] / np.sum(weights)
    mean = np.sum(share * np.array(means), axis=0)
    variance = np.sum(share * (np.array(variances) + (np.array(means) - mean) ** 2), axis=0)
    mean[:-1] -= offset or 0.0
    return np.stack([mean, np.sqrt(variance)])
