from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy.stats import binom

from registry.errors import InputError
from registry.physics.pinch_off import METHOD, run
from registry.physics.result import Given, Result
from registry.samples import FloatArray, Samples

from .turn_on_traces import FEATURELESS, SHAPES, featureless, pink, quantity, scene, sweeps, trace

#: A fair procedure breaks a bound computed at this probability once in ten thousand runs.
UNLUCKY = 1e-4


def _calibrate(count: int, seed: int) -> dict[str, list[float]]:
    """Return the errors over stated uncertainty of each quantity, and 1.0 for each refusal."""
    rng = np.random.default_rng(seed)
    found: dict[str, list[float]] = {"threshold": [], "slope": [], "pinch-off": [], "refused": []}
    for _ in range(count):
        truth = scene(rng)
        result = run(trace(truth.x, truth.y), {})
        wanted = {
            "threshold": (quantity(result, "threshold_voltage"), truth.threshold),
            "slope": (quantity(result, "max_transconductance"), truth.slope),
            "pinch-off": (quantity(result, "pinch_off_voltage"), truth.tenth),
        }
        found["refused"] += [1.0] if result.refused else []
        for name, (one, true) in wanted.items():
            if one.value is not None and one.standard_uncertainty is not None:
                found[name].append((one.value - true) / one.standard_uncertainty)
    return found


@pytest.fixture(scope="module")
def few() -> dict[str, list[float]]:
    """Errors over uncertainty of 80 simulated traces."""
    return _calibrate(80, seed=20)


@pytest.mark.parametrize("name", ["threshold", "slope", "pinch-off"])
def test_a_sample_of_simulated_traces_is_unbiased_and_covered(few: dict[str, list[float]], name: str) -> None:
    z = np.array(few[name])
    assert z.size >= 70
    assert abs(np.mean(z)) < 0.3 + 3.9 / np.sqrt(z.size)
    assert np.count_nonzero(np.abs(z) < 1.96) >= binom.ppf(UNLUCKY, z.size, 0.90)


def test_a_sample_of_good_traces_is_hardly_ever_refused(few: dict[str, list[float]]) -> None:
    assert len(few["refused"]) <= binom.ppf(1.0 - UNLUCKY, 80, 0.02)


@pytest.mark.slow
def test_two_thousand_simulated_traces_are_calibrated() -> None:
    found = _calibrate(2000, seed=21)
    print({name: (len(z), np.mean(z), np.mean(np.abs(z) < 1.96)) for name, z in found.items() if z})
    for name in ("threshold", "slope", "pinch-off"):
        z = np.array(found[name])
        assert abs(np.mean(z)) < 0.3, name
        assert 0.90 <= np.mean(np.abs(z) < 1.96) <= 1.0, name
    assert len(found["refused"]) <= 40


def _answers(kind: str, count: int, seed: int) -> int:
    rng = np.random.default_rng(seed)
    return sum(run(trace(*featureless(kind, rng)), {}).refused is None for _ in range(count))


@pytest.mark.parametrize("kind", FEATURELESS)
def test_featureless_data_get_no_threshold(kind: str) -> None:
    assert _answers(kind, 25, seed=22) <= binom.ppf(1.0 - UNLUCKY, 25, 0.025)


@pytest.mark.slow
@pytest.mark.parametrize("kind", FEATURELESS)
def test_false_answers_on_featureless_data_are_rare(kind: str) -> None:
    count = _answers(kind, 400, seed=23)
    print(kind, count / 400)
    assert count <= 10


GRID = np.linspace(0.0, 1.0, 401)
CURVE = SHAPES["degraded"](GRID, 0.4, 0.02)
CURVE = CURVE / CURVE[-1]


def _noisy(curve: FloatArray = CURVE, snr: float = 100.0, seed: int = 1) -> FloatArray:
    noise: FloatArray = np.random.default_rng(seed).normal(size=curve.size)
    return curve + noise / snr


def _number(result: Result, name: str) -> tuple[float, float]:
    one = quantity(result, name)
    assert one.value is not None, one.why
    assert one.standard_uncertainty is not None
    return one.value, one.standard_uncertainty


MIRRORS: dict[str, tuple[Samples, float]] = {
    "falling current": (trace(GRID, -_noisy()), 1.0),
    "holes": (trace(-GRID, _noisy()), -1.0),
    "holes, falling current": (trace(-GRID, -_noisy()), -1.0),
    "amplifier offset": (trace(GRID, _noisy() + 0.2), 1.0),
    "microamperes": (trace(GRID, 1e-6 * _noisy()), 1.0),
}


@pytest.mark.parametrize("case", MIRRORS)
def test_the_threshold_does_not_depend_on_sign_offset_and_scale(case: str) -> None:
    plain, u = _number(run(trace(GRID, _noisy()), {}), "threshold_voltage")
    samples, sign = MIRRORS[case]
    mirrored, _ = _number(run(samples, {}), "threshold_voltage")
    assert sign * mirrored == pytest.approx(plain, abs=0.2 * u)


def test_a_depletion_gate_turns_on_from_negative_volts() -> None:
    x = np.linspace(-1.5, -0.5, 401)
    value, u = _number(run(trace(x[::-1], _noisy()[::-1]), {}), "threshold_voltage")
    plain, _ = _number(run(trace(GRID, _noisy()), {}), "threshold_voltage")
    assert value + 1.5 == pytest.approx(plain, abs=0.5 * u)


def test_hysteresis_is_threshold_up_minus_threshold_down() -> None:
    down = np.interp(GRID[::-1] - 0.05, GRID, CURVE)
    result = run(sweeps((GRID, _noisy()), (GRID[::-1], _noisy(down, seed=2))), {})
    up = quantity(result, "threshold_voltage", "up").value
    below = quantity(result, "threshold_voltage", "down").value
    value, u = _number(result, "hysteresis_voltage")
    assert up is not None
    assert below is not None
    assert value == pytest.approx(up - below, abs=1e-12)
    assert value == pytest.approx(-0.05, abs=4.0 * u)
    assert quantity(result, "hysteresis_voltage").conditions == {}


def test_one_refused_direction_leaves_the_other_its_values() -> None:
    rng = np.random.default_rng(3)
    result = run(sweeps((GRID, _noisy()), (GRID[::-1], rng.normal(size=GRID.size))), {})
    assert result.refused is None
    assert quantity(result, "threshold_voltage", "up").value is not None
    down = [one for one in result.quantities if one.conditions.get("direction") == "down"]
    assert down
    assert all(one.value is None and one.why for one in down)
    assert "down" in (quantity(result, "hysteresis_voltage").why or "")


def test_one_direction_can_be_chosen() -> None:
    samples = sweeps((GRID, _noisy()), (GRID[::-1], _noisy()[::-1]))
    result = run(samples, {"direction": Given("down")})
    assert {one.conditions.get("direction", "down") for one in result.quantities} == {"down"}


def test_the_same_trace_gives_the_same_numbers() -> None:
    first, second = (run(trace(GRID, _noisy()), {}) for _ in range(2))
    assert first.quantities == second.quantities
    assert first.settings["seed"] == second.settings["seed"]


def test_covariance_has_the_stated_uncertainties_on_its_diagonal() -> None:
    result = run(trace(GRID, _noisy()), {})
    assert result.parameters == ("threshold_voltage[up]", "largest_slope[up]", "off_level[up]")
    assert result.covariance is not None
    u = [_number(result, name)[1] for name in ("threshold_voltage", "max_transconductance")]
    assert np.sqrt(np.diag(result.covariance))[:2] == pytest.approx(u)
    assert np.all(
        np.linalg.eigvalsh(result.covariance / np.outer(*2 * [np.sqrt(np.diag(result.covariance))])) > 0
    )


def test_the_tangent_meets_the_off_level_at_the_threshold() -> None:
    result = run(trace(GRID, _noisy()), {})
    tangent = next(curve for curve in result.curves if curve.name == "tangent up")
    assert tangent.x[0] == _number(result, "threshold_voltage")[0]
    assert (tangent.y[1] - tangent.y[0]) / (tangent.x[1] - tangent.x[0]) == pytest.approx(
        _number(result, "max_transconductance")[0]
    )


def test_the_default_level_is_a_tenth_of_the_rise() -> None:
    result = run(trace(GRID, _noisy()), {})
    value, u = _number(result, "pinch_off_voltage")
    assert value == pytest.approx(np.interp(0.1, CURVE, GRID), abs=4.0 * u)
    assert (
        quantity(result, "pinch_off_voltage").conditions["level_share"]
        == result.settings["level_share"]
        == 0.1
    )


def test_a_level_in_siemens_times_the_bias_is_the_current_level() -> None:
    given = {"level": Given(20e-6), "bias": Given(-1e-3, 1e-5)}
    samples = trace(GRID, 1e-7 * _noisy())
    one = quantity(run(samples, given), "pinch_off_voltage")
    exact, u = _number(run(samples, {"level": Given(20e-6), "bias": Given(-1e-3)}), "pinch_off_voltage")
    assert exact == pytest.approx(np.interp(0.2, CURVE, GRID), abs=4.0 * u)
    slope = np.interp(exact, GRID, np.gradient(CURVE, GRID))
    assert one.conditions["level"] == 20e-6
    assert abs(one.shared["bias"]) == pytest.approx(0.01 * 0.2 / slope, rel=0.1)
    assert one.standard_uncertainty == pytest.approx(np.hypot(u, one.shared["bias"]), rel=0.01)


WITHOUT: dict[str, tuple[str, dict[str, Given], str, str]] = {
    "level of a current without bias": ("A", {"level": Given(0.2)}, "pinch_off_voltage", "give bias"),
    "level above the curve": ("S", {"level": Given(3.0)}, "pinch_off_voltage", "reach"),
    "level in the noise": ("S", {"level": Given(1e-3)}, "pinch_off_voltage", "noise"),
    "slope of a conductance": ("S", {}, "max_transconductance", "S/V"),
    "one direction": ("A", {}, "hysteresis_voltage", "one direction"),
    "swing in the noise": ("A", {}, "subthreshold_swing", "decades"),
}


@pytest.mark.parametrize("case", WITHOUT)
def test_a_quantity_that_cannot_be_trusted_says_why(case: str) -> None:
    unit, given, name, why = WITHOUT[case]
    result = run(trace(GRID, _noisy(), unit), given)
    one = quantity(result, name)
    assert result.refused is None
    assert one.value is None
    assert why in (one.why or "")


def test_a_conductance_with_bias_gives_a_transconductance() -> None:
    one = quantity(run(trace(GRID, _noisy(), "S"), {"bias": Given(-2e-3, 2e-5)}), "max_transconductance")
    plain, u = _number(run(trace(GRID, _noisy()), {}), "max_transconductance")
    assert one.value == pytest.approx(2e-3 * plain)
    assert one.shared == {"bias": pytest.approx(-plain * 2e-5)}
    assert one.standard_uncertainty == pytest.approx(np.hypot(2e-3 * u, plain * 2e-5))


def test_a_lost_off_current_gives_a_lower_bound_of_the_on_off_ratio() -> None:
    one = quantity(run(trace(GRID, _noisy()), {}), "on_off_ratio")
    assert one.bound == "lower"
    assert one.value is not None
    assert 50.0 < one.value < 1e4


def test_a_leaky_off_state_gives_the_on_off_ratio_itself() -> None:
    value, u = _number(run(trace(GRID, _noisy() + 0.1), {}), "on_off_ratio")
    assert value == pytest.approx(11.0, abs=4.0 * u)


def test_swings_are_covered_where_the_decades_are_there() -> None:
    rng, z = np.random.default_rng(4), []
    x = np.linspace(-0.3, 1.0, 521)
    for _ in range(30):
        width = rng.uniform(0.02, 0.04)
        current = 1e-6 * SHAPES["degraded"](x, 0.4, width)
        noise = rng.normal(size=x.size) + rng.uniform(0.0, 1.0) * pink(x.size, rng)
        value, u = _number(run(trace(x, current + current[-1] * 1e-5 * noise), {}), "subthreshold_swing")
        z.append((value - width * np.log(10.0)) / u)
    assert np.count_nonzero(np.abs(z) < 1.96) >= binom.ppf(UNLUCKY, len(z), 0.90)
    assert abs(np.mean(z)) < 0.3 + 3.9 / np.sqrt(len(z))


def test_long_traces_are_averaged_and_say_so() -> None:
    x = np.linspace(0.0, 1.0, 9000)
    curve = np.interp(x, GRID, CURVE)
    result = run(trace(x, _noisy(curve, snr=20.0)), {})
    assert result.settings["fit_samples[up]"] == 3000.0
    assert "9000 samples were averaged in blocks to 3000" in result.warnings
    assert _number(result, "threshold_voltage")[0] == pytest.approx(0.385, abs=0.01)


def _spoilt(change: Callable[[FloatArray], FloatArray]) -> Samples:
    return trace(GRID, change(_noisy()))


REFUSED: dict[str, tuple[Samples, str]] = {
    "clipped": (_spoilt(lambda y: np.minimum(y, 0.7)), "clipped or stuck"),
    "stuck in the rise": (_spoilt(lambda y: np.where((GRID > 0.6) & (GRID < 0.64), y[240], y)), "stuck"),
    "dead": (_spoilt(np.zeros_like), "equal"),
    "charge jump in the rise": (_spoilt(lambda y: y + 0.25 * (GRID > 0.6)), "neighbours"),
    "one lost reading": (_spoilt(lambda y: np.where(np.arange(y.size) == 350, 0.0, y)), "differ by"),
    "one-sample step": (_spoilt(lambda y: 0.02 * y + (GRID > 0.5)), "one-sample step"),
    "never pinched off": (trace(GRID[190:], _noisy()[190:]), "pinch"),
    "cut before it turned on": (trace(GRID[:170], _noisy(snr=2000.0)[:170]), "edge of the window"),
    "falls back": (
        _spoilt(lambda y: y * (1.0 - 0.8 * (GRID > 0.7) * np.sin((GRID - 0.7) * 5.0))),
        "falls back",
    ),
    "noise as large as the signal": (trace(GRID, _noisy(snr=2.0)), ""),
    "both ends alike": (_spoilt(lambda y: y - 0.5), "which end"),
    "too few": (trace(GRID[::12], _noisy()[::12]), "too few"),
    "overload": (_spoilt(lambda y: np.where(GRID > 0.9, np.inf, y)), "infinite"),
}


@pytest.mark.parametrize("flaw", REFUSED)
def test_a_refused_trace_has_a_reason_and_no_number_at_all(flaw: str) -> None:
    samples, why = REFUSED[flaw]
    result = run(samples, {})
    assert result.refused is not None
    assert why in result.refused
    assert {one.quantity for one in result.quantities} == set(METHOD.quantities)
    assert all(one.value is None and one.why for one in result.quantities)


WRONG: dict[str, tuple[Samples, dict[str, Given], str]] = {
    "signal in volts": (trace(GRID, _noisy(), "V"), {}, "current"),
    "no bias at all": (trace(GRID, _noisy()), {"bias": Given(0.0)}, "bias"),
    "unknown given": (trace(GRID, _noisy()), {"lever_arm": Given(0.1)}, "lever_arm"),
    "negative level": (trace(GRID, _noisy()), {"level": Given(-1.0)}, "level"),
    "unknown signal": (trace(GRID, _noisy()), {"signal": Given("gate")}, "gate"),
    "missing direction": (trace(GRID, _noisy()), {"direction": Given("down")}, "down"),
}


@pytest.mark.parametrize("case", WRONG)
def test_a_wrong_request_is_an_error_that_names_the_fault(case: str) -> None:
    samples, given, named = WRONG[case]
    with pytest.raises(InputError) as caught:
        run(samples, given)
    assert named in str(caught.value)


def test_the_source_digest_covers_every_module_that_makes_the_numbers() -> None:
    wanted = {"pinch_off", "psplines", "subthreshold", "trace_steps", "turn_on", "noise"}
    wanted |= {"turn_on_place", "turn_on_quantities"}
    assert wanted <= set(METHOD.sources)
