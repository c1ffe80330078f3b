from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from registry.physics.noise import NoiseModel, fit_noise, gls_fit, profile_log_likelihood
from registry.samples import FloatArray

Noise = Callable[..., FloatArray]
Likely = Callable[[int, int, float, float], bool]


def _line(n: int) -> FloatArray:
    return np.column_stack([np.ones(n), np.linspace(-1.0, 1.0, n)])


def test_whitening_is_the_inverse_root_of_the_covariance() -> None:
    model = NoiseModel(0.7, 0.02, 1.2)
    white = model.whiten(np.eye(40))
    np.testing.assert_allclose(white @ model.covariance(40) @ white.T, np.eye(40), atol=1e-12)


def test_drawn_noise_has_the_stated_rms() -> None:
    model, rng = NoiseModel(1.0, 0.05, 1.0), np.random.default_rng(1)
    variance = np.mean([np.var(model.draw(100, rng)) for _ in range(2000)])
    assert variance == pytest.approx(1.0 + model.pink_rms(100) ** 2, rel=0.05)


@pytest.mark.parametrize("pink", [0.0, 1.0])
def test_white_and_pink_parts_are_told_apart(pink: float, noise: Noise) -> None:
    rng = np.random.default_rng(2)
    fits = [fit_noise(noise(400, pink, rng), _line(400)) for _ in range(100)]
    assert np.mean([fit.white for fit in fits]) == pytest.approx(1.0, abs=0.1)
    assert np.median([fit.pink_rms(400) for fit in fits]) == pytest.approx(pink, abs=0.25)


def test_noise_scales_with_the_unit_of_the_signal(noise: Noise) -> None:
    y = noise(200, 0.7, np.random.default_rng(3))
    one, small = fit_noise(y), fit_noise(1e-12 * y)
    assert small.white == pytest.approx(1e-24 * one.white)
    assert small.pink == pytest.approx(1e-24 * one.pink)


def test_noise_does_not_see_what_the_design_describes(noise: Noise) -> None:
    y, design = noise(200, 0.5, np.random.default_rng(4)), _line(200)
    one, tilted = fit_noise(y, design), fit_noise(y + design @ [3e4, -5e5], design)
    assert tilted.white == pytest.approx(one.white, rel=1e-6)


def test_a_trace_without_noise_keeps_the_rounding_of_doubles() -> None:
    fit = fit_noise(3.0 * _line(50)[:, 1], _line(50))
    assert 0.0 < fit.white_rms() < 1e-13


def test_too_few_samples_for_the_design_are_refused() -> None:
    with pytest.raises(ValueError, match="3 samples"):
        fit_noise(np.ones(3), _line(3))


def test_least_squares_under_white_noise_is_ordinary(noise: Noise) -> None:
    y, design = noise(60, 0.0, np.random.default_rng(5)), _line(60)
    fit = gls_fit(y, design, NoiseModel(1.0, 0.0, 1.0))
    np.testing.assert_allclose(fit.coefficients, np.linalg.lstsq(design, y, rcond=None)[0], atol=1e-12)
    np.testing.assert_allclose(fit.covariance, np.linalg.inv(design.T @ design), atol=1e-12)


def test_likelihood_of_the_fit_is_that_of_the_normal_distribution(noise: Noise) -> None:
    model, design = NoiseModel(1.0, 0.02, 1.0), _line(30)
    y = noise(30, 0.4, np.random.default_rng(6))
    fit = gls_fit(y, design, model)
    rest = y - design @ fit.coefficients
    quadratic = rest @ np.linalg.solve(model.covariance(30), rest)
    log_det = np.linalg.slogdet(2.0 * np.pi * model.covariance(30))[1]
    assert fit.log_likelihood == pytest.approx(-0.5 * (quadratic + log_det))


@pytest.mark.parametrize("pink", [0.3, 1.0])
def test_intervals_of_a_slope_cover_under_pink_noise(pink: float, noise: Noise, likely: Likely) -> None:
    rng, draws, hits = np.random.default_rng(7), 100, 0
    for _ in range(draws):
        fit = gls_fit(noise(200, pink, rng), _line(200))
        hits += abs(fit.coefficients[1]) < 1.96 * np.sqrt(fit.covariance[1, 1])
    assert likely(hits, draws, 0.93, 0.97)


def test_least_squares_that_ignores_pink_noise_covers_too_rarely(noise: Noise, likely: Likely) -> None:
    rng, draws, hits = np.random.default_rng(8), 100, 0
    for _ in range(draws):
        fit = gls_fit(noise(200, 1.0, rng), _line(200), NoiseModel(2.0, 0.0, 1.0))
        hits += abs(fit.coefficients[1]) < 1.96 * np.sqrt(fit.covariance[1, 1])
    assert not likely(hits, draws, 0.93, 0.97)


def test_a_true_step_gains_likelihood_and_a_false_one_hardly(noise: Noise) -> None:
    rng, line = np.random.default_rng(9), _line(200)
    step = np.column_stack([line, line[:, 1] > 0.1])
    y = noise(200, 0.5, rng)
    false_gain = profile_log_likelihood(y, step) - profile_log_likelihood(y, line)
    with_step = y + 10.0 * step[:, 2]
    true_gain = profile_log_likelihood(with_step, step) - profile_log_likelihood(with_step, line)
    assert false_gain < 8.0 < 20.0 < true_gain


def test_noise_of_a_long_trace_needs_no_large_arrays(noise: Noise) -> None:
    fit = fit_noise(noise(200_000, 0.0, np.random.default_rng(10)))
    assert fit.white == pytest.approx(1.0, abs=0.02)
