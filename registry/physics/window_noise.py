"""How noisy are windows cut from one trace, if the noise may grow with the signal?

The noise of n samples (or block means) in order of time has the covariance

    cov(y_i, y_j) = variance [(1 - s) delta_ij + s K_ij + k q_i^2 delta_ij],

with s the share of 1/f noise (K: its covariance, of mean variance 1 about the window's
mean; exponent 1), and k the strength of gain noise, which grows with the signal q (the
peak over the tallest peak's height).  One s and k hold for all windows of a trace; both
are posterior means over a grid of restricted likelihoods, as in ``noise``.

Windows are stacked: arrays have one row a window, shape (P, n).  Samples not used have
the rows and columns of a unit matrix and residual 0, so they change nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from registry.physics.noise import NO_PINK_PRIOR, NoiseModel
from registry.samples import FloatArray

__all__ = [
    "NO_NOISE_KNOWN",
    "Mask",
    "Whitener",
    "WindowNoise",
    "learn_noise",
    "plain_log_likelihood",
    "whitener",
]

Mask = NDArray[np.bool_]

#: Samples the noise is learnt from, spread over the windows: enough for the share of 1/f
#: noise, and it bounds the cost of many peaks.
NOISE_SAMPLES = 400
#: Grid: share of 1/f noise, equally spaced in arcsin(sqrt(share)), ...
PINK_SHARES = np.sin(np.array([0.0, 0.35, 0.7, 1.05, 1.4])) ** 2
#: ... and variance of the gain noise at the top of the tallest peak over the additive one.
GAIN_STRENGTHS = np.array([0.0, 0.5, 2.0, 8.0, 32.0, 128.0])
#: Prior probability of no gain noise.
NO_GAIN_PRIOR = 0.5
#: Added to the scaled normal matrix, so that a window with few used samples has a determinant.
RIDGE = 1e-12
#: Smallest noise relative to the signal: rounding of doubles.
ROUNDING = 4.0 * float(np.finfo(float).eps)


@dataclass(frozen=True)
class WindowNoise:
    """Noise of a sample: variance, share of 1/f noise in it, gain noise over it at the top.

    ``exponent`` is that of the 1/f noise: 1, or 2 for a random walk.
    """

    variance: float
    share: float
    gain: float
    exponent: float = 1.0


#: White noise of unit variance: least squares without weights.
NO_NOISE_KNOWN = WindowNoise(1.0, 0.0, 0.0)


@dataclass(frozen=True, eq=False)
class Whitener:
    """What turns residuals of every window into unit white noise.

    Attributes:
        matrix: W with W C W' = 1, columns not used zero, shape (P, n, n).
        log_det: of each window's covariance, for unit variance, shape (P,).
    """

    matrix: FloatArray
    log_det: FloatArray

    def white(self, rest: FloatArray) -> FloatArray:
        """Return whitened values (P, n) of ``rest`` (P, n)."""
        whitened: FloatArray = np.einsum("pij,pj->pi", self.matrix, rest)
        return whitened


def whitener(signal: FloatArray, used: Mask, noise: WindowNoise) -> Whitener:
    """Return the whitener of every window; ``signal`` and ``used`` have the shape (P, n)."""
    if noise.share == 0.0 and noise.gain == 0.0:
        count, n = signal.shape
        matrix = np.eye(n) * (used / np.sqrt(noise.variance))[:, None, :]
        return Whitener(np.broadcast_to(matrix, (count, n, n)), np.zeros(count))
    unit = _unit_covariance(signal, used, np.array([noise.share]), np.array([noise.gain]), noise.exponent)[0]
    root = np.linalg.cholesky(unit)
    log_det = 2.0 * np.sum(np.log(np.einsum("pii->pi", root)), axis=1)
    inverse = np.linalg.inv(root) / np.sqrt(noise.variance)
    return Whitener(np.where(used[:, None, :], inverse, 0.0), log_det)


def learn_noise(
    rest: FloatArray, design: FloatArray, signal: FloatArray, used: Mask, exponent: float = 1.0
) -> WindowNoise:
    """Return the posterior mean of the noise over the grid.

    Args:
        rest: residuals, shape (P, n).
        design: the columns they were freed of, shape (P, n, q); zero where not used.
        signal: what gain noise is proportional to, at most 1, shape (P, n).
        used: shape (P, n).
        exponent: of the 1/f noise.
    """
    some = _spread(*rest.shape)
    rest, design, signal, used = rest[some], design[some], signal[some], used[some]
    gains = GAIN_STRENGTHS if np.any(signal) else np.zeros(1)
    share, gain = (grid.ravel() for grid in np.meshgrid(PINK_SHARES, gains, indexing="ij"))
    variance, height = _restricted(rest, design, used, _unit_covariance(signal, used, share, gain, exponent))
    height = height + _log_odds(share == 0.0, NO_PINK_PRIOR, PINK_SHARES.size)
    if gains.size > 1:
        height += _log_odds(gain == 0.0, NO_GAIN_PRIOR, gains.size)
    weight = np.exp(height - np.max(height))
    weight /= np.sum(weight)
    total = float(weight @ variance)
    return WindowNoise(
        variance=total,
        share=float(weight @ (variance * share)) / total,
        gain=float(weight @ (variance * gain)) / total,
        exponent=exponent,
    )


def plain_log_likelihood(white: FloatArray, used: Mask, log_det: FloatArray, noise: WindowNoise) -> float:
    """Return the log-likelihood of whitened residuals (P, n), a constant left out.

    The variance is set to its best value, so that two fits compare at their best.
    """
    count = int(np.count_nonzero(used))
    best = max(noise.variance * float(np.sum(white**2)) / count, ROUNDING**2)
    return -0.5 * (count * float(np.log(best)) + count + float(np.sum(log_det)))


def _spread(count: int, samples: int) -> NDArray[np.intp]:
    """Return the windows the noise is learnt from, spread over the trace."""
    some = max(1, min(count, NOISE_SAMPLES // samples))
    return np.unique(np.linspace(0, count - 1, some).round().astype(np.intp))


def _log_odds(none: Mask, prior: float, nodes: int) -> FloatArray:
    """Return the log prior of each node relative to one node that is not ``none``."""
    odds: FloatArray = np.where(none, np.log(prior / (1.0 - prior) * (nodes - 1)), 0.0)
    return odds


def _restricted(
    rest: FloatArray, design: FloatArray, used: Mask, covariance: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return best variance and restricted log-likelihood at every node, each (nodes,)."""
    root = np.linalg.cholesky(covariance)
    known = np.concatenate([design, rest[..., None]], axis=2)
    white = np.linalg.solve(root, np.broadcast_to(known, (*root.shape[:2], *known.shape[1:])))
    normal = np.swapaxes(white, -1, -2) @ white
    inner, cross, square = normal[..., :-1, :-1], normal[..., :-1, -1:], normal[..., -1, -1]
    scale = np.sqrt(np.maximum(np.einsum("kpii->kpi", inner), np.finfo(float).tiny))
    inner = inner / (scale[..., :, None] * scale[..., None, :]) + RIDGE * np.eye(inner.shape[-1])
    cross = cross / scale[..., None]
    freed = np.sum(square - np.sum(cross * np.linalg.solve(inner, cross), axis=(2, 3)), axis=1)
    freedom = max(1, int(np.count_nonzero(used)) - design.shape[0] * design.shape[2])
    variance = np.maximum(freed / freedom, ROUNDING**2)
    log_det = 2.0 * np.sum(np.log(np.einsum("kpii->kpi", root)), axis=2)
    log_det = log_det + np.linalg.slogdet(inner)[1] + 2.0 * np.sum(np.log(scale), axis=2)
    return variance, -0.5 * (freedom * np.log(variance) + np.sum(log_det, axis=1))


def _unit_covariance(
    signal: FloatArray, used: Mask, shares: FloatArray, gains: FloatArray, exponent: float
) -> FloatArray:
    """Return the covariance for unit variance, shape (nodes, P, n, n).

    Args:
        signal: peak over the tallest peak's height, shape (P, n).
        used: shape (P, n); rows and columns of the others are those of a unit matrix.
        shares, gains: one a node, shape (nodes,).
        exponent: of the 1/f noise.
    """
    n = signal.shape[1]
    unit = NoiseModel(0.0, 1.0, exponent)
    pink = unit.covariance(n) / unit.pink_rms(n) ** 2
    eye = np.eye(n)
    additive = (1.0 - shares)[:, None, None] * eye + shares[:, None, None] * pink
    covariance = np.repeat(additive[:, None], signal.shape[0], axis=1)
    diagonal = np.einsum("kpii->kpi", covariance)
    diagonal += gains[:, None, None] * signal**2
    both = used[:, :, None] & used[:, None, :]
    masked: FloatArray = np.where(both, covariance, eye)
    return masked
