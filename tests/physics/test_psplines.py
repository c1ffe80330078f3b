from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom

from registry.physics.psplines import curve_posterior
from registry.samples import FloatArray

from .turn_on_traces import SHAPES, pink

X = np.linspace(-1.0, 1.0, 300)


def _noise(seed: int) -> FloatArray:
    rng = np.random.default_rng(seed)
    noise: FloatArray = rng.normal(size=X.size)
    return noise


def test_a_noisy_line_stays_a_line() -> None:
    posterior = curve_posterior(X, 3.0 * X + 0.1 * _noise(1))
    slopes = posterior.slopes(X) @ posterior.mean()
    assert slopes == pytest.approx(3.0, abs=0.1)
    assert posterior.gain_over_line < 3.0


def test_a_turn_on_is_much_likelier_than_a_line() -> None:
    posterior = curve_posterior(X, SHAPES["linear"](X, 0.0, 0.05) + 0.02 * _noise(2))
    assert posterior.gain_over_line > 30.0


def test_slopes_are_the_derivative_of_values() -> None:
    posterior = curve_posterior(X, np.sin(3.0 * X) + 0.01 * _noise(3))
    coefficients = posterior.mean()
    h = 1e-6
    inside = X[5:-5]
    numerical = (posterior.values(inside + h) - posterior.values(inside - h)) @ coefficients / (2.0 * h)
    assert posterior.slopes(inside) @ coefficients == pytest.approx(numerical, abs=1e-5)


def test_a_smooth_curve_without_noise_is_met() -> None:
    curve = np.sin(3.0 * X)
    posterior = curve_posterior(X, curve)
    assert posterior.values(X) @ posterior.mean() == pytest.approx(curve, abs=1e-4)


def test_time_running_backwards_gives_the_same_curve() -> None:
    y = np.sin(3.0 * X) + 0.05 * _noise(4)
    forth, back = curve_posterior(X, y), curve_posterior(X[::-1], y[::-1])
    assert back.values(X) @ back.mean() == pytest.approx(forth.values(X) @ forth.mean(), abs=1e-6)


def test_white_and_slow_noise_are_told_apart() -> None:
    rng, slow, fast = np.random.default_rng(5), [], []
    for _ in range(10):
        slow.append(curve_posterior(X, pink(X.size, rng) + 0.2 * rng.normal(size=X.size)).noise)
        fast.append(curve_posterior(X, rng.normal(size=X.size)).noise)
    assert np.mean([one.pink_rms(X.size) for one in slow]) > 2.0 * np.mean([one.white_rms() for one in slow])
    assert np.mean([one.white_rms() for one in fast]) == pytest.approx(1.0, abs=0.15)


def test_draws_cover_the_true_curve() -> None:
    rng, inside = np.random.default_rng(6), 0
    at = np.array([-0.6, 0.05, 0.5])
    for _ in range(40):
        y = np.tanh(4.0 * X) + 0.05 * rng.normal(size=X.size)
        posterior = curve_posterior(X, y)
        low, high = np.percentile(posterior.values(at) @ posterior.draws(200, rng), [2.5, 97.5], axis=1)
        inside += int(np.count_nonzero((low < np.tanh(4.0 * at)) & (np.tanh(4.0 * at) < high)))
    assert inside >= binom.ppf(1e-4, 120, 0.90)


def test_a_softer_penalty_widens_the_draws() -> None:
    posterior = curve_posterior(X, np.tanh(4.0 * X) + 0.05 * _noise(7))
    rng = np.random.default_rng(8)
    firm, soft = (np.std(posterior.slopes(X) @ posterior.draws(200, rng, s), axis=1) for s in (0.0, 1.0))
    assert np.median(soft) > 1.2 * np.median(firm)


@pytest.mark.parametrize("n", [40, 97, 1000])
def test_the_knots_span_the_trace_whatever_its_length(n: int) -> None:
    x = np.sort(np.random.default_rng(n).uniform(0.0, 2.0, n))
    posterior = curve_posterior(x, x**2 + 0.01 * np.cos(50.0 * x))
    grid = posterior.grid(2)
    assert (grid[0], grid[-1]) == pytest.approx((x[0], x[-1]))
    assert np.all(np.isfinite(posterior.values(grid) @ posterior.mean()))
