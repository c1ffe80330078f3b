"""Which parameters fit all peaks of a trace, and how certain are they?

All windows (``peak_windows``) are fitted together by generalised least squares: damped
Gauss-Newton steps with one damping a peak, under one noise of the whole trace
(``window_noise``), which is learnt from the residuals in between.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from registry.physics.peak_windows import (
    Model,
    Windows,
    first_parameters,
    own_peak,
    peak_and_line,
    tails,
    unit_signal,
)
from registry.physics.window_noise import (
    NO_NOISE_KNOWN,
    Mask,
    Whitener,
    WindowNoise,
    learn_noise,
    plain_log_likelihood,
    whitener,
)
from registry.samples import FloatArray

__all__ = ["PeakFits", "fit_windows", "polynomial_log_likelihood", "second_peak"]

#: Most Gauss-Newton steps in a turn.
STEPS = 12
#: A step that changes no parameter by more than this share of its uncertainty ends a turn.
CONVERGED = 1e-3
#: First damping of the steps, and its limits.
DAMPING, LEAST_DAMPING, MOST_DAMPING = 1e-3, 1e-9, 1e6
#: Limits of the lifetime ratio g = Gamma / k_B T: outside, one of the two widths is lost.
LEAST_RATIO, LARGEST_RATIO = 0.02, 60.0
#: All windows.
ALL = slice(None)
#: Exponents of the noise that may explain a trace without peaks.
DRIFT_EXPONENTS = (1.0, 2.0)
#: Shapes that stand for a second peak: this far from the centre (in FWHM), this much
#: narrower.  Chosen by simulation: two peaks are told from 0.75 FWHM apart on.
BESIDE, NARROWER = (-0.5, 0.0, 0.5), 0.5


@dataclass(frozen=True, eq=False)
class PeakFits:
    """The fitted peaks.

    Attributes:
        model: the line shape.
        parameters: shape (P, q): height, centre (from the window's origin), FWHM, offset,
            slope and, for ``lifetime``, log g; units as in ``Windows``.
        covariance: shape (P, q, q).
        noise: of the samples (or block means); ``weights`` is made of it.
        free_ratio: whether g was free; False where it ran into its limit, shape (P,).
        rest: residuals, shape (P, n), zero where not used.
    """

    model: Model
    parameters: FloatArray
    covariance: FloatArray
    noise: WindowNoise
    weights: Whitener
    free_ratio: Mask
    rest: FloatArray

    def log_likelihood(self, windows: Windows, some: slice = ALL) -> float:
        """Return the plain log-likelihood of some of the windows it was fitted to."""
        white = self.weights.white(self.rest)[some]
        return plain_log_likelihood(white, windows.used[some], self.weights.log_det[some], self.noise)


def fit_windows(windows: Windows, model: Model, noise: WindowNoise | None = None) -> PeakFits:
    """Fit all peaks with one line shape.

    Where the noise is not known it is learnt from a fit without weights, beside shapes
    that stand for a second peak, else a misfit would pass as noise.  It need not be learnt
    again: a restricted likelihood does not depend on the weights of the fit before it.

    Args:
        windows: see ``cut_windows``; y in units of the tallest peak, peaks upwards.
        model: the line shape.
        noise: of the samples, if known.
    """
    parameters = first_parameters(windows, model)
    if noise is None:
        even = whitener(np.zeros_like(windows.y), windows.used, NO_NOISE_KNOWN)
        parameters, rest, jacobian, signal = _turn(windows, parameters, even, model)
        wide = np.concatenate([jacobian[..., :5], _beside(windows, parameters, model)], axis=2)
        noise = learn_noise(rest, wide, signal, windows.used)
    else:
        shape, _ = own_peak(windows, parameters, model)
        signal = unit_signal(shape, parameters)
    weights = whitener(signal, windows.used, noise)
    parameters, rest, jacobian, _ = _turn(windows, parameters, weights, model)
    covariance, free = _covariance(weights.matrix @ jacobian, parameters, model)
    return PeakFits(model, parameters, covariance, noise, weights, free, rest)


def polynomial_log_likelihood(windows: Windows, degree: int) -> float:
    """Return the plain log-likelihood of polynomials of ``degree`` alone, at their best noise.

    The noise may be 1/f or a random walk here: a slow drift has humps too.
    """
    powers = windows.x.mean(axis=2)[..., None] ** np.arange(degree + 1)
    design = np.where(windows.used[..., None], powers, 0.0)
    y, flat = np.where(windows.used, windows.y, 0.0), np.zeros_like(windows.y)
    likelihoods = []
    for exponent in DRIFT_EXPONENTS:
        noise = learn_noise(y, design, flat, windows.used, exponent)
        weights = whitener(flat, windows.used, noise)
        basis, _ = np.linalg.qr(weights.matrix @ design)
        white = weights.white(y)
        along = np.swapaxes(basis, 1, 2) @ white[..., None]
        rest = white - (basis @ along)[..., 0]
        likelihoods.append(plain_log_likelihood(rest, windows.used, weights.log_det, noise))
    return max(likelihoods)


def second_peak(windows: Windows, fits: PeakFits) -> tuple[FloatArray, FloatArray]:
    """Ask of every peak whether one shape is enough: does a second one beside it help?

    A flat, skew or broken top, and a wrong line shape, are seen by three narrower shapes
    on and beside the centre.

    Returns:
        Gain in log-likelihood, and the largest part of the height they take, each (P,).
    """
    _, jacobian = own_peak(windows, fits.parameters, fits.model)
    templates = _beside(windows, fits.parameters, fits.model)
    basis, triangle = np.linalg.qr(fits.weights.matrix @ jacobian[..., :5])
    white = fits.weights.matrix @ templates
    overlap = np.swapaxes(basis, 1, 2) @ white
    white = white - basis @ overlap
    rest = fits.weights.white(fits.rest)
    amplitude = np.einsum("pki,pi->pk", np.linalg.pinv(white), rest)
    explained = np.einsum("pik,pk->pi", white, amplitude)
    own = templates - jacobian[..., :5] @ np.linalg.solve(triangle, overlap)
    visible = np.einsum("pik,pk->pi", own, amplitude)
    size = np.max(np.abs(visible), axis=1) / np.abs(fits.parameters[:, 0])
    gain: FloatArray = 0.5 * np.sum(explained**2, axis=1)
    return gain, size


def _beside(windows: Windows, parameters: FloatArray, model: Model) -> FloatArray:
    """Return narrower shapes on and beside each centre, shape (P, n, 3)."""
    shapes = []
    for side in BESIDE:
        moved = parameters.copy()
        moved[:, 1] += side * moved[:, 2]
        moved[:, 2] *= NARROWER
        shapes.append(np.where(windows.used, own_peak(windows, moved, model)[0], 0.0))
    return np.stack(shapes, axis=2)


def _turn(
    windows: Windows, parameters: FloatArray, weights: Whitener, model: Model
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Refit all peaks; return parameters, residuals, Jacobian, unit signal."""
    target = windows.y - tails(windows, parameters, model)
    parameters = _gauss_newton(windows, target, parameters, weights.matrix, model)
    target = windows.y - tails(windows, parameters, model)
    shape, jacobian = own_peak(windows, parameters, model)
    rest = np.where(windows.used, target - peak_and_line(shape, parameters, windows), 0.0)
    return parameters, rest, jacobian, unit_signal(shape, parameters)


def _gauss_newton(
    windows: Windows, target: FloatArray, start: FloatArray, root: FloatArray, model: Model
) -> FloatArray:
    """Return the parameters after damped Gauss-Newton steps, one damping a peak."""
    parameters = start
    damping = np.full(start.shape[0], DAMPING)
    white_target = np.einsum("pij,pj->pi", root, np.where(windows.used, target, 0.0))
    cost, gradient, hessian = _normal(windows, white_target, parameters, root, model)
    for _ in range(STEPS):
        diagonal = np.einsum("pii->pi", hessian)
        damped = hessian + np.eye(start.shape[1]) * ((damping[:, None] + 1e-12) * diagonal)[:, None, :]
        step = np.linalg.solve(damped, gradient[..., None])[..., 0]
        tried = _bounded(parameters + step, parameters)
        new_cost, new_gradient, new_hessian = _normal(windows, white_target, tried, root, model)
        better = new_cost <= cost
        parameters = np.where(better[:, None], tried, parameters)
        gradient = np.where(better[:, None], new_gradient, gradient)
        hessian = np.where(better[:, None, None], new_hessian, hessian)
        cost = np.where(better, new_cost, cost)
        damping = np.clip(np.where(better, 0.1 * damping, 10.0 * damping), LEAST_DAMPING, MOST_DAMPING)
        if np.all(np.abs(step) * np.sqrt(diagonal) < CONVERGED):
            break
    return parameters


def _bounded(parameters: FloatArray, before: FloatArray) -> FloatArray:
    """Hold a step to half or double the width, one width of travel, and the limits of g."""
    held = parameters.copy()
    held[:, 1] = np.clip(held[:, 1], before[:, 1] - before[:, 2], before[:, 1] + before[:, 2])
    held[:, 2] = np.clip(held[:, 2], 0.5 * before[:, 2], 2.0 * before[:, 2])
    if held.shape[1] == 6:
        held[:, 5] = np.clip(held[:, 5], np.log(LEAST_RATIO), np.log(LARGEST_RATIO))
    return held


def _normal(
    windows: Windows, white_target: FloatArray, parameters: FloatArray, root: FloatArray, model: Model
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return cost (P,), gradient (P, q) and normal matrix (P, q, q)."""
    shape, jacobian = own_peak(windows, parameters, model)
    total = np.where(windows.used, peak_and_line(shape, parameters, windows), 0.0)
    rest = white_target - np.einsum("pij,pj->pi", root, total)
    white = root @ jacobian
    turned = np.swapaxes(white, 1, 2)
    return np.sum(rest**2, axis=1), (turned @ rest[..., None])[..., 0], turned @ white


def _covariance(white: FloatArray, parameters: FloatArray, model: Model) -> tuple[FloatArray, Mask]:
    """Return the parameter covariance of every peak, and whether its g was free."""
    information = np.swapaxes(white, 1, 2) @ white
    free = np.ones(parameters.shape[0], dtype=bool)
    if model == "lifetime":
        low, high = np.log(LEAST_RATIO) + 1e-6, np.log(LARGEST_RATIO) - 1e-6
        free = (parameters[:, 5] > low) & (parameters[:, 5] < high)
        information[~free, 5, :] = 0.0
        information[~free, :, 5] = 0.0
        information[~free, 5, 5] = 1.0
    scale = np.sqrt(np.maximum(np.einsum("pii->pi", information), np.finfo(float).tiny))
    outer = scale[:, :, None] * scale[:, None, :]
    return np.linalg.pinv(information / outer, hermitian=True) / outer, free
