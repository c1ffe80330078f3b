"""Which interdot transitions fit a trace, for every gap they might have?

    y = a + b z + step/2 * p(z - centre) + kink * (z - centre) p(z - centre)

on the reduced axis z (-1 ... 1), p being ``polarisation``.  The last term lets the
background's slope differ on the two sides: the sensor sits on another part of its flank
after the charge has moved.  All but the gap is fitted by generalised least squares under
white + 1/f noise at each of a row of gaps, zero among them; the row is the answer, a
likelihood that need not be a Gaussian and that ends at zero.

The thermal width may be known (from lever arm and temperature, with its uncertainty) or
free; it is fitted as a logarithm with a normal prior, which is wide where it is free.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from registry.physics.interdot_shape import polarisation, polarisation_slopes
from registry.physics.noise import NoiseModel, fit_noise
from registry.physics.result import Refusal
from registry.physics.step_fit import StepFit
from registry.samples import FloatArray

__all__ = ["GapRow", "Node", "Prior", "design_of", "fit_gaps", "fit_ungapped"]

#: Gaps tried at first and at last; the first row reaches to this share of the 10-90 % width.
FIRST_GAPS, LAST_GAPS = 9, 25
FIRST_REACH = 1.0
#: The last row is drawn again, closer, where fewer of its gaps than this are likely; at most
#: so often (each time some ten times closer).
FEWEST_LIKELY, ZOOMS = 9, 8
#: The row is doubled at most so often until its end is this much less likely than the best.
DOUBLINGS = 4
UNLIKELY = 8.0
#: Iterations at one gap, and the change of chi squared that ends them.
ITERATIONS, SETTLED = 12, 1e-5
#: A step that makes the fit worse is halved so often.
HALVINGS = 4
#: The centre stays within this, the range being -1 ... 1.
FARTHEST = 1.2
#: log(thermal width): standard deviation where nothing is known of it (a factor of 50
#: either way, wide beside any answer that is accepted), and the least one (rounding).
FREE_WIDTH, EXACT_WIDTH = 4.0, 1e-4
#: The thermal width stays within exp(+-this) of its prior: a tunnelling width tells no thermal one.
WIDTH_RANGE = 7.0
#: A derivative by the gap smaller than this (per unit of the range) is that of no gap.
NIL = 1e-6
#: The 10-90 % width of p is 2 ln 9 thermal widths without a gap.
TEN_TO_NINETY_THERMAL = float(2.0 * np.log(9.0))


@dataclass(frozen=True)
class Prior:
    """What is known of log(thermal width) beforehand: mean and standard deviation."""

    mean: float
    sd: float


@dataclass(frozen=True, eq=False)
class Node:
    """The best fit at one gap.

    Attributes:
        gap: 2 t on the reduced axis.
        parameters: a, b, half step, kink, centre, log thermal width.
        covariance: of them at this gap, shape (6, 6).
        log_likelihood: profile, prior of the width included, up to a constant.
    """

    gap: float
    parameters: FloatArray
    covariance: FloatArray
    log_likelihood: float

    def model(self, z: FloatArray) -> FloatArray:
        """Return the curve at z."""
        return np.asarray(design_of(self, z) @ self.parameters[:4])


@dataclass(frozen=True, eq=False)
class GapRow:
    """Fits over a row of gaps, rising from the first; ``noise`` is common to all."""

    nodes: tuple[Node, ...]
    noise: NoiseModel

    @property
    def best(self) -> Node:
        """Return the likeliest node."""
        return max(self.nodes, key=lambda node: node.log_likelihood)

    def profile(self) -> FloatArray:
        """Return log-likelihoods relative to the best, shape (K,)."""
        values = np.array([node.log_likelihood for node in self.nodes])
        return np.asarray(values - np.max(values), dtype=float)

    def jacobian(self, z: FloatArray) -> FloatArray:
        """Return the derivatives of the best fit by all it knows, the gap last if it matters."""
        return _jacobian(z, self.best)

    def weights(self) -> FloatArray:
        """Return posterior weights for a flat prior on the gap, shape (K,), summing to one."""
        spread = np.array([np.linalg.slogdet(node.covariance)[1] for node in self.nodes])
        height = self.profile() + 0.5 * spread
        gaps = np.array([node.gap for node in self.nodes])
        weight = np.exp(height - np.max(height)) * np.gradient(gaps)
        return np.asarray(weight / np.sum(weight))


def design_of(node: Node, z: FloatArray) -> FloatArray:
    """Return background, step and kink as a design, shape (n, 4)."""
    p = polarisation(z - node.parameters[4], node.gap, float(np.exp(node.parameters[5])))
    return np.column_stack([np.ones_like(z), z, p, (z - node.parameters[4]) * p])


def fit_gaps(z: FloatArray, y: FloatArray, step: StepFit, prior: Prior | None) -> tuple[GapRow, Node]:
    """Fit the transition at a row of gaps around the likely ones.

    Args:
        z: reduced axis, shape (n,), in order of time.
        y: signal scaled to a range of about one.
        step: a Fermi step fitted to the same trace: start and first noise.
        prior: of the log thermal width; None leaves it free.

    Returns:
        The row over all gaps within ``UNLIKELY`` of the best, and the fit without a gap.

    Raises:
        Refusal: no fit was found.
    """
    known = Prior(float(step.parameters[4]), FREE_WIDTH) if prior is None else prior
    problem = _Problem(z, y, step.noise, known)
    row = _first_row(problem, step, known)
    problem = _Problem(z, y, fit_noise(y - row.best.model(z), _jacobian(z, row.best)), known)
    for _ in range(ZOOMS):
        row = _row(problem, np.linspace(*_likely_range(row), LAST_GAPS), row.best.parameters)
        if np.count_nonzero(row.profile() > -UNLIKELY) >= FEWEST_LIKELY:
            break
    return row, problem.solve(0.0, row.nodes[0].parameters)


def fit_ungapped(z: FloatArray, y: FloatArray, step: StepFit) -> Node:
    """Fit the transition without a gap, its width free; arguments as in ``fit_gaps``."""
    prior = Prior(float(step.parameters[4]), FREE_WIDTH)
    return _Problem(z, y, step.noise, prior).solve(0.0, _start(step, prior))


def _start(step: StepFit, prior: Prior) -> FloatArray:
    """Return the six parameters that mean the Fermi step, with the width of the prior."""
    a, b, height, centre, _ = step.parameters
    return np.array([a + 0.5 * height, b, 0.5 * height, 0.0, centre, prior.mean])


def _first_row(problem: _Problem, step: StepFit, prior: Prior) -> GapRow:
    """Fit at coarse gaps from zero on, up to unlikely ones."""
    start, top = _start(step, prior), FIRST_REACH * TEN_TO_NINETY_THERMAL * float(np.exp(step.parameters[4]))
    row = _row(problem, np.linspace(0.0, top, FIRST_GAPS), start)
    for _ in range(DOUBLINGS):
        if row.profile()[-1] < -UNLIKELY:
            break
        top *= 2.0
        row = _row(problem, np.linspace(0.0, top, FIRST_GAPS), row.best.parameters)
    return row


def _row(problem: _Problem, gaps: FloatArray, start: FloatArray) -> GapRow:
    """Fit at each gap, each from the one before."""
    nodes = []
    for gap in gaps:
        node = problem.solve(float(gap), start)
        start = node.parameters
        nodes.append(node)
    return GapRow(tuple(nodes), problem.noise)


def _likely_range(row: GapRow) -> tuple[float, float]:
    """Return the gaps one node outside those that are not unlikely."""
    likely = np.flatnonzero(row.profile() > -UNLIKELY)
    first, last = max(likely[0] - 1, 0), min(likely[-1] + 1, len(row.nodes) - 1)
    return row.nodes[first].gap, row.nodes[last].gap


def _columns(z: FloatArray, gap: float, p: FloatArray) -> FloatArray:
    """Return p, (z - centre) p, and the derivatives of both by centre and log width, shape (n, 6)."""
    delta = z - p[4]
    shape = polarisation(delta, gap, float(np.exp(p[5])))
    by_delta, _, by_width = polarisation_slopes(delta, gap, float(np.exp(p[5])))
    both = (shape, delta * shape, -by_delta, -shape - delta * by_delta, by_width, delta * by_width)
    return np.column_stack(both)


def _jacobian(z: FloatArray, node: Node) -> FloatArray:
    """Return the derivatives of the model by the six parameters and, where not nil, the gap."""
    p = node.parameters
    shape, bent, *nonlinear = _columns(z, node.gap, p).T
    by_gap = polarisation_slopes(z - p[4], node.gap, float(np.exp(p[5])))[1]
    columns = [
        np.ones_like(z),
        z,
        shape,
        bent,
        p[2] * nonlinear[0] + p[3] * nonlinear[1],
        p[2] * nonlinear[2] + p[3] * nonlinear[3],
    ]
    return np.column_stack(columns if np.linalg.norm(by_gap) < NIL else [*columns, by_gap])


class _Problem:
    """One trace under one noise and one prior of the width."""

    def __init__(self, z: FloatArray, y: FloatArray, noise: NoiseModel, prior: Prior) -> None:
        self.z, self.noise, self.prior = z, noise, prior
        self.y = noise.whiten(y)
        self.line = noise.whiten(np.column_stack([np.ones_like(z), z]))

    def solve(self, gap: float, start: FloatArray) -> Node:
        """Fit everything but the gap by damped Gauss-Newton steps."""
        p = np.array(start, dtype=float)
        chance, rest, jacobian = self._at(gap, p)
        for _ in range(ITERATIONS):
            step = self._step(p, rest, jacobian)
            for halving in range(HALVINGS):
                trial = self._held(p + step * 0.5**halving)
                new_chance, new_rest, new_jacobian = self._at(gap, trial)
                if new_chance >= chance:
                    break
            gain = new_chance - chance
            if not gain >= 0.0:
                break
            p, chance, rest, jacobian = trial, new_chance, new_rest, new_jacobian
            if gain < SETTLED:
                break
        covariance = self._covariance(jacobian)
        return Node(gap, p, covariance, chance)

    def _at(self, gap: float, p: FloatArray) -> tuple[float, FloatArray, FloatArray]:
        """Return log-likelihood, whitened residuals and whitened Jacobian (n, 6) at ``p``."""
        white = self.noise.whiten(_columns(self.z, gap, p))
        jacobian = np.empty((self.z.size, 6))
        jacobian[:, :2], jacobian[:, 2:4] = self.line, white[:, :2]
        jacobian[:, 4] = white[:, 2:4] @ p[2:4]
        jacobian[:, 5] = white[:, 4:6] @ p[2:4]
        rest = self.y - jacobian[:, :4] @ p[:4]
        chance = -0.5 * (float(rest @ rest) + ((p[5] - self.prior.mean) / self.prior.sd) ** 2)
        return chance, rest, jacobian

    def _information(self, jacobian: FloatArray) -> FloatArray:
        """Return the information on the six parameters, prior included, shape (6, 6)."""
        information: FloatArray = jacobian.T @ jacobian
        information[5, 5] += self.prior.sd**-2
        return information

    def _step(self, p: FloatArray, rest: FloatArray, jacobian: FloatArray) -> FloatArray:
        """Return the full Gauss-Newton step from ``p``."""
        gradient = jacobian.T @ rest
        gradient[5] += (self.prior.mean - p[5]) / self.prior.sd**2
        try:
            return np.asarray(np.linalg.solve(self._information(jacobian), gradient), dtype=float)
        except np.linalg.LinAlgError:
            raise Refusal("the fit of an interdot transition found no minimum") from None

    def _held(self, p: FloatArray) -> FloatArray:
        """Return ``p`` with centre and width inside their limits."""
        p[4] = np.clip(p[4], -FARTHEST, FARTHEST)
        p[5] = np.clip(p[5], self.prior.mean - WIDTH_RANGE, self.prior.mean + WIDTH_RANGE)
        return p

    def _covariance(self, jacobian: FloatArray) -> FloatArray:
        """Return the covariance of the six parameters, shape (6, 6)."""
        try:
            covariance = np.asarray(np.linalg.inv(self._information(jacobian)), dtype=float)
        except np.linalg.LinAlgError:
            raise Refusal("the fit of an interdot transition found no minimum") from None
        if not (np.all(np.isfinite(covariance)) and np.all(np.diag(covariance) > 0.0)):
            raise Refusal("the fit of an interdot transition found no minimum")
        return covariance
