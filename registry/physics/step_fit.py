"""Which Fermi step on a straight background fits a trace?

    y = a + b z + step / (1 + exp(-(z - centre) / w))

on the reduced axis z (-1 ... 1), by generalised least squares under white + 1/f noise.
The start is searched for on a grid of positions and widths, twice: as if the noise were
white, and as if all of the trace's wandering were noise; the likelier fit is kept.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from registry.physics.lineshapes import fermi_step, single_level
from registry.physics.noise import NoiseModel, fit_noise, gls_fit, profile_log_likelihood
from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["StepFit", "candidates", "fit_step", "gains", "jacobian_of", "step_design"]

#: Search grid for the start: positions, and widths in logarithmic steps.
START_POSITIONS = 48
START_WIDTHS = 6
#: A longer trace is averaged in blocks for the search (not for the fit).
SEARCH_SAMPLES = 512
#: The solver's width stays within exp(+-this) of the half range.
MAX_LOG_WIDTH = 20.0
#: Fit and noise are repeated in turn; the noise settles to a per mille in three.
ROUNDS = 3


@dataclass(frozen=True, eq=False)
class StepFit:
    """A fitted step on the reduced axis z (-1 ... 1): a, b, step, centre, log width."""

    parameters: FloatArray
    covariance: FloatArray
    noise: NoiseModel

    def model(self, z: FloatArray) -> FloatArray:
        """Return the curve at z."""
        a, b, step, centre, log_width = self.parameters
        return np.asarray(a + b * z + step * fermi_step((z - centre) / np.exp(log_width)))


def fit_step(z: FloatArray, y: FloatArray) -> StepFit:
    """Return the better of the fits from two starts: under white, and under 1/f noise."""
    line = np.column_stack([np.ones_like(z), z])
    fits = []
    for noise in (NoiseModel(1.0, 0.0, 1.0), fit_noise(y, line)):
        start = _start(z, y, noise)
        fit = _refine(z, y, start)
        if fit is not None:
            fits.append((profile_log_likelihood(y, step_design(z, fit)), fit))
    if not fits:
        raise Refusal("the fit of a step found no minimum")
    return max(fits, key=lambda pair: pair[0])[1]


def step_design(z: FloatArray, fit: StepFit) -> FloatArray:
    """Return background and step as a design, shape (n, 3)."""
    step = fermi_step((z - fit.parameters[3]) / np.exp(fit.parameters[4]))
    return np.column_stack([np.ones_like(z), z, step])


def _start(z: FloatArray, y: FloatArray, noise: NoiseModel) -> FloatArray:
    """Return start parameters from a search over positions and widths."""
    block = max(1, z.size // SEARCH_SAMPLES)
    kept = (z.size // block) * block
    zs, ys = (values[:kept].reshape(-1, block).mean(axis=1) for values in (z, y))
    centre, width = candidates(zs)
    steps = fermi_step((zs[:, None] - centre) / width)
    _, gain, _ = gains(zs, ys, steps, noise)
    best = int(np.argmax(gain))
    design = np.column_stack([np.ones_like(zs), zs, steps[:, best]])
    coefficients = gls_fit(ys, design, noise).coefficients
    return np.array([*coefficients, centre[best], np.log(width[best])])


def candidates(z: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the centres and widths of the search grid, each of shape (G,)."""
    step = 2.0 / z.size
    centres = np.linspace(-1.0, 1.0, min(z.size, START_POSITIONS) + 2)[1:-1]
    widths = np.geomspace(0.5 * step, 0.2, START_WIDTHS)
    centre, width = np.meshgrid(centres, widths)
    return centre.ravel(), width.ravel()


def gains(
    z: FloatArray, y: FloatArray, shapes: FloatArray, noise: NoiseModel, known: FloatArray | None = None
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return amplitude, log-likelihood gain and amplitude uncertainty of each shape (n, G).

    ``known`` (n, p) are the columns fitted beside each; None means a line.
    """
    beside = np.column_stack([np.ones_like(z), z]) if known is None else known
    basis, _ = np.linalg.qr(noise.whiten(beside))
    white = noise.whiten(shapes)
    white = white - basis @ (basis.T @ white)
    rest = noise.whiten(y)
    norm = np.maximum(np.sum(white**2, axis=0), 1e-12 * np.sum(noise.whiten(shapes) ** 2, axis=0) + 1e-300)
    overlap = white.T @ (rest - basis @ (basis.T @ rest))
    return overlap / norm, 0.5 * overlap**2 / norm, 1.0 / np.sqrt(norm)


def _refine(z: FloatArray, y: FloatArray, start: FloatArray) -> StepFit | None:
    """Fit parameters and noise in turn; None where the fit runs away."""
    parameters = start
    noise = fit_noise(y - _value(parameters, z), jacobian_of(parameters, z))
    for _ in range(ROUNDS):
        solution = least_squares(
            _white_rest, parameters, jac=_white_jacobian, args=(z, y, noise), method="lm", max_nfev=60
        )
        parameters = np.asarray(solution.x, dtype=float)
        if not (np.all(np.isfinite(parameters)) and abs(parameters[3]) < 1.2 and parameters[4] < 1.0):
            return None
        parameters[4] = max(parameters[4], np.log(0.05 / z.size))
        jacobian = jacobian_of(parameters, z)
        noise = fit_noise(y - _value(parameters, z), jacobian)
    information = noise.whiten(jacobian)
    try:
        covariance = np.asarray(np.linalg.inv(information.T @ information), dtype=float)
    except np.linalg.LinAlgError:
        return None
    return StepFit(parameters, covariance, noise) if np.all(np.diag(covariance) > 0.0) else None


def _white_rest(p: FloatArray, z: FloatArray, y: FloatArray, noise: NoiseModel) -> FloatArray:
    """Return the whitened residuals at parameters ``p``."""
    return noise.whiten(y - _value(p, z))


def _white_jacobian(p: FloatArray, z: FloatArray, y: FloatArray, noise: NoiseModel) -> FloatArray:
    """Return the derivative of ``_white_rest``; ``y`` is there for the solver's sake."""
    return -noise.whiten(jacobian_of(p, z))


def _rate(p: FloatArray) -> float:
    """Return 1/w; held finite on a solver's stray step."""
    return float(np.exp(-np.clip(p[4], -MAX_LOG_WIDTH, MAX_LOG_WIDTH)))


def _value(p: FloatArray, z: FloatArray) -> FloatArray:
    """Return the model at parameters ``p``."""
    return np.asarray(p[0] + p[1] * z + p[2] * fermi_step((z - p[3]) * _rate(p)))


def jacobian_of(p: FloatArray, z: FloatArray) -> FloatArray:
    """Return the derivatives of the model by its parameters, shape (n, 5)."""
    u = (z - p[3]) * _rate(p)
    slope = 0.25 * p[2] * single_level(u)
    return np.column_stack([np.ones_like(z), z, fermi_step(u), -slope * _rate(p), -slope * u])
