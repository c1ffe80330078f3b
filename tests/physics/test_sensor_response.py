from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from registry.errors import InputError
from registry.physics.lineshapes import fermi_step, single_level, thermal_lorentzian
from registry.physics.result import Given, Quantity, Result
from registry.physics.sensor_response import run
from registry.samples import FloatArray, Samples

Noise = Callable[..., FloatArray]
Trace = Callable[..., Samples]
Likely = Callable[[int, int, float, float], bool]
Shape = Callable[[FloatArray], FloatArray]

SHIFT = 0.02
WITH_SHIFT = {"shift": Given(SHIFT)}
#: Sensors of the kinds there are, over a sweep of 0 to 1 V.
SHAPES: dict[str, Shape] = {
    "peak": lambda x: single_level((x - 0.5) / 0.05),
    "broad peak": lambda x: thermal_lorentzian((x - 0.45) / 0.03, 4.0),
    "point contact": lambda x: fermi_step((x - 0.5) / 0.06),
    "two plateaus": lambda x: 0.3 * x + fermi_step((x - 0.4) / 0.03) + 0.7 * fermi_step((x - 0.75) / 0.05),
    "three peaks": lambda x: (
        0.5 * single_level((x - 0.2) / 0.03)
        + single_level((x - 0.5) / 0.03)
        + 0.7 * single_level((x - 0.8) / 0.03)
    ),
}
FINE = np.linspace(0.0, 1.0, 100_001)


def _x(n: int = 200) -> FloatArray:
    return np.linspace(0.0, 1.0, n)


def _one(result: Result, name: str) -> Quantity:
    found = [one for one in result.quantities if one.quantity == name]
    assert len(found) == 1
    return found[0]


def _value(result: Result, name: str) -> float:
    value = _one(result, name).value
    assert value is not None
    return value


def _truth(shape: Shape, rising: bool) -> tuple[float, float, float]:
    """Place, |slope| and |step| of the steepest place of one flank, from the shape itself."""
    slope = np.gradient(shape(FINE), FINE)
    at = int(np.argmax(slope if rising else -slope))
    ends = np.interp([FINE[at] - SHIFT / 2, FINE[at] + SHIFT / 2], FINE, shape(FINE))
    return float(FINE[at]), abs(float(slope[at])), abs(float(ends[1] - ends[0]))


@pytest.mark.parametrize("kind", SHAPES)
def test_a_hardly_noisy_sensor_gives_its_numbers_back(kind: str, noise: Noise, trace: Trace) -> None:
    y = SHAPES[kind](_x(400)) + 1e-3 * noise(400, 0.0, np.random.default_rng(1))
    result = run(trace(_x(400), 1e-9 * y), WITH_SHIFT)
    rising = _one(result, "sensor_sensitivity").conditions["flank"] == "rising"
    at, slope, step = _truth(SHAPES[kind], rising)
    assert _value(result, "sensor_sensitivity") == pytest.approx(1e-9 * slope, rel=0.02)
    assert _value(result, "sensor_step") == pytest.approx((-1e-9 if rising else 1e-9) * step, rel=0.02)
    assert _value(result, "sensor_snr") == pytest.approx(1e3 * step, rel=0.2)
    point = next(curve for curve in result.curves if curve.name == "operating point")
    assert point.x[0] == pytest.approx(at, abs=0.01)
    assert any(warning.startswith("operating point: P1 =") for warning in result.warnings)


@pytest.mark.parametrize("down", [False, True])
@pytest.mark.parametrize("flank", ["rising", "falling"])
def test_the_wanted_flank_is_taken_in_either_direction(
    flank: str, down: bool, noise: Noise, trace: Trace
) -> None:
    x, y = _x(), 50.0 * SHAPES["peak"](_x()) + noise(200, 0.0, np.random.default_rng(2))
    samples = trace(x[::-1], y[::-1]) if down else trace(x, y)
    result = run(samples, {"flank": Given(flank)} | WITH_SHIFT)
    at, slope, _ = _truth(SHAPES["peak"], flank == "rising")
    point = next(curve for curve in result.curves if curve.name == "operating point")
    assert point.x[0] == pytest.approx(at, abs=0.03)
    assert _value(result, "sensor_sensitivity") == pytest.approx(50.0 * slope, rel=0.2)
    assert (_value(result, "sensor_step") < 0.0) == (flank == "rising")
    assert _one(result, "sensor_snr").conditions["flank"] == flank


def test_a_told_operating_point_is_kept(noise: Noise, trace: Trace) -> None:
    y = 100.0 * SHAPES["peak"](_x()) + noise(200, 0.0, np.random.default_rng(3))
    result = run(trace(_x(), y), {"operating_point": Given(0.40)})
    slope = float(np.interp(0.40, FINE, np.gradient(100.0 * SHAPES["peak"](FINE), FINE)))
    assert _value(result, "sensor_sensitivity") == pytest.approx(slope, rel=0.15)
    outside = run(trace(_x(), y), {"operating_point": Given(1.4)})
    assert "outside the sweep" in str(outside.refused)


def test_the_bias_turns_a_conductance_into_a_current(noise: Noise, trace: Trace) -> None:
    y = 50.0 * SHAPES["peak"](_x()) + noise(200, 0.0, np.random.default_rng(4))
    as_current = run(trace(_x(), y), WITH_SHIFT)
    as_conductance = run(trace(_x(), y, unit="S"), WITH_SHIFT | {"bias": Given(-1e-3, 1e-4)})
    one = _one(as_conductance, "sensor_sensitivity")
    assert one.value == pytest.approx(1e-3 * _value(as_current, "sensor_sensitivity"))
    assert one.shared == {"bias": pytest.approx(-0.1 * (one.value or 0.0))}
    assert _value(as_conductance, "sensor_step") == pytest.approx(-1e-3 * _value(as_current, "sensor_step"))
    assert _value(as_conductance, "sensor_snr") == pytest.approx(_value(as_current, "sensor_snr"))
    unused = run(trace(_x(), y), {"bias": Given(1e-3)})
    assert any("bias was not used" in warning for warning in unused.warnings)
    assert "give bias" in str(run(trace(_x(), y, unit="S"), {}).refused)
    with pytest.raises(InputError, match="is in 'V'"):
        run(trace(_x(), y, unit="V"), {})


def test_the_part_of_the_shift_is_what_moves_with_it(noise: Noise, trace: Trace) -> None:
    samples = trace(_x(), 50.0 * SHAPES["peak"](_x()) + noise(200, 0.0, np.random.default_rng(5)))
    vague = _one(run(samples, {"shift": Given(SHIFT, 0.002)}), "sensor_step")
    low, high = (_value(run(samples, {"shift": Given(SHIFT + d)}), "sensor_step") for d in (-0.002, 0.002))
    assert vague.shared == {"shift": pytest.approx(0.5 * (high - low), rel=0.1)}


def test_a_shift_beyond_the_flank_is_warned_of_and_beyond_the_sweep_has_no_step(
    noise: Noise, trace: Trace
) -> None:
    samples = trace(_x(), 50.0 * SHAPES["peak"](_x()) + noise(200, 0.0, np.random.default_rng(6)))
    far = run(samples, {"shift": Given(0.2)})
    assert any("leaves the flank" in warning for warning in far.warnings)
    out = run(samples, {"shift": Given(1.5)})
    assert "leaves the window" in str(_one(out, "sensor_step").why)
    assert out.refused is None


def test_without_a_shift_there_is_a_sensitivity_alone(noise: Noise, trace: Trace) -> None:
    samples = trace(_x(), 50.0 * SHAPES["peak"](_x()) + noise(200, 0.0, np.random.default_rng(7)))
    result = run(samples, {})
    assert _value(result, "sensor_sensitivity") > 0.0
    assert _one(result, "sensor_step").why == "no shift was given"
    assert _one(result, "sensor_snr").why == "no shift was given"


def test_the_signal_to_noise_is_that_of_a_reading_as_long_as_a_sample_or_a_bound(
    noise: Noise, trace: Trace
) -> None:
    samples = trace(_x(), 50.0 * SHAPES["peak"](_x()) + noise(200, 0.0, np.random.default_rng(8)))

    def snr(**times: float) -> Quantity:
        return _one(run(samples, WITH_SHIFT | {k: Given(v) for k, v in times.items()}), "sensor_snr")

    plain, same = snr(), snr(integration_time=0.1, sample_time=0.1)
    assert same.value == plain.value
    assert same.conditions["integration_time"] == 0.1
    assert plain.conditions["integration"] == "one sample"
    longer = snr(integration_time=0.4, sample_time=0.1)
    assert longer.bound == "upper"
    assert (longer.value or 0.0) > 2.0 * (plain.value or 0.0)
    assert "time series" in str(snr(integration_time=0.01, sample_time=0.1).why)
    assert "need each other" in str(snr(integration_time=0.1).why)


def test_the_same_trace_gives_the_same_plain_numbers(noise: Noise, trace: Trace) -> None:
    y = 50.0 * SHAPES["peak"](_x()) + noise(200, 0.5, np.random.default_rng(9))
    first, second = (run(trace(_x(), y), WITH_SHIFT) for _ in range(2))
    assert first.quantities == second.quantities
    assert all(type(one.value) is float for one in first.quantities)
    assert all(type(one.standard_uncertainty) is float for one in first.quantities)
    assert first.covariance is not None
    assert np.sqrt(first.covariance[1, 1]) == pytest.approx(
        _one(first, "sensor_sensitivity").standard_uncertainty
    )


def test_unequal_spacing_and_lost_samples_are_no_hindrance(noise: Noise, trace: Trace) -> None:
    rng = np.random.default_rng(10)
    x = np.sort(_x() + 0.0015 * rng.uniform(-1.0, 1.0, 200))
    y = 50.0 * SHAPES["peak"](x) + noise(200, 0.0, rng)
    y[[20, 21, 150]] = np.nan
    result = run(trace(x, y), {})
    assert any("missing" in warning for warning in result.warnings)
    assert _value(result, "sensor_sensitivity") == pytest.approx(
        50.0 * _truth(SHAPES["peak"], True)[1], rel=0.25
    )


REFUSED: dict[str, tuple[Callable[[FloatArray, FloatArray], FloatArray], str]] = {
    "too few samples": (lambda y, e: (y + e)[:30], "too few"),
    "dead": (lambda y, e: 0.0 * y, "equal"),
    "saturated": (lambda y, e: np.minimum(y + e, 35.0), "clipped"),
    "overloaded": (lambda y, e: np.where(np.arange(y.size) == 9, np.inf, y), "overloaded"),
    "aborted": (lambda y, e: np.where(np.arange(y.size) < 120, y + e, np.nan), "missing"),
    "noise alone": (lambda y, e: e, "straight line"),
    "weak": (lambda y, e: 0.05 * y + e, "straight line|times the noise|uncertain"),
    "a line": (lambda y, e: 0.3 * np.arange(y.size) + e, "straight line"),
    "cut by the sweep": (lambda y, e: 50.0 * single_level((_x() - 1.2) / 0.1) + e, "grows at the end"),
    "a jump": (lambda y, e: 30.0 * (np.arange(y.size) > 111) + e, "one-sample step"),
    "mains": (lambda y, e: 30.0 * np.sin(35.0 * _x()) + e, "sine"),
}


@pytest.mark.parametrize("flaw", REFUSED)
def test_what_is_no_sensors_curve_gets_no_number(flaw: str, noise: Noise, trace: Trace) -> None:
    make, reason = REFUSED[flaw]
    y = make(50.0 * SHAPES["peak"](_x()), noise(200, 0.0, np.random.default_rng(11)))
    result = run(trace(_x()[: y.size], y), WITH_SHIFT)
    assert result.refused is not None
    assert any(part in result.refused for part in reason.split("|"))
    assert all(one.value is None and one.why == result.refused for one in result.quantities)


@pytest.mark.parametrize("name", ["shift", "bias"])
def test_a_given_of_nothing_is_an_error(name: str, trace: Trace) -> None:
    with pytest.raises(InputError, match=f"{name}=0"):
        run(trace(_x(), SHAPES["peak"](_x())), {name: Given(0.0)})


#: The noise of a sample against its neighbours: white of 1, and 1/f of the given rms.
PINKS = (0.0, 0.5, 1.0)


def _allan(pink: float, noise: Noise) -> float:
    rng = np.random.default_rng(12)
    return float(np.sqrt(np.mean([0.5 * np.mean(np.diff(noise(200, pink, rng)) ** 2) for _ in range(500)])))


def _scores(draws: int, noise: Noise, trace: Trace, seed: int) -> tuple[dict[str, FloatArray], int]:
    """Scores (|value| - truth)/u of each quantity over kinds, sizes and noises; answers."""
    rng, answers = np.random.default_rng(seed), 0
    found: dict[str, list[float]] = {"sensor_sensitivity": [], "sensor_step": [], "sensor_snr": []}
    rms = [_allan(pink, noise) for pink in PINKS]
    for k in range(draws):
        shape, size, pink = list(SHAPES.values())[k % 5], (20.0, 50.0, 200.0)[k // 5 % 3], k // 15 % 3
        result = run(trace(_x(), size * shape(_x()) + noise(200, PINKS[pink], rng)), WITH_SHIFT)
        if result.refused is not None:
            continue
        answers += 1
        rising = _one(result, "sensor_sensitivity").conditions["flank"] == "rising"
        _, slope, step = _truth(shape, rising)
        truth = {
            "sensor_sensitivity": size * slope,
            "sensor_step": size * step,
            "sensor_snr": size * step / rms[pink],
        }
        for name, true in truth.items():
            one = _one(result, name)
            if one.value is not None and one.standard_uncertainty is not None:
                found[name].append((abs(one.value) - true) / one.standard_uncertainty)
    return {name: np.array(scores) for name, scores in found.items()}, answers


def test_intervals_cover_the_truth_in_a_small_sample(noise: Noise, trace: Trace, likely: Likely) -> None:
    draws = 45
    scores, answers = _scores(draws, noise, trace, 13)
    assert likely(answers, draws, 0.97, 1.0)
    for found in scores.values():
        assert likely(int(np.sum(np.abs(found) < 1.96)), found.size, 0.92, 1.0)
        assert abs(np.mean(found)) < 0.4 + 3.9 / np.sqrt(found.size)


@pytest.mark.slow
def test_intervals_cover_the_truth_in_2000_draws(noise: Noise, trace: Trace) -> None:
    scores, answers = _scores(2000, noise, trace, 14)
    print(f"answers {answers}")
    assert answers > 0.98 * 2000
    for name, found in scores.items():
        within = [float(np.mean(np.abs(found) < k)) for k in (1.0, 1.96)]
        print(f"{name}: n {found.size}, mean {np.mean(found):+.3f}, {within[0]:.3f} {within[1]:.3f}")
        assert abs(np.mean(found)) < 0.4
        assert within[1] > 0.92


def _featureless(kind: str, n: int, rng: np.random.Generator, noise: Noise) -> FloatArray:
    """Data without a flank, in units of the white noise of a sample."""
    z, size = np.linspace(-1.0, 1.0, n), 10.0 ** rng.uniform(0.5, 2.0)
    white: FloatArray = noise(n, 0.0, rng)
    feature = np.zeros(n)
    if kind == "pink":
        feature = noise(n, 3.0, rng) + (rng.choice([0.1, 1.0]) - 1.0) * white
    if kind == "line":
        feature = size * z
    if kind == "glitch":
        feature[rng.integers(n)] = size
    if kind == "jump":
        feature = size * (z > rng.uniform(-0.8, 0.8))
    if kind == "mains":
        feature = size * np.sin(2.0 * np.pi * (rng.uniform(0.9, 20.0) * z + rng.uniform()))
    if kind == "telegraph":
        feature = size * (np.cumsum(rng.random(n) < rng.choice([0.05, 0.017, 0.005])) % 2)
    return white + feature


KINDS = ("white", "pink", "line", "glitch", "jump", "mains", "telegraph")


def _answers(kind: str, draws: int, noise: Noise, trace: Trace, seed: int) -> int:
    rng = np.random.default_rng(seed)
    results = (run(trace(_x(), _featureless(kind, 200, rng, noise)), {}) for _ in range(draws))
    return sum(result.refused is None for result in results)


@pytest.mark.parametrize("kind", KINDS)
def test_featureless_data_hardly_ever_get_an_answer(
    kind: str, noise: Noise, trace: Trace, likely: Likely
) -> None:
    assert likely(_answers(kind, 12, noise, trace, 15), 12, 0.0, 0.025)


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_featureless_data_get_an_answer_in_less_than_2_5_percent(
    kind: str, noise: Noise, trace: Trace
) -> None:
    answers = _answers(kind, 1000, noise, trace, 16)
    print(f"{kind}: {answers} of 1000 answered")
    assert answers <= 25
