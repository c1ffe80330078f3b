"""Which power law, white floor and Lorentzian explain a spectrum?

    S(f) = A / f^b + B  [+ C / (1 + (f/f_0)^2)],        f in Hz,

by the Gamma likelihood of Welch ordinates, log L = -(nu/2) sum [ln S + P/S] / 1.94
(``welch``).  Ordinates are pooled where S(f) changes little, their likelihood kept: no line
through logarithms, whose mean is biased.  Power law and floor: posterior over a grid of b
and the knee, where the two are equal, the common factor integrated out in closed form.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import optimize, stats

from registry.physics.welch import BIN_CORRELATION, Spectrum
from registry.samples import FloatArray

__all__ = [
    "Pooled",
    "PowerLaw",
    "Switching",
    "fit_power_law",
    "fit_switching",
    "misfit_chance",
    "pool",
    "white_bound",
    "white_gain",
]

#: Exponents tried: limits and number; the grid is zoomed to where the posterior is.
LOWEST, HIGHEST, EXPONENTS = 0.1, 2.6, 61
#: Knees tried: from below the spectrum (no power law) to far above it (no floor).
KNEE_BELOW, KNEE_ABOVE, KNEES = 0.1, 1e3, 61
#: The grid is zoomed to where the log-posterior is this close to its maximum, so often.
ZOOM, ZOOMS = 12.0, 2
#: An exponent leans on its limit if the posterior there is this share of its maximum.
EDGE = 0.1
#: Ordinates are pooled from this one on, in bins this much wider each.
FIRST_POOLED, POOL_GROWTH = 24, 0.04
#: Bins of the test of misfit are this much wider each.
MISFIT_GROWTH = 0.35
#: Fall of the log-likelihood at a one-sided 95 % bound, with the noise of this test's size.
BOUND_FALL = 1.353
#: Corner frequencies tried for a Lorentzian.
CORNERS = 12
#: Of the starts made from them so many are followed.
STARTS = 3


@dataclass(frozen=True, eq=False)
class Pooled:
    """Pooled ordinates: mean frequency (Hz), mean density, weight nu/2/1.94, each (k,)."""

    f: FloatArray
    density: FloatArray
    weight: FloatArray


@dataclass(frozen=True, eq=False)
class PowerLaw:
    """Power law and floor.

    Attributes:
        mean: of ln A (A at 1 Hz) and b, shape (2,); ``covariance`` (2, 2).
        best: A, b, B of the most probable node.
        log_likelihood: there.
        at_edge: whether b leans on the limits of the grid.
    """

    mean: FloatArray
    covariance: FloatArray
    best: FloatArray
    log_likelihood: float
    at_edge: bool

    def density(self, f: FloatArray) -> FloatArray:
        """Return the best S(f), shape as ``f`` (Hz)."""
        a, b, floor = self.best
        out: FloatArray = a * f**-b + floor
        return out


@dataclass(frozen=True, eq=False)
class Switching(PowerLaw):
    """Power law, floor and Lorentzian; ``plateau`` C and ``corner`` f_0 (Hz)."""

    plateau: float = 0.0
    corner: float = 1.0

    def density(self, f: FloatArray) -> FloatArray:
        """Return the best S(f), shape as ``f`` (Hz)."""
        return super().density(f) + self.plateau / (1.0 + (f / self.corner) ** 2)

    def rms(self) -> float:
        """Return the root of the Lorentzian's variance, pi C f_0 / 2."""
        return float(np.sqrt(0.5 * np.pi * self.plateau * self.corner))


def pool(spectrum: Spectrum, growth: float = POOL_GROWTH, first: int = FIRST_POOLED) -> Pooled:
    """Pool neighbouring ordinates in bins that widen by ``growth`` from number ``first`` on."""
    edges = list(range(min(first, spectrum.f.size)))
    edge = float(first)
    while edge < spectrum.f.size:
        edges.append(int(edge))
        edge = max(edge + 1.0, edge * (1.0 + growth))
    counts = np.diff([*edges, spectrum.f.size])
    return Pooled(
        np.exp(np.add.reduceat(np.log(spectrum.f), edges) / counts),
        np.add.reduceat(spectrum.density, edges) / counts,
        0.5 * spectrum.nu * counts / BIN_CORRELATION,
    )


def fit_power_law(pooled: Pooled) -> PowerLaw:
    """Fit A / f^b + B."""
    limits = np.array(
        [[np.log(KNEE_BELOW * pooled.f[0]), np.log(KNEE_ABOVE * pooled.f[-1])], [LOWEST, HIGHEST]]
    )
    for zoom in range(ZOOMS + 1):
        log_knees, exponents = _steps(limits[0], KNEES), _steps(limits[1], EXPONENTS)
        log_ratio = np.log(pooled.f) - log_knees[:, None]
        shape = np.exp(-exponents[:, None] * log_ratio[:, None, :]) + 1.0
        height, floor = _profile(pooled, shape)
        if zoom < ZOOMS:
            close = np.nonzero(height > np.max(height) - ZOOM)
            for one, (values, index) in enumerate(zip((log_knees, exponents), close, strict=True)):
                last = values.size - 1
                limits[one] = values[max(index.min() - 1, 0)], values[min(index.max() + 1, last)]
    log_a = np.log(floor) + exponents * log_knees[:, None]
    exponent = np.broadcast_to(exponents, log_a.shape)
    weight = np.exp(height - np.max(height))
    weight /= np.sum(weight)
    stack = np.stack([log_a, exponent])
    mean = np.sum(weight * stack, axis=(1, 2))
    offset = stack - mean[:, None, None]
    covariance = np.einsum("kb,ikb,jkb->ij", weight, offset, offset)
    covariance[0, 0] += 1.0 / float(np.sum(pooled.weight))
    at = np.unravel_index(int(np.argmax(height)), height.shape)
    of_exponent = np.sum(weight, axis=0)
    return PowerLaw(
        mean,
        covariance,
        np.array([np.exp(log_a[at]), exponents[at[1]], floor[at]]),
        float(height[at]),
        bool(
            (exponents[0] == LOWEST and of_exponent[0] > EDGE * np.max(of_exponent))
            or (exponents[-1] == HIGHEST and of_exponent[-1] > EDGE * np.max(of_exponent))
        ),
    )


def _steps(limits: FloatArray, count: int) -> FloatArray:
    """Return ``count`` equal steps between the two ``limits``, both included."""
    return np.linspace(float(limits[0]), float(limits[1]), count)


def _profile(pooled: Pooled, shape: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return log-likelihood and best factor for shapes (..., k)."""
    total = float(np.sum(pooled.weight))
    factor = (pooled.density / shape) @ pooled.weight / total
    return -(np.log(shape) @ pooled.weight) - total * np.log(factor) - total, factor


def white_gain(pooled: Pooled, fit: PowerLaw) -> float:
    """Return the log-likelihood the fit gains over white noise alone."""
    return fit.log_likelihood - float(_profile(pooled, np.ones((1, pooled.f.size)))[0][0])


def white_bound(pooled: Pooled) -> float:
    """Return the 95 % upper bound of A for noise 1/f with b = 1 beside the floor."""
    share = np.append(0.0, np.geomspace(1e-5, 1e3, 800) * pooled.f[0])
    height, floor = _profile(pooled, 1.0 + share[:, None] / pooled.f)
    inside = np.flatnonzero(height > np.max(height) - BOUND_FALL)
    return float(share[inside[-1]] * floor[inside[-1]])


def fit_switching(pooled: Pooled, start: PowerLaw) -> Switching | None:
    """Fit A / f^b + B + C / (1 + (f/f_0)^2) from several corners; None if none converges."""
    level = np.log(pooled.density)
    reach = 30.0
    best = None
    corners = np.geomspace(2.0 * pooled.f[0], 0.4 * pooled.f[-1], CORNERS)
    starts = []
    for corner in corners:
        plateau = np.interp(np.log(corner), np.log(pooled.f), level)
        guess = np.array(
            [np.log(start.best[0]), start.best[1], np.log(pooled.density[-1]), plateau, np.log(corner)]
        )
        starts.append((_negative(guess, pooled)[0], guess))
        tilted = guess.copy()
        tilted[:2] = np.log(0.3 * pooled.density[0] * pooled.f[0]), 1.0
        starts.append((_negative(tilted, pooled)[0], tilted))
    starts.sort(key=lambda one: one[0])
    bounds = [
        (float(np.min(level)) - reach, float(np.max(level)) + reach),
        (LOWEST, HIGHEST),
        (float(np.min(level)) - 12.0, float(np.max(level))),
        (float(np.min(level)) - reach, float(np.max(level)) + 5.0),
        (float(np.log(pooled.f[0])), float(np.log(pooled.f[-1]))),
    ]
    for _, guess in starts[:STARTS]:
        done = optimize.minimize(_negative, guess, args=(pooled,), jac=True, method="L-BFGS-B", bounds=bounds)
        if best is None or done.fun < best.fun:
            best = done
    if best is None or not np.isfinite(best.fun):
        return None
    gradient = _gradients(best.x, pooled)
    information = (gradient * pooled.weight) @ gradient.T
    information[np.diag_indices(5)] += 1e-9
    covariance = np.linalg.inv(information)[:2, :2]
    log_a, exponent, log_floor, log_plateau, log_corner = best.x
    return Switching(
        np.array([log_a, exponent], dtype=np.float64),
        np.asarray(covariance, dtype=np.float64),
        np.array([np.exp(log_a), exponent, np.exp(log_floor)]),
        -float(best.fun),
        bool(not LOWEST + 0.01 < exponent < HIGHEST - 0.01),
        float(np.exp(log_plateau)),
        float(np.exp(log_corner)),
    )


def _parts(p: FloatArray, f: FloatArray) -> FloatArray:
    """Return power law, floor and Lorentzian, shape (3, k)."""
    power = np.exp(np.clip(p[0] - p[1] * np.log(f), -300.0, 300.0))
    lorentzian = np.exp(p[3]) / (1.0 + (f / np.exp(p[4])) ** 2)
    return np.stack([power, np.full(f.size, np.exp(p[2])), lorentzian])


def _gradients(p: FloatArray, pooled: Pooled) -> FloatArray:
    """Return d ln S / d parameter, shape (5, k)."""
    power, floor, lorentzian = _parts(p, pooled.f)
    total = power + floor + lorentzian
    ratio = (pooled.f / np.exp(p[4])) ** 2
    rows = [power, -power * np.log(pooled.f), floor, lorentzian, lorentzian * 2.0 * ratio / (1.0 + ratio)]
    out: FloatArray = np.stack(rows) / total
    return out


def _negative(p: FloatArray, pooled: Pooled) -> tuple[float, FloatArray]:
    """Return minus the log-likelihood and its gradient."""
    total = np.sum(_parts(p, pooled.f), axis=0)
    quotient = pooled.density / total
    value = float(np.sum(pooled.weight * (np.log(total) + quotient)))
    return value, _gradients(p, pooled) @ (pooled.weight * (1.0 - quotient))


def misfit_chance(spectrum: Spectrum, fit: PowerLaw, parameters: int) -> float:
    """Return how often chance makes so large a misfit in wide bins."""
    quotient = Spectrum(spectrum.f, spectrum.density / fit.density(spectrum.f), spectrum.single, spectrum.nu)
    wide = pool(quotient, MISFIT_GROWTH, 3)
    freedom = 2.0 * wide.weight
    # Wilson and Hilferty: the cube root of chi^2_nu / nu is normal
    z = (np.cbrt(wide.density) - (1.0 - 2.0 / (9.0 * freedom))) / np.sqrt(2.0 / (9.0 * freedom))
    return float(stats.chi2.sf(float(z @ z), wide.f.size - parameters))
