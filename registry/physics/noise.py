"""How noisy is a trace, when its noise is white plus 1/f^beta?

The noise of n samples in order of time is described by its spectrum

    S(f) = white + pink * f**-exponent,     f in cycles a sample, 0 < f <= 1/2,

two-sided, so that white noise alone has the variance ``white`` a sample.  The DCT-II
turns such noise very nearly into independent coefficients k = 0 ... n-1 of variance
S(k / 2n), so whitening, likelihood and generalised least squares cost n log n.  The
coefficient k = 0, which no 1/f noise bounds, is taken at k = 1/2; with a constant in
the design it has no influence at all.

The three numbers are posterior means over a grid of restricted likelihoods (REML:
D. A. Harville, J. Am. Stat. Assoc. 72 (1977) 320), not its maximum: a maximum at
"no 1/f noise" would deny the 1/f noise that the trace is too short to show.

Not here: noise that grows with the signal (``peak_windows``), spectra for their own sake.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.fft import dct, idct

from registry.samples import FloatArray

__all__ = ["LinearFit", "NoiseModel", "fit_noise", "gls_fit", "profile_log_likelihood"]

IndexArray = NDArray[np.intp]

#: Exponents tried; 1/f noise of devices lies near 1, slow drift near 2.
EXPONENTS = np.array([0.6, 0.8, 1.0, 1.2, 1.5, 2.0])
#: Prior on the exponent, centre and standard deviation (our choice: a trace of some
#: hundred samples hardly tells the exponent, and devices show 0.7 to 1.4).
EXPONENT_PRIOR = (1.0, 0.5)
#: Shares of 1/f noise in the variance, equally spaced in arcsin(sqrt(share)): the
#: Jeffreys prior of a share, which gives 0 and 1 their due.
PINK_SHARES = np.sin(np.linspace(0.0, 1.52, 16)) ** 2
#: Prior probability that there is no 1/f noise at all.  Chosen by simulation: without it
#: intervals on white noise are too wide (80 % for 68 %), with 0.5 those on weak 1/f
#: noise are too narrow (62 %).
NO_PINK_PRIOR = 0.3
#: DCT coefficients are kept apart up to this one, then pooled in bins ...
FIRST_POOLED = 48
#: ... this much wider each (relative): S(f) changes by less than 4 % inside a bin.
BIN_GROWTH = 0.04
#: Smallest noise assumed, relative to the largest sample: rounding of doubles.
ROUNDING = 4.0 * float(np.finfo(float).eps)


@dataclass(frozen=True)
class NoiseModel:
    """Noise of one trace: the spectrum ``white + pink * f**-exponent``.

    Attributes:
        white: variance a sample of the white part, in the signal's unit squared.
        pink: spectral density of the 1/f part at f = 1 cycle a sample, same unit.
        exponent: of f, positive.
    """

    white: float
    pink: float
    exponent: float

    def variances(self, n: int) -> FloatArray:
        """Return the variances of the n orthonormal DCT-II coefficients, shape (n,)."""
        return self.white + self.pink * _frequencies(n) ** -self.exponent

    def whiten(self, array: FloatArray) -> FloatArray:
        """Return ``array`` (n,) or (n, m) with each column turned to unit white noise."""
        values = np.asarray(array, dtype=float)
        scale = np.sqrt(self.variances(values.shape[0]))
        coefficients: FloatArray = dct(values, type=2, axis=0, norm="ortho")
        return coefficients / (scale if values.ndim == 1 else scale[:, None])

    def covariance(self, n: int) -> FloatArray:
        """Return the covariance of n samples in order of time, shape (n, n)."""
        basis = _basis(n)
        return (basis * self.variances(n)) @ basis.T

    def white_rms(self) -> float:
        """Return the rms of the white part, in the signal's unit."""
        return float(np.sqrt(self.white))

    def pink_rms(self, n: int) -> float:
        """Return the rms of the 1/f part about the mean of n samples."""
        return float(np.sqrt(self.pink * np.sum(_frequencies(n)[1:] ** -self.exponent) / n))

    def draw(self, n: int, rng: np.random.Generator) -> FloatArray:
        """Return n samples of such noise, shape (n,), from the DCT model itself."""
        noise: FloatArray = idct(rng.normal(size=n) * np.sqrt(self.variances(n)), type=2, norm="ortho")
        return noise


@dataclass(frozen=True, eq=False)
class LinearFit:
    """A generalised least-squares fit of ``design @ coefficients``.

    Attributes:
        coefficients: shape (p,).
        covariance: shape (p, p).
        noise: the noise it was done under.
        log_likelihood: of the residuals under that noise.
        residuals: shape (n,), in the signal's unit.
    """

    coefficients: FloatArray
    covariance: FloatArray
    noise: NoiseModel
    log_likelihood: float
    residuals: FloatArray


def fit_noise(residuals: FloatArray, design: FloatArray | None = None) -> NoiseModel:
    """Estimate the noise of a trace from its residuals.

    Args:
        residuals: shape (n,), in order of time, finite; a raw trace will do where
            ``design`` describes it.
        design: shape (n, p), the columns the residuals were (or are to be) freed of:
            the Jacobian of the fit at its solution.  None means a constant.

    Returns:
        The posterior mean; never exactly without noise (see ``ROUNDING``).

    Raises:
        ValueError: fewer than p + 2 samples.
    """
    grid = _GridLikelihood(residuals, design)
    weight = grid.posterior()
    variance = grid.variance
    white = float(np.sum(weight * variance * (1.0 - grid.share)))
    pink_part = weight * variance * grid.share
    exponent = float(np.sum(pink_part * grid.exponent) / max(np.sum(pink_part), 1e-300))
    shape = _frequencies(grid.n)[1:] ** -exponent
    return NoiseModel(max(white, grid.floor), float(np.sum(pink_part) / np.mean(shape)), exponent)


def gls_fit(y: FloatArray, design: FloatArray, noise: NoiseModel | None = None) -> LinearFit:
    """Fit ``design @ c`` to ``y`` under white + 1/f noise.

    Args:
        y: shape (n,), in order of time.
        design: shape (n, p), of full rank.
        noise: None estimates it from this very fit.

    Returns:
        Coefficients with the covariance ``(X' C^-1 X)^-1``.
    """
    model = fit_noise(y, design) if noise is None else noise
    white_design, white_y = model.whiten(design), model.whiten(y)
    q, r = np.linalg.qr(white_design)
    coefficients = np.linalg.solve(r, q.T @ white_y)
    inverse = np.linalg.inv(r)
    rest = white_y - white_design @ coefficients
    log_det = float(np.sum(np.log(model.variances(y.size))))
    log_likelihood = -0.5 * (float(rest @ rest) + log_det + y.size * np.log(2.0 * np.pi))
    return LinearFit(coefficients, inverse @ inverse.T, model, log_likelihood, y - design @ coefficients)


def profile_log_likelihood(y: FloatArray, design: FloatArray) -> float:
    """Return the log-likelihood of ``y`` at its best coefficients and best noise.

    Plain likelihood, not restricted, so that designs can be compared.  The noise is the
    best on the grid with its exponent held to the prior; a constant is left out.
    """
    grid = _GridLikelihood(y, design)
    return float(np.max(grid.plain))


class _GridLikelihood:
    """Likelihoods of one trace on the grid of share x exponent, its variance profiled."""

    def __init__(self, y: FloatArray, design: FloatArray | None) -> None:
        values = np.asarray(y, dtype=float)
        self.n = values.size
        columns = np.ones((self.n, 1)) if design is None else np.asarray(design, dtype=float)
        p = columns.shape[1]
        if self.n < p + 2:
            raise ValueError(f"{self.n} samples cannot tell the noise about {p} parameters")
        basis, _ = np.linalg.qr(dct(columns, type=2, axis=0, norm="ortho"))
        coefficients = dct(values, type=2, norm="ortho")
        coefficients -= basis @ (basis.T @ coefficients)  # else a large signal rounds the noise away
        spectrum, edges, counts = _grid(self.n)
        weight = 1.0 / spectrum
        outer = (basis[:, :, None] * basis[:, None, :]).reshape(self.n, p * p)
        a = (weight @ np.add.reduceat(outer, edges, axis=0)).reshape(-1, p, p)
        b = weight @ np.add.reduceat(basis * coefficients[:, None], edges, axis=0)
        c = weight @ np.add.reduceat(coefficients**2, edges)
        rest = c - np.einsum("gp,gp->g", b, np.linalg.solve(a, b[..., None])[..., 0])
        self.floor = (ROUNDING * float(np.max(np.abs(values)))) ** 2 + float(np.finfo(float).tiny)
        rest = np.maximum(rest, self.floor * self.n)
        self.share, self.exponent = _nodes()
        prior = -0.5 * ((self.exponent - EXPONENT_PRIOR[0]) / EXPONENT_PRIOR[1]) ** 2
        log_det = np.log(spectrum) @ counts
        self.variance = rest / (self.n - p)
        self.restricted = prior - 0.5 * (
            (self.n - p) * np.log(self.variance) + log_det + np.linalg.slogdet(a)[1]
        )
        self.plain = prior - 0.5 * (self.n * np.log(rest / self.n) + log_det + self.n)

    def posterior(self) -> FloatArray:
        """Return the weights of the grid's nodes, summing to one."""
        no_pink = self.share == 0.0
        odds = NO_PINK_PRIOR / (1.0 - NO_PINK_PRIOR) * (PINK_SHARES.size - 1)
        height = self.restricted + np.where(no_pink, np.log(odds), 0.0)
        weight: FloatArray = np.exp(height - np.max(height))
        return weight / np.sum(weight)


def _nodes() -> tuple[FloatArray, FloatArray]:
    """Return share and exponent of every node, each of shape (G,)."""
    share, exponent = np.meshgrid(PINK_SHARES, EXPONENTS, indexing="ij")
    return share.ravel(), exponent.ravel()


@lru_cache(maxsize=32)
def _grid(n: int) -> tuple[FloatArray, IndexArray, FloatArray]:
    """Return unit spectra (G, bins), the first coefficient of each bin, the bin counts.

    Each spectrum has the mean 1 over the coefficients k = 1 ... n-1.
    """
    edges = _bin_edges(n)
    counts = np.diff(np.append(edges, n)).astype(float)
    shape = _frequencies(n)[None, :] ** -EXPONENTS[:, None]
    shape /= np.mean(shape[:, 1:], axis=1, keepdims=True)
    pooled = np.add.reduceat(shape, edges, axis=1) / counts
    spectra = (1.0 - PINK_SHARES)[:, None, None] + PINK_SHARES[:, None, None] * pooled[None]
    return spectra.reshape(-1, edges.size), edges, counts


def _bin_edges(n: int) -> IndexArray:
    """Return where the bins of DCT coefficients begin: singly first, then pooled."""
    edges = list(range(min(n, FIRST_POOLED)))
    edge = float(FIRST_POOLED)
    while edge < n:
        edges.append(int(edge))
        edge = max(edge + 1.0, edge * (1.0 + BIN_GROWTH))
    return np.array(edges, dtype=np.intp)


@lru_cache(maxsize=32)
def _frequencies(n: int) -> FloatArray:
    """Return the frequency of each DCT-II coefficient in cycles a sample, shape (n,)."""
    k = np.arange(n, dtype=float)
    k[0] = 0.5
    return k / (2.0 * n)


@lru_cache(maxsize=32)
def _basis(n: int) -> FloatArray:
    """Return the orthonormal DCT-II basis, one function a column, shape (n, n)."""
    basis: FloatArray = idct(np.eye(n), type=2, axis=0, norm="ortho")
    return basis
