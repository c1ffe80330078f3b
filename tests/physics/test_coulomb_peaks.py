from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from registry.physics.coulomb_peaks import run
from registry.physics.lineshapes import (
    BOLTZMANN_EV,
    MULTI_LEVEL_FWHM,
    SINGLE_LEVEL_FWHM,
    multi_level,
    single_level,
    thermal_lorentzian,
    thermal_lorentzian_fwhm,
)
from registry.physics.result import Given, Quantity, Result
from registry.samples import FloatArray, Samples

from .featureless import KINDS, featureless

Noise = Callable[..., FloatArray]
Trace = Callable[..., Samples]
Likely = Callable[[int, int, float, float], bool]

#: Full width at half maximum and centres of the simulated peaks, in V.
WIDTH = 0.0040
CENTRES = np.array([0.310, 0.329, 0.351, 0.370, 0.389])
HEIGHTS = np.array([30.0, 24.0, 36.0, 27.0, 33.0])
LEVER_ARM = Given(0.1)


def _axis(n: int = 300) -> FloatArray:
    return np.linspace(0.30, 0.40, n)


def _peaks(
    x: FloatArray, model: str = "single-level", g: float = 2.0, centres: FloatArray = CENTRES
) -> FloatArray:
    u = (x[:, None] - centres) / WIDTH
    if model == "multi-level":
        shapes = multi_level(u * MULTI_LEVEL_FWHM)
    elif model == "lifetime":
        shapes = thermal_lorentzian(u * thermal_lorentzian_fwhm(g)[0], g)
    else:
        shapes = single_level(u * SINGLE_LEVEL_FWHM)
    peaks: FloatArray = shapes @ HEIGHTS[: centres.size]
    return peaks


def _all(result: Result, name: str) -> list[Quantity]:
    return [one for one in result.quantities if one.quantity == name and one.subject is not None]


def _summary(result: Result, name: str) -> Quantity:
    found = [one for one in result.quantities if one.quantity == name and one.subject is None]
    assert len(found) == 1
    return found[0]


def _values(quantities: list[Quantity]) -> FloatArray:
    return np.array([one.value for one in quantities], dtype=float)


@pytest.mark.parametrize("model", ["single-level", "multi-level", "lifetime"])
@pytest.mark.parametrize("told", [True, False])
def test_exact_peaks_give_positions_widths_and_shape_back(model: str, told: bool, trace: Trace) -> None:
    x = _axis()
    given = {"lever_arm": LEVER_ARM} | ({"model": Given(model)} if told else {})
    result = run(trace(x, 1e-12 * _peaks(x, model)), given)
    assert result.settings["model_used"] == model
    tolerance = 2e-6 if model != "lifetime" else 2e-5  # Lorentzian tails reach past the neighbours
    np.testing.assert_allclose(_values(_all(result, "peak_position")), CENTRES, atol=tolerance)
    np.testing.assert_allclose(_values(_all(result, "peak_width")), WIDTH, rtol=0.01)


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("down", [False, True])
def test_peaks_and_dips_up_and_down_give_one_answer(
    sign: float, down: bool, noise: Noise, trace: Trace
) -> None:
    x = _axis()
    y = sign * (_peaks(x) + 20.0 * x + noise(300, 0.3, np.random.default_rng(1)))
    result = run(trace(x[::-1], y[::-1]) if down else trace(x, y), {})
    np.testing.assert_allclose(_values(_all(result, "peak_position")), CENTRES, atol=2e-4)
    assert [one.subject for one in _all(result, "peak_position")] == [f"peak {k}" for k in range(1, 6)]
    assert _summary(result, "peak_width").conditions == {"direction": "down" if down else "up"}


def test_spacings_are_those_of_neighbours_and_their_mean(trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, _peaks(x)), {"lever_arm": LEVER_ARM})
    np.testing.assert_allclose(_values(_all(result, "addition_voltage")), np.diff(CENTRES), atol=1e-5)
    assert _summary(result, "addition_voltage").value == pytest.approx(0.079 / 4.0, abs=1e-6)
    assert _summary(result, "addition_energy").value == pytest.approx(0.1 * 0.079 / 4.0, abs=1e-7)
    assert [one.subject for one in _all(result, "addition_energy")] == [
        f"peak {k}-{k + 1}" for k in range(1, 5)
    ]


def test_energies_of_one_lever_arm_share_its_uncertainty(noise: Noise, trace: Trace) -> None:
    x = _axis()
    y = _peaks(x) + noise(300, 0.0, np.random.default_rng(2))
    given = {"lever_arm": Given(0.1, 0.008), "model": Given("single-level")}
    result = run(trace(x, y), given)
    for one in [*_all(result, "addition_energy"), _summary(result, "electron_temperature")]:
        assert one.value is not None
        assert one.standard_uncertainty is not None
        assert one.shared == {"lever_arm": pytest.approx(0.08 * one.value)}
        assert one.standard_uncertainty >= one.shared["lever_arm"]


def test_a_given_temperature_gives_lever_arm_and_energies_that_share_it(trace: Trace) -> None:
    x = _axis()
    given = {"electron_temperature": Given(1.0, 0.02), "model": Given("single-level")}
    result = run(trace(x, _peaks(x)), given)
    lever_arm = SINGLE_LEVEL_FWHM * BOLTZMANN_EV / WIDTH
    assert _summary(result, "lever_arm").value == pytest.approx(lever_arm, rel=1e-3)
    energy = _summary(result, "addition_energy")
    assert energy.value == pytest.approx(lever_arm * 0.079 / 4.0, rel=1e-3)
    assert energy.shared == {"electron_temperature": pytest.approx(0.02 * lever_arm * 0.079 / 4.0, rel=1e-3)}


def test_a_shape_that_noise_hides_gives_no_temperature(noise: Noise, trace: Trace) -> None:
    x = _axis(120)
    y = 0.4 * _peaks(x) + noise(120, 0.0, np.random.default_rng(3))
    result = run(trace(x, y), {"lever_arm": LEVER_ARM})
    assert result.refused is None
    assert _summary(result, "electron_temperature").value is None
    assert "give the model" in str(_summary(result, "electron_temperature").why)
    assert _summary(result, "addition_voltage").value is not None


def test_a_single_peak_has_no_spacing(trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, _peaks(x, centres=CENTRES[2:3])), {})
    assert _summary(result, "addition_voltage").why == "one peak has no spacing"
    assert len(_all(result, "peak_position")) == 1


def test_a_peak_cut_by_the_end_is_left_out_and_told(noise: Noise, trace: Trace) -> None:
    x = _axis()
    centres = np.append(CENTRES[:4], 0.3968)
    result = run(trace(x, _peaks(x, centres=centres) + noise(300, 0.0, np.random.default_rng(4))), {})
    assert len(_all(result, "peak_position")) == 4
    assert any("end of the sweep" in warning for warning in result.warnings)


def test_a_switching_charge_between_peaks_breaks_the_spacing(noise: Noise, trace: Trace) -> None:
    x = _axis()
    y = _peaks(x, centres=CENTRES[[0, 1, 3, 4]]) + noise(300, 0.0, np.random.default_rng(5))
    y += 30.0 * ((x > 0.349) & (x < 0.353))
    result = run(trace(x, y), {"model": Given("single-level")})
    assert len(_all(result, "peak_position")) == 4
    assert any("left out" in warning for warning in result.warnings)
    assert _summary(result, "addition_voltage").value is None
    assert [one.value is None for one in _all(result, "addition_voltage")] == [False, True, False]


def test_a_bump_of_the_noise_between_peaks_breaks_no_spacing(noise: Noise, trace: Trace) -> None:
    x = _axis()
    bump = 2.5 * single_level((x - 0.340) / WIDTH * SINGLE_LEVEL_FWHM)
    y = _peaks(x) + bump + 0.8 * noise(300, 0.0, np.random.default_rng(14))
    result = run(trace(x, y), {"model": Given("single-level")})
    assert _summary(result, "addition_voltage").value == pytest.approx(0.079 / 4.0, abs=1e-4)
    assert any("too faint" in warning for warning in result.warnings)


def test_a_wide_gap_is_told(trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, _peaks(x, centres=CENTRES[[0, 1, 2, 4]])), {})
    assert any("between peak 3 and peak 4" in warning for warning in result.warnings)


def test_two_peaks_run_together_are_not_one(noise: Noise, trace: Trace) -> None:
    x = _axis()
    y = _peaks(x, centres=np.array([0.348, 0.352])) + noise(300, 0.0, np.random.default_rng(6))
    result = run(trace(x, y), {"lever_arm": LEVER_ARM})
    assert result.refused is not None
    assert "more than one peak" in result.refused


def test_the_covariance_belongs_to_the_parameters(noise: Noise, trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, 1e-12 * (_peaks(x) + noise(300, 0.3, np.random.default_rng(7)))), {})
    assert result.covariance is not None
    assert result.covariance.shape == (len(result.parameters),) * 2
    at = result.parameters.index("peak 3 centre")
    third = _all(result, "peak_position")[2]
    assert np.sqrt(result.covariance[at, at]) == pytest.approx(third.standard_uncertainty)


def test_every_number_is_a_plain_float_and_repeatable(noise: Noise, trace: Trace) -> None:
    x = _axis()
    y = _peaks(x) + noise(300, 0.5, np.random.default_rng(8))
    first, second = (run(trace(x, y), {"lever_arm": LEVER_ARM}) for _ in range(2))
    assert first.quantities == second.quantities
    assert all(one.value is None or type(one.value) is float for one in first.quantities)


def test_long_windows_are_averaged_without_bias(noise: Noise, trace: Trace) -> None:
    x = _axis(12_000)
    y = _peaks(x) + noise(12_000, 0.0, np.random.default_rng(9))
    result = run(trace(x, y), {"model": Given("single-level")})
    for one, true in zip(_all(result, "peak_width"), np.full(5, WIDTH), strict=True):
        assert one.value is not None
        assert one.standard_uncertainty is not None
        assert one.standard_uncertainty < 2e-5
        assert abs(one.value - true) < 4.5 * one.standard_uncertainty


REFUSED: dict[str, tuple[Callable[[FloatArray, FloatArray], FloatArray], str]] = {
    "too few samples": (lambda x, e: (_peaks(x) + e)[:12], "too few"),
    "dead": (lambda x, e: 0.0 * x + 1.0, "equal"),
    "clipped": (lambda x, e: np.minimum(_peaks(x) + e, 20.0), "clipped"),
    "noise alone": (lambda x, e: e, "samples across|no peak|spacing|uncertainty"),
    "too coarse": (
        lambda x, e: _peaks(np.linspace(0.0, 2.0, 300), centres=CENTRES * 4.0) + e,
        "samples across",
    ),
    "mains": (lambda x, e: 30.0 * np.sin(2.0 * np.pi * x / 0.011) + e, "mains|no usable peak"),
    "a hump": (lambda x, e: 30.0 * np.exp(-(((x - 0.35) / 0.02) ** 2)) + e, "fills"),
    "a step": (lambda x, e: 30.0 * (x > 0.35) + e, "no peak|no usable peak|fills"),
}


@pytest.mark.parametrize("flaw", REFUSED)
def test_what_is_no_peak_gets_no_number(flaw: str, noise: Noise, trace: Trace) -> None:
    make, reason = REFUSED[flaw]
    x = _axis()
    y = make(x, noise(300, 0.0, np.random.default_rng(10)))
    result = run(trace(x[: y.size], y), {"lever_arm": LEVER_ARM})
    assert result.refused is not None
    assert any(part in result.refused for part in reason.split("|"))
    assert all(one.value is None and one.why == result.refused for one in result.quantities)


#: Model, gain noise relative to the signal, 1/f noise over white noise.
DOMAIN = (("single-level", 0.0, 0.0), ("multi-level", 0.0, 0.5), ("single-level", 0.03, 1.0))


def _calibrate(draws: int, noise: Noise, trace: Trace) -> tuple[dict[str, FloatArray], int]:
    """Scores (value - truth) / u by quantity, and how many draws were answered in full."""
    rng, x = np.random.default_rng(11), _axis()
    scores: dict[str, list[float]] = {"peak_position": [], "peak_width": [], "addition_voltage": []}
    answered = 0
    for k in range(draws):
        model, gain, pink = DOMAIN[k % len(DOMAIN)]
        y = _peaks(x, model) * (1.0 + gain * rng.normal(size=300)) + noise(300, pink, rng)
        result = run(trace(x, y), {"model": Given(model)})
        if result.refused is not None or len(_all(result, "peak_position")) != 5:
            continue
        answered += 1
        chosen = [*zip(_all(result, "peak_position"), CENTRES, strict=True)]
        chosen += [(_all(result, "peak_width")[2], WIDTH)]
        chosen += [(_summary(result, "addition_voltage"), 0.079 / 4.0)]
        for one, true in chosen:
            assert one.value is not None
            assert one.standard_uncertainty is not None
            scores[one.quantity].append((one.value - true) / one.standard_uncertainty)
    return {name: np.array(values) for name, values in scores.items()}, answered


def test_intervals_cover_the_truth_in_a_small_sample(noise: Noise, trace: Trace, likely: Likely) -> None:
    draws = 60
    scores, answered = _calibrate(draws, noise, trace)
    assert likely(answered, draws, 0.98, 1.0)
    for score in scores.values():
        assert likely(int(np.sum(np.abs(score) < 1.0)), score.size, 0.63, 0.73)
        assert likely(int(np.sum(np.abs(score) < 1.96)), score.size, 0.93, 0.97)
        assert abs(np.mean(score)) < 0.1 + 3.9 / np.sqrt(score.size)


@pytest.mark.slow
def test_intervals_cover_the_truth_in_2000_draws(noise: Noise, trace: Trace) -> None:
    scores, answered = _calibrate(2000, noise, trace)
    assert answered > 0.98 * 2000
    for score in scores.values():
        assert abs(np.mean(score)) < 0.1
        assert 0.63 < np.mean(np.abs(score) < 1.0) < 0.73
        assert 0.93 < np.mean(np.abs(score) < 1.96) < 0.97


@pytest.mark.parametrize("kind", KINDS)
def test_featureless_data_hardly_ever_get_an_answer(
    kind: str, noise: Noise, trace: Trace, likely: Likely
) -> None:
    rng, draws, answers = np.random.default_rng(12), 30, 0
    for _ in range(draws):
        answers += run(trace(_axis(), featureless(kind, 300, rng, noise, 0.3)), {}).refused is None
    assert likely(answers, draws, 0.0, 0.025)


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_featureless_data_get_an_answer_in_less_than_2_5_percent(
    kind: str, noise: Noise, trace: Trace
) -> None:
    rng, draws = np.random.default_rng(13), 1000
    answers = sum(
        run(trace(_axis(), featureless(kind, 300, rng, noise, 0.3)), {}).refused is None for _ in range(draws)
    )
    assert answers <= 0.025 * draws
