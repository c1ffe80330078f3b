from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest

from registry.errors import InputError
from registry.physics.coulomb_diamonds import run
from registry.physics.result import Given, Quantity, Result
from registry.samples import Axis, FloatArray, Samples, Signal, Sweep

from .diamond_maps import ATTO, Dot, Scan

Likely = Callable[[int, int, float, float], bool]

DOT, SCAN = Dot(), Scan()
SHAPE = (SCAN.rows, SCAN.columns)


def _one(result: Result, name: str, subject: str | None = None) -> Quantity:
    found = [one for one in result.quantities if one.quantity == name and one.subject == subject]
    assert len(found) == 1
    return found[0]


def _value(result: Result, name: str, subject: str | None = None) -> float:
    one = _one(result, name, subject)
    assert one.value is not None, one.why
    return one.value


def _close(result: Result, name: str, truth: float, subject: str | None = None) -> bool:
    u = _one(result, name, subject).standard_uncertainty
    assert u is not None
    return abs(_value(result, name, subject) - truth) < 4.0 * u


def _take(dot: Dot = DOT, scan: Scan = SCAN, seed: int = 1) -> Samples:
    return scan.take(dot, np.random.default_rng(seed))


@lru_cache(maxsize=1)
def _plain() -> Result:
    """The answer to the plain map, which many tests look at."""
    return run(_take(), {})


CASES: dict[str, tuple[Dot, Scan]] = {
    "current": (DOT, SCAN),
    "conductance": (DOT, Scan(conductance=True)),
    "gate stepped slowly": (DOT, Scan(bias_slow=False)),
    "other capacitances": (Dot(source=20.0, drain=5.0), SCAN),
    "an offset of the bias": (DOT, Scan(offset=4e-4)),
    "unequal barriers and a spin": (Dot(rate_ratio=0.2, degeneracy=2.0), SCAN),
    "drift": (DOT, Scan(drift=0.1)),
    "a charge jump": (DOT, Scan(jump=12.0)),
    "a charge jump in a conductance": (DOT, Scan(conductance=True, jump=-9.0)),
    "two diamonds cut by the frame": (Dot(first=-0.01), SCAN),
    "whole diamonds": (DOT, Scan(largest_bias=6.5e-3, rows=80)),
}


@pytest.mark.parametrize("case", CASES)
def test_lever_arm_energies_and_capacitances_come_back(case: str) -> None:
    dot, scan = CASES[case]
    result = run(_take(dot, scan), {})
    assert result.refused is None
    assert _close(result, "lever_arm", dot.lever_arm)
    assert _close(result, "addition_voltage", dot.spacing)
    assert _close(result, "charging_energy", dot.lever_arm * dot.spacing)
    for name in ("gate", "source", "drain", "total"):
        assert _close(result, f"{name}_capacitance", ATTO * float(getattr(dot, name)))


@pytest.mark.parametrize("conductance", [False, True])
def test_either_sign_of_the_signal_gives_one_answer(conductance: bool) -> None:
    taken = _take(scan=Scan(conductance=conductance))
    signal = replace(taken.signals[0], values=-taken.signals[0].values)
    result = run(replace(taken, signals=(signal,)), {})
    assert _value(result, "lever_arm") == pytest.approx(_value(run(taken, {}), "lever_arm"), rel=1e-9)


def test_falling_axes_give_the_same_numbers_and_their_direction() -> None:
    taken = _take()
    axes = tuple(replace(axis, values=axis.values[::-1]) for axis in taken.axes)
    signal = replace(taken.signals[0], values=taken.signals[0].values[::-1, ::-1])
    turned, result = run(replace(taken, axes=axes, signals=(signal,)), {}), _plain()
    assert _value(turned, "lever_arm") == pytest.approx(_value(result, "lever_arm"), rel=2e-3)
    assert _one(turned, "lever_arm").conditions == {"direction": "down"}


def test_a_bias_of_half_at_either_lead_is_told_and_gives_the_same_capacitances() -> None:
    dot = Dot(symmetric=True)
    result = run(_take(dot), {"bias_at": Given("both")})
    assert _close(result, "lever_arm", dot.lever_arm)
    assert _close(result, "source_capacitance", 10.0 * ATTO)
    assert _close(result, "drain_capacitance", 15.0 * ATTO)


def test_a_bias_at_the_drain_swaps_source_and_drain() -> None:
    source, drain = _plain(), run(_take(), {"bias_at": Given("drain")})
    assert _value(source, "source_capacitance") == _value(drain, "drain_capacitance")
    assert _value(source, "lever_arm") == _value(drain, "lever_arm")


def test_a_bias_of_the_wrong_sign_gets_no_lead_capacitance() -> None:
    taken = _take(Dot(source=3.0, drain=20.0))
    axes = (replace(taken.axes[0], values=-taken.axes[0].values), taken.axes[1])
    result = run(replace(taken, axes=axes), {})
    assert "contradict" in str(_one(result, "drain_capacitance").why)
    assert _close(result, "lever_arm", 5.0 / 28.0)


def test_each_diamond_has_values_of_its_own() -> None:
    result = _plain()
    for subject in ("diamond 1", "diamond 2"):
        assert _close(result, "addition_energy", DOT.lever_arm * DOT.spacing, subject)
        assert _close(result, "lever_arm", DOT.lever_arm, subject)
    for k in range(3):
        assert _close(result, "peak_position", DOT.first + k * DOT.spacing, f"peak {k + 1}")


def test_level_spacings_are_told_from_the_charging_energy() -> None:
    result = run(_take(Dot(levels=(0.0, 6e-4, 6e-4, 6e-4))), {})
    assert any("level spacings" in warning for warning in result.warnings)
    assert _close(result, "charging_energy", DOT.lever_arm * DOT.spacing)
    assert _close(result, "addition_energy", DOT.lever_arm * DOT.spacing + 6e-4, "diamond 1")


def test_one_transition_gives_a_lever_arm_and_no_energy() -> None:
    result = run(_take(Dot(charges=1, first=0.05)), {})
    assert _close(result, "lever_arm", DOT.lever_arm)
    assert "no whole diamond" in str(_one(result, "charging_energy").why)


def test_the_part_of_the_bias_scale_is_kept_apart_with_its_sign() -> None:
    plain, scaled = _plain(), run(_take(), {"bias_scale": Given(1.0, 0.02)})
    arm, total = _one(scaled, "lever_arm"), _one(scaled, "total_capacitance")
    assert arm.value is not None
    assert arm.shared == {"bias_scale": pytest.approx(0.02 * arm.value)}
    assert total.shared["bias_scale"] < 0.0
    own = _one(plain, "lever_arm").standard_uncertainty
    assert own is not None
    assert arm.standard_uncertainty == pytest.approx(np.hypot(own, 0.02 * arm.value))
    assert _one(scaled, "addition_voltage").shared == {}


def test_a_bias_scale_scales_the_lever_arm() -> None:
    whole, half = _plain(), run(_take(), {"bias_scale": Given(0.5)})
    assert _value(half, "lever_arm") == pytest.approx(0.5 * _value(whole, "lever_arm"))
    assert _value(half, "gate_capacitance") == pytest.approx(_value(whole, "gate_capacitance"))


def _spoilt(how: str, y: FloatArray) -> FloatArray:
    """The same map with a flaw that real ones have."""
    y = y.copy()
    if how == "an aborted last line":
        y[-1, 40:] = np.nan
    elif how == "lost rows":
        y[[5, 6, 44]] = np.nan
    elif how == "a third not measured":
        y[38:] = np.nan
    elif how == "a saturated amplifier":
        y = np.clip(y, -1.05, 1.05)
    elif how == "a glitch":
        y[12, 30] = 500.0
    return y


@pytest.mark.parametrize(
    "how", ["an aborted last line", "lost rows", "a third not measured", "a saturated amplifier", "a glitch"]
)
def test_a_flaw_of_the_map_spoils_no_number(how: str) -> None:
    taken = _take()
    signal = taken.signals[0]
    spoilt = replace(signal, values=1e-10 * _spoilt(how, signal.values * 1e10))
    result = run(replace(taken, signals=(spoilt,)), {})
    assert result.refused is None
    assert _close(result, "lever_arm", DOT.lever_arm)


def test_unequal_steps_of_both_axes_do_no_harm() -> None:
    taken = _take()
    bias, gate = taken.axes
    signal = taken.signals[0]
    rows, columns = np.arange(SCAN.rows) % 7 != 3, np.arange(SCAN.columns) % 11 != 5
    cut = replace(
        taken,
        axes=(replace(bias, values=bias.values[rows]), replace(gate, values=gate.values[columns])),
        signals=(replace(signal, values=signal.values[np.ix_(rows, columns)]),),
    )
    assert _close(run(cut, {}), "lever_arm", DOT.lever_arm)


def test_lines_swept_the_other_way_are_left_out() -> None:
    taken = _take(scan=Scan(rows=112))
    sweeps = tuple(Sweep(110 * k, 110 * (k + 1), "up" if k % 2 == 0 else "down") for k in range(112))
    result = run(replace(taken, sweeps=sweeps), {"direction": Given("down")})
    assert any("56 lines swept the other way" in warning for warning in result.warnings)
    assert _close(result, "lever_arm", DOT.lever_arm)


def test_every_number_is_a_plain_float_and_the_covariance_fits() -> None:
    result = _plain()
    assert all(type(one.value) is float for one in result.quantities)
    assert all(type(one.standard_uncertainty) is float for one in result.quantities)
    assert result.covariance is not None
    assert result.covariance.shape == (len(result.parameters),) * 2
    assert result.settings["edge_used"] == "step"
    assert {curve.name for curve in result.curves} > {"edges", "peak 1 rising", "peak 3 falling"}


def test_the_same_map_gives_the_same_numbers() -> None:
    assert run(_take(), {}).quantities == _plain().quantities


def _map(y: FloatArray, names: tuple[str, str] = ("bias", "P1"), unit: str = "V") -> Samples:
    gate, bias = SCAN.axes()
    axes = (Axis(names[0], unit, bias[: y.shape[0]]), Axis(names[1], "V", gate[: y.shape[1]]))
    return Samples("map", axes, (Signal("current", "A", y),))


@pytest.mark.parametrize(
    ("samples", "given", "fault"),
    [
        (_map(np.ones(SHAPE), ("S1", "P1")), {}, "no bias axis"),
        (_map(np.ones(SHAPE), ("bias", "bias 2")), {}, "more than one bias axis"),
        (_map(np.ones(SHAPE), ("S1", "P1")), {"bias_axis": Given("D1")}, "no bias axis"),
        (_map(np.ones(SHAPE), unit="K"), {}, "in 'K'"),
        (
            Samples("trace", (Axis("P1", "V", np.arange(3.0)),), (Signal("I", "A", np.ones(3)),)),
            {},
            "a trace",
        ),
        (_map(np.ones(SHAPE)), {"bias_scale": Given(0.0)}, "above 0"),
    ],
)
def test_what_is_no_map_over_gate_and_bias_is_named(
    samples: Samples, given: dict[str, Given], fault: str
) -> None:
    with pytest.raises(InputError, match=fault):
        run(samples, given)


def test_the_bias_axis_may_be_given() -> None:
    taken = _take()
    renamed = replace(taken, axes=(replace(taken.axes[0], name="ohmic 3"), taken.axes[1]))
    assert run(renamed, {"bias_axis": Given("ohmic 3")}).quantities == _plain().quantities


def _only_rising(rng: np.random.Generator) -> FloatArray:
    gate, bias = SCAN.axes()
    return np.tanh((gate[None, :] - 0.05 - 4.0 * bias[:, None]) / 1e-3) + 0.05 * rng.normal(size=SHAPE)


REFUSED: dict[str, tuple[Callable[[np.random.Generator], FloatArray], str]] = {
    "dead": (lambda rng: np.zeros(SHAPE), "equal"),
    "overloaded": (lambda rng: np.where(np.eye(*SHAPE) > 0, np.inf, 1.0), "overloaded"),
    "too few rows": (lambda rng: rng.normal(size=(8, 110)), "too few"),
    "hardly measured": (lambda rng: np.where(rng.random(SHAPE) < 0.6, np.nan, 1.0), "missing"),
    "one family of lines": (_only_rising, "falling|cross|places|one family|stand out"),
}


@pytest.mark.parametrize("flaw", REFUSED)
def test_what_shows_no_diamonds_gets_no_number(flaw: str) -> None:
    make, reason = REFUSED[flaw]
    result = run(_map(make(np.random.default_rng(3))), {})
    assert result.refused is not None
    assert any(part in result.refused for part in reason.split("|"))
    assert all(one.value is None and one.why == result.refused for one in result.quantities)


def test_a_current_that_rises_like_a_ramp_is_refused() -> None:
    gate, bias = SCAN.axes()
    apart = np.abs(bias)[:, None] * 3.0 - np.abs(gate[None, :] - 0.05)
    y = np.sign(bias)[:, None] * np.maximum(apart, 0.0) / 0.01
    result = run(_map(y + 0.002 * np.random.default_rng(4).normal(size=y.shape)), {})
    assert result.refused is not None


def _scene(rng: np.random.Generator, bias_slow: bool) -> tuple[Dot, Scan]:
    """A dot and a scan drawn from the stated domain."""
    dot = Dot(
        source=rng.uniform(6.0, 16.0),
        drain=rng.uniform(6.0, 16.0),
        thermal=1e-3 * rng.uniform(0.10, 0.18),
        rate_ratio=float(rng.choice([0.3, 1.0, 3.0])),
    )
    scan = Scan(
        bias_slow=bias_slow,
        conductance=bool(rng.random() < 0.5),
        offset=rng.uniform(-3e-4, 3e-4),
        drift=float(rng.choice([0.0, 0.05, 0.1])) if bias_slow else 0.0,
        jump=float(rng.choice([-12.0, 7.0])) if bias_slow and rng.random() < 0.25 else 0.0,
        noise=float(rng.choice([0.1, 0.05, 0.025])),
        pink=float(rng.choice([0.0, 0.5, 1.0])),
    )
    return dot, scan


NAMES = ("lever_arm", "addition_voltage", "charging_energy", "source_capacitance", "drain_capacitance")


def _calibrate(draws: int, seed: int, bias_slow: bool) -> tuple[dict[str, FloatArray], int]:
    """Scores (value - truth) / u by quantity, and how many maps were refused."""
    rng, refused = np.random.default_rng(seed), 0
    scores: dict[str, list[float]] = {name: [] for name in NAMES}
    for _ in range(draws):
        dot, scan = _scene(rng, bias_slow)
        result = run(scan.take(dot, rng), {})
        refused += result.refused is not None
        truth = (
            dot.lever_arm,
            dot.spacing,
            dot.lever_arm * dot.spacing,
            dot.source * ATTO,
            dot.drain * ATTO,
        )
        for name, true in zip(NAMES, truth, strict=True):
            one = _one(result, name)
            if one.value is not None and one.standard_uncertainty is not None:
                scores[name].append((one.value - true) / one.standard_uncertainty)
    return {name: np.array(found) for name, found in scores.items()}, refused


def test_intervals_cover_the_truth_in_a_small_sample(likely: Likely) -> None:
    scores, refused = _calibrate(6, 6, bias_slow=True)
    assert refused <= 1
    for found in scores.values():
        assert likely(int(np.sum(np.abs(found) < 1.0)), found.size, 0.62, 0.74)
        assert likely(int(np.sum(np.abs(found) < 1.96)), found.size, 0.92, 0.98)
        assert abs(np.mean(found)) < 3.9 / np.sqrt(found.size)


@pytest.mark.slow
@pytest.mark.parametrize(("bias_slow", "draws"), [(True, 180), (False, 100)])
def test_intervals_cover_the_truth_in_many_draws(bias_slow: bool, draws: int, likely: Likely) -> None:
    scores, refused = _calibrate(draws, 7, bias_slow)
    print({name: (found.size, *_rates(found)) for name, found in scores.items()}, "refused", refused)
    assert likely(refused, draws, 0.0, 0.05)
    for name, found in scores.items():
        # Along a slow gate a drift that the map cannot exclude is in the spacing: too wide.
        wide = not bias_slow and name == "addition_voltage"
        assert likely(int(np.sum(np.abs(found) < 1.0)), found.size, 0.62, 1.0 if wide else 0.74)
        assert likely(int(np.sum(np.abs(found) < 1.96)), found.size, 0.92, 1.0 if wide else 0.98)
        assert abs(np.mean(found)) < 3.9 / np.sqrt(found.size)


def _rates(found: FloatArray) -> tuple[float, float, float]:
    inside = [float(np.mean(np.abs(found) < limit)) for limit in (1.0, 1.96)]
    return float(np.mean(found)), inside[0], inside[1]


def _featureless(kind: str, rng: np.random.Generator) -> FloatArray:
    """A map without diamonds, in units of the white noise of a sample."""
    rows, columns = 50, 80
    w = rng.normal(size=(rows, columns))
    size = 10.0 ** rng.uniform(0.5, 2.0)
    gate, bias = np.linspace(-1.0, 1.0, columns)[None, :], np.linspace(-1.0, 1.0, rows)[:, None]
    time = np.arange(rows * columns).reshape(rows, columns)
    if kind == "pink":
        return (
            Scan(rows=rows, columns=columns, noise=1.0, pink=3.0)
            .take(Dot(charges=1, first=9.0), rng)
            .signals[0]
            .values
        )
    if kind == "ramp":
        return w + size * (rng.normal() * gate + rng.normal() * bias)
    if kind == "saddle":
        return w + size * (rng.normal() * gate * bias + rng.normal() * gate**2 + rng.normal() * bias**2)
    if kind == "glitch":
        w[rng.integers(rows), rng.integers(columns)] += 10.0 * size
    if kind == "step":
        return w + size * ((bias if rng.random() < 0.5 else gate) > rng.uniform(-0.8, 0.8))
    if kind == "mains":
        return w + size * np.sin(2.0 * np.pi * (rng.uniform(0.002, 0.3) * time + rng.uniform()))
    if kind == "telegraph":
        return w + size * (np.cumsum(rng.random(time.size) < 0.01) % 2).reshape(time.shape)
    return w


KINDS = ("white", "pink", "ramp", "saddle", "glitch", "step", "mains", "telegraph")


def _answers(kind: str, draws: int, seed: int) -> int:
    rng = np.random.default_rng(seed)
    found = 0
    for _ in range(draws):
        y = 1e-12 * _featureless(kind, rng)
        bias, gate = np.linspace(-3e-3, 3e-3, y.shape[0]), np.linspace(0.0, 0.1, y.shape[1])
        axes = (Axis("bias", "V", bias), Axis("P1", "V", gate))
        unit = str(rng.choice(["A", "S"]))
        found += run(Samples("map", axes, (Signal("signal", unit, y),)), {}).refused is None
    return found


@pytest.mark.parametrize("kind", KINDS)
def test_featureless_maps_hardly_ever_get_an_answer(kind: str, likely: Likely) -> None:
    assert likely(_answers(kind, 2, 8), 2, 0.0, 0.025)


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_featureless_maps_get_an_answer_in_less_than_2_5_percent(kind: str) -> None:
    assert _answers(kind, 100, 9) <= 0.025 * 100
