from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from registry.errors import InputError
from registry.physics.noise_spectrum import run
from registry.physics.result import Given
from registry.samples import FloatArray

from .series_tables import one, power_law_noise, score, series

Likely = Callable[[int, int, float, float], bool]
NAME = "charge_noise_amplitude"
GIVEN = {"lever_arm": Given(0.1), "sensor_sensitivity": Given(1e-8)}
#: 1 pA/sqrt Hz at 0.1 eV/V and 10 nS.
ENERGY = 1e-12 * 0.1 / 1e-8
DT, N = 0.01, 4096


def _noise(seed: int, exponent: float = 1.0, white: float = 1.0, n: int = N) -> FloatArray:
    rng = np.random.default_rng(seed)
    return power_law_noise(n, DT, exponent, rng) + white * rng.normal(size=n)


def test_amplitude_and_exponent_come_out_in_energy() -> None:
    result = run(series(1e-12 * (500.0 + _noise(1)), DT), GIVEN)
    assert result.refused is None
    assert abs(score(one(result, NAME), ENERGY)) < 4.0
    assert abs(score(one(result, "noise_exponent"), 1.0)) < 4.0
    assert any("degrees of freedom" in warning for warning in result.warnings)


def test_the_sign_of_the_slope_only_turns_its_share_of_the_uncertainty() -> None:
    samples = series(1e-12 * _noise(2), DT)
    up, down = (
        one(run(samples, {"lever_arm": Given(0.1, 0.008), "sensor_sensitivity": Given(s, 5e-10)}), NAME)
        for s in (1e-8, -1e-8)
    )
    assert up.value == down.value
    assert up.shared["lever_arm"] == down.shared["lever_arm"] == pytest.approx(0.08 * (up.value or 0.0))
    assert up.shared["sensor_sensitivity"] == -down.shared["sensor_sensitivity"]


@pytest.mark.parametrize("missing", GIVEN)
def test_without_lever_arm_or_slope_it_says_the_noise_in_the_signals_own_unit(missing: str) -> None:
    result = run(series(1e-12 * _noise(3), DT), {k: v for k, v in GIVEN.items() if k != missing})
    assert f"no {missing}" in str(result.refused)
    assert "A/√Hz at 1 Hz" in str(result.refused)
    assert all(q.value is None for q in result.quantities)


def test_gate_volts_need_the_lever_arm_alone() -> None:
    samples = series(1e-6 * _noise(4), DT, "V")
    assert "volts=gate" in str(run(samples, {"lever_arm": Given(0.1)}).refused)
    given = {"lever_arm": Given(0.1), "volts": Given("gate")}
    assert abs(score(one(run(samples, given), NAME), 1e-7)) < 4.0


def test_white_noise_gets_an_upper_bound() -> None:
    result = run(series(1e-12 * np.random.default_rng(5).normal(size=N), DT), GIVEN)
    assert one(result, NAME).bound == "upper"
    assert "white noise" in str(one(result, "noise_exponent").why)


def test_mains_lines_are_named_and_do_not_matter() -> None:
    t = DT * np.arange(N)
    hum = 3.0 * np.sin(2.0 * np.pi * 16.4 * t) + np.sin(2.0 * np.pi * 32.8 * t + 1.0)
    result = run(series(1e-12 * (_noise(6) + hum), DT), GIVEN)
    assert abs(score(one(result, NAME), ENERGY)) < 4.0
    (lines,) = (warning for warning in result.warnings if "lines left out" in warning)
    assert "16.4" in lines
    assert "32.8" in lines


def test_two_level_switching_is_noticed() -> None:
    rng = np.random.default_rng(7)
    switching = 3.0 * (np.cumsum(rng.random(4 * N) < 0.02) % 2)
    result = run(series(1e-12 * (0.3 * _noise(8, n=4 * N) + switching), DT), GIVEN)
    said = " ".join((*result.warnings, str(result.refused)))
    assert "two-level switching" in said
    corner = float(said.split("corner ")[1].removeprefix("at ").split(" ")[0])
    assert corner == pytest.approx(2.0 * 0.02 / DT / (2.0 * np.pi), rel=0.3)


def _with(seed: int, feature: Callable[[FloatArray], FloatArray]) -> FloatArray:
    return np.asarray(np.random.default_rng(seed).normal(size=N) + feature(np.linspace(-1.0, 1.0, N)))


FLAWS: dict[str, tuple[FloatArray, str]] = {
    "too few": (_noise(9, n=300), "too few"),
    "a glitch": (_with(10, lambda z: 300.0 * (np.arange(N) == 1000)), "not the same all the time"),
    "a jump": (_with(11, lambda z: 30.0 * (z > 0.1)), "not the same all the time"),
    "a random walk": (_with(12, lambda z: np.cumsum(np.random.default_rng(1).normal(size=N))), "drift"),
    "clipped": (np.minimum(_noise(13), 0.5), "clipped"),
    "a gap": (np.where(abs(np.arange(N) - 500) < 20, np.nan, _noise(14)), "missing"),
    "overloaded": (np.where(np.arange(N) == 7, np.inf, _noise(15)), "overloaded"),
    "filtered": (np.convolve(_noise(16, n=N + 4), np.ones(5) / 5.0, "valid"), "give highest_frequency"),
}


@pytest.mark.parametrize("flaw", FLAWS)
def test_what_is_no_stationary_power_law_gets_no_number(flaw: str) -> None:
    y, reason = FLAWS[flaw]
    result = run(series(1e-12 * y, DT), GIVEN)
    assert reason in str(result.refused)
    assert all(q.value is None for q in result.quantities)


def test_a_limit_of_frequency_keeps_a_filter_out() -> None:
    y = np.convolve(_noise(16, n=4 * N + 4), np.ones(5) / 5.0, "valid")
    result = run(series(1e-12 * y, DT), GIVEN | {"highest_frequency": Given(4.0)})
    assert abs(score(one(result, NAME), ENERGY)) < 4.0


def test_a_slow_series_that_does_not_reach_1_hz_is_refused() -> None:
    assert "would be a guess" in str(run(series(1e-12 * _noise(17), 10.0), GIVEN).refused)


def test_a_zero_slope_and_an_axis_in_volts_are_input_errors() -> None:
    samples = series(1e-12 * _noise(18), DT)
    with pytest.raises(InputError, match="sensor_sensitivity=0"):
        run(samples, GIVEN | {"sensor_sensitivity": Given(0.0)})
    axis = type(samples.axes[0])("P1", "V", samples.axes[0].values)
    with pytest.raises(InputError, match="against time"):
        run(type(samples)("trace", (axis,), samples.signals), GIVEN)


def _check(draws: int, likely: Likely) -> None:
    rng, scores = np.random.default_rng(19), []
    for k in range(draws):
        exponent, white = (0.8, 1.0, 1.3)[k % 3], (0.0, 1.0, 3.0)[k // 3 % 3]
        y = power_law_noise(N, DT, exponent, rng) + white * rng.normal(size=N)
        result = run(series(1e-12 * y, DT), GIVEN)
        if result.refused is None and one(result, NAME).bound is None:
            scores.append((score(one(result, NAME), ENERGY), score(one(result, "noise_exponent"), exponent)))
    assert likely(len(scores), draws, 0.97, 1.0)
    for found in np.array(scores).T:
        assert likely(int(np.sum(np.abs(found) < 1.0)), found.size, 0.60, 0.73)
        assert likely(int(np.sum(np.abs(found) < 1.96)), found.size, 0.90, 0.97)
        assert abs(np.mean(found)) < 0.2 + 3.9 / np.sqrt(found.size)


def test_intervals_cover_the_truth_in_a_small_sample(likely: Likely) -> None:
    _check(27, likely)


@pytest.mark.slow
def test_intervals_cover_the_truth_in_2000_draws(likely: Likely) -> None:
    _check(2000, likely)


KINDS = ("white", "ramp", "glitch", "step", "mains", "telegraph", "walk")


def _featureless(kind: str, rng: np.random.Generator) -> FloatArray:
    white, size, z = rng.normal(size=N), 10.0 ** rng.uniform(0.5, 2.0), np.linspace(-1.0, 1.0, N)
    feature = np.zeros(N)
    if kind == "ramp":
        feature = z
    if kind == "glitch":
        feature[rng.integers(N)] = 10.0
    if kind == "step":
        feature = (np.arange(N) > rng.integers(N)).astype(float)
    if kind == "mains":
        feature = np.sin(2.0 * np.pi * (rng.uniform(0.6, 200.0) * z + rng.uniform()))
    if kind == "telegraph":
        feature = (np.cumsum(rng.random(N) < rng.choice([0.05, 0.017, 0.005, 0.001])) % 2).astype(float)
    if kind == "walk":
        feature = np.cumsum(rng.normal(size=N)) / np.sqrt(N)
    return np.asarray(white + size * feature)


def _false_answers(kind: str, draws: int) -> int:
    rng, answers = np.random.default_rng(20), 0
    for _ in range(draws):
        result = run(series(1e-12 * _featureless(kind, rng), DT), GIVEN)
        answers += result.refused is None and one(result, NAME).bound is None
    return answers


@pytest.mark.parametrize("kind", KINDS)
def test_what_is_no_charge_noise_hardly_ever_gets_a_number(kind: str, likely: Likely) -> None:
    assert likely(_false_answers(kind, 4), 4, 0.0, 0.025)


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_what_is_no_charge_noise_gets_a_number_in_less_than_2_5_percent(kind: str) -> None:
    assert _false_answers(kind, 1000) <= 25
