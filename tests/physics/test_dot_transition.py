from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from registry.physics.dot_transition import run
from registry.physics.lineshapes import BOLTZMANN_EV, fermi_step
from registry.physics.result import Given, Quantity, Result
from registry.samples import FloatArray, Samples

from .featureless import KINDS, featureless

Noise = Callable[..., FloatArray]
Trace = Callable[..., Samples]
Likely = Callable[[int, int, float, float], bool]

SPAN = (0.100, 0.120)
CENTRE, WIDTH = 0.1092, 0.0008
LEVER_ARM = Given(0.1)


def _axis(n: int = 200) -> FloatArray:
    return np.linspace(*SPAN, n)


def _step(x: FloatArray, height: float = 30.0, centre: float = CENTRE, width: float = WIDTH) -> FloatArray:
    return height * fermi_step((x - centre) / width)


def _one(result: Result, name: str) -> Quantity:
    found = [one for one in result.quantities if one.quantity == name]
    assert len(found) == 1
    return found[0]


def _value(result: Result, name: str) -> float:
    value = _one(result, name).value
    assert value is not None
    return value


def test_an_exact_step_gives_its_position_size_and_temperature_back(trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, 1e-10 * (_step(x) + 3.0 * (x - 0.11))), {"lever_arm": LEVER_ARM})
    assert result.refused is None
    assert _value(result, "transition_voltage") == pytest.approx(CENTRE, abs=1e-9)
    assert _value(result, "sensor_step") == pytest.approx(30e-10, rel=1e-6)
    assert _value(result, "electron_temperature") == pytest.approx(0.1 * WIDTH / BOLTZMANN_EV, rel=1e-6)


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("down", [False, True])
def test_either_sign_and_direction_give_one_answer(
    sign: float, down: bool, noise: Noise, trace: Trace
) -> None:
    x = _axis()
    y = sign * (_step(x) + noise(200, 0.0, np.random.default_rng(1)))
    result = run(trace(x[::-1], y[::-1]) if down else trace(x, y), {"lever_arm": LEVER_ARM})
    assert _value(result, "transition_voltage") == pytest.approx(CENTRE, abs=2e-4)
    assert np.sign(_value(result, "sensor_step")) == sign
    assert _one(result, "transition_voltage").conditions == {"direction": "down" if down else "up"}


def test_a_given_temperature_gives_the_lever_arm(trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, _step(x)), {"electron_temperature": Given(0.1)})
    assert _value(result, "lever_arm") == pytest.approx(BOLTZMANN_EV * 0.1 / WIDTH, rel=1e-6)


def test_without_a_given_the_thermal_quantities_say_what_is_missing(trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, _step(x)), {})
    assert _one(result, "electron_temperature").why == "no lever_arm was given"
    assert _one(result, "lever_arm").why == "no electron_temperature was given"
    assert result.refused is None


def test_the_part_of_the_lever_arm_is_kept_apart(noise: Noise, trace: Trace) -> None:
    x = _axis()
    y = _step(x) + noise(200, 0.0, np.random.default_rng(2))
    exact, vague = (run(trace(x, y), {"lever_arm": Given(0.1, u)}) for u in (0.0, 0.01))
    one, own = _one(vague, "electron_temperature"), _one(exact, "electron_temperature").standard_uncertainty
    assert own is not None
    assert one.value is not None
    assert one.shared == {"lever_arm": pytest.approx(0.1 * one.value)}
    assert one.standard_uncertainty == pytest.approx(np.hypot(own, 0.1 * one.value))


def test_a_signal_in_volts_has_no_step_in_ampere(trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, _step(x), unit="V"), {})
    assert _one(result, "sensor_step").value is None
    assert "in V" in str(_one(result, "sensor_step").why)
    assert _value(result, "transition_voltage") == pytest.approx(CENTRE, abs=1e-9)


def test_every_number_is_a_plain_float_and_the_covariance_fits(noise: Noise, trace: Trace) -> None:
    x = _axis()
    result = run(trace(x, _step(x) + noise(200, 0.5, np.random.default_rng(3))), {"lever_arm": LEVER_ARM})
    assert all(type(one.value) is float for one in result.quantities)
    assert all(type(one.standard_uncertainty) is float for one in result.quantities)
    assert result.covariance is not None
    assert result.covariance.shape == (len(result.parameters),) * 2
    assert np.sqrt(result.covariance[3, 3]) == pytest.approx(
        _one(result, "transition_voltage").standard_uncertainty
    )


def test_the_same_trace_gives_the_same_numbers(noise: Noise, trace: Trace) -> None:
    x = _axis()
    y = _step(x) + noise(200, 0.5, np.random.default_rng(4))
    first, second = (run(trace(x, y), {"lever_arm": LEVER_ARM}) for _ in range(2))
    assert first.quantities == second.quantities


REFUSED: dict[str, tuple[Callable[[FloatArray, FloatArray], FloatArray], str]] = {
    "too few samples": (lambda x, e: (_step(x) + e)[:12], "too few"),
    "dead": (lambda x, e: 0.0 * x, "equal"),
    "clipped": (lambda x, e: np.minimum(_step(x) + e, 20.0), "clipped"),
    "noise alone": (lambda x, e: e, "noise of a sample|uncertainty"),
    "weak": (lambda x, e: _step(x, 3.0) + e, "noise of a sample"),
    "a line": (lambda x, e: 3e3 * (x - 0.11) + e, "straight line|noise of a sample|uncertainty"),
    "a jump": (lambda x, e: 30.0 * (x > 0.1113) + e, "jump|width is uncertain"),
    "too wide": (lambda x, e: _step(x, 300.0, width=0.004) + e, "fills|inside|cubic"),
    "at the edge": (lambda x, e: _step(x, centre=0.1015) + e, "inside"),
    "two steps": (lambda x, e: _step(x, centre=0.105) + _step(x, 15.0, centre=0.114) + e, "more than one"),
}


@pytest.mark.parametrize("flaw", REFUSED)
def test_what_is_no_single_step_gets_no_number(flaw: str, noise: Noise, trace: Trace) -> None:
    make, reason = REFUSED[flaw]
    x = _axis()
    y = make(x, noise(200, 0.0, np.random.default_rng(5)))
    result = run(trace(x[: y.size], y), {"lever_arm": LEVER_ARM})
    assert result.refused is not None
    assert any(part in result.refused for part in reason.split("|"))
    assert all(one.value is None and one.why == result.refused for one in result.quantities)


def _scores(result: Result) -> list[float]:
    truth = {
        "transition_voltage": CENTRE,
        "sensor_step": 30.0,
        "electron_temperature": 0.1 * WIDTH / BOLTZMANN_EV,
    }
    scores = []
    for name, true in truth.items():
        u = _one(result, name).standard_uncertainty
        assert u is not None
        scores.append((_value(result, name) - true) / u)
    return scores


def _calibrate(draws: int, pinks: tuple[float, ...], noise: Noise, trace: Trace) -> FloatArray:
    """Scores (value - truth) / u of position, size and temperature, shape (answers, 3)."""
    rng, x, scores = np.random.default_rng(6), _axis(), []
    for k in range(draws):
        y = _step(x) + noise(x.size, pinks[k % len(pinks)], rng)
        result = run(trace(x, y), {"lever_arm": LEVER_ARM})
        if result.refused is None:
            scores.append(_scores(result))
    return np.array(scores)


def test_intervals_cover_the_truth_in_a_small_sample(noise: Noise, trace: Trace, likely: Likely) -> None:
    draws = 80
    scores = _calibrate(draws, (0.0, 0.5, 1.0), noise, trace)
    assert likely(len(scores), draws, 0.98, 1.0)
    for column in scores.T:
        assert likely(int(np.sum(np.abs(column) < 1.0)), len(scores), 0.63, 0.73)
        assert likely(int(np.sum(np.abs(column) < 1.96)), len(scores), 0.93, 0.97)
        assert abs(np.mean(column)) < 0.1 + 3.9 / np.sqrt(len(scores))


@pytest.mark.slow
def test_intervals_cover_the_truth_in_2000_draws(noise: Noise, trace: Trace) -> None:
    scores = _calibrate(2000, (0.0, 0.5, 1.0), noise, trace)
    assert len(scores) > 0.98 * 2000
    for column in scores.T:
        assert abs(np.mean(column)) < 0.1
        assert 0.63 < np.mean(np.abs(column) < 1.0) < 0.73
        assert 0.93 < np.mean(np.abs(column) < 1.96) < 0.97


@pytest.mark.parametrize("kind", KINDS)
def test_featureless_data_hardly_ever_get_an_answer(
    kind: str, noise: Noise, trace: Trace, likely: Likely
) -> None:
    rng, draws, answers = np.random.default_rng(7), 40, 0
    for _ in range(draws):
        answers += run(trace(_axis(), featureless(kind, 200, rng, noise, 0.6)), {}).refused is None
    assert likely(answers, draws, 0.0, 0.025)


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_featureless_data_get_an_answer_in_less_than_2_5_percent(
    kind: str, noise: Noise, trace: Trace
) -> None:
    rng, draws = np.random.default_rng(8), 1000
    answers = sum(
        run(trace(_axis(), featureless(kind, 200, rng, noise, 0.6)), {}).refused is None for _ in range(draws)
    )
    assert answers <= 0.025 * draws
