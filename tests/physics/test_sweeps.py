from __future__ import annotations

import numpy as np
import pytest

from registry.errors import InputError
from registry.physics.result import Given, Refusal
from registry.physics.sweeps import pick_directions, pick_trace
from registry.samples import Axis, FloatArray, Level, Samples, Signal, Sweep

X = np.linspace(0.0, 1.0, 11)


def _samples(*sweeps: tuple[FloatArray, FloatArray], level: Level = "gate") -> Samples:
    x = np.concatenate([sweep[0] for sweep in sweeps])
    y = np.concatenate([sweep[1] for sweep in sweeps])
    stops = np.cumsum([sweep[0].size for sweep in sweeps])
    runs = tuple(
        Sweep(int(stop) - one.size, int(stop), "up" if one.size < 2 or one[-1] > one[0] else "down")
        for (one, _), stop in zip(sweeps, stops, strict=True)
    )
    signals = (Signal("current", "A", y), Signal("phase", "1", -y))
    return Samples("trace", (Axis("P1", "V", x, level),), signals, runs)


def test_the_first_sweep_tells_the_direction() -> None:
    trace = pick_trace(_samples((X[::-1], X), (X, 2.0 * X)), {})
    assert trace.direction == "down"
    assert trace.conditions() == {"direction": "down"}
    np.testing.assert_array_equal(trace.x, X[::-1])


def test_a_given_direction_is_taken() -> None:
    trace = pick_trace(_samples((X[::-1], X), (X, 2.0 * X)), {"direction": Given("up")})
    np.testing.assert_array_equal(trace.y, 2.0 * X)


def test_repeats_on_one_grid_are_averaged_sample_by_sample() -> None:
    trace = pick_trace(_samples((X, X), (X[::-1], X), (X + 1e-4, 3.0 * X)), {})
    np.testing.assert_allclose(trace.y, 2.0 * X)
    assert (trace.repeats, trace.warnings) == (2, ())


def test_a_repeat_on_another_grid_is_left_out_and_told() -> None:
    trace = pick_trace(_samples((X, X), (X[:-1], 3.0 * X[:-1])), {})
    np.testing.assert_array_equal(trace.y, X)
    assert "another grid" in trace.warnings[0]


def test_both_directions_come_first_sweep_first() -> None:
    both = pick_directions(_samples((X[::-1], X), (X, X)), {})
    assert [trace.direction for trace in both] == ["down", "up"]


def test_an_unusable_second_direction_is_told_on_the_first() -> None:
    both = pick_directions(_samples((X, X), (X[::-1], np.full(11, np.nan))), {})
    assert [trace.direction for trace in both] == ["up"]
    assert "sweep down was left out" in both[0].warnings[0]


def test_a_named_signal_is_taken() -> None:
    trace = pick_trace(_samples((X, X)), {"signal": Given("phase")})
    assert (trace.signal, trace.signal_unit) == ("phase", "1")
    np.testing.assert_array_equal(trace.y, -X)


def test_a_trace_without_told_sweeps_is_one_sweep() -> None:
    samples = Samples("trace", (Axis("P1", "V", X[::-1], "gate"),), (Signal("i", "A", X),))
    assert pick_trace(samples, {}).direction == "down"


def test_volts_at_the_source_are_a_series_of_their_own() -> None:
    trace = pick_trace(_samples((X, X), level="source"), {})
    assert trace.conditions() == {"direction": "up", "level": "source"}


def test_a_few_lost_samples_are_left_out() -> None:
    x = np.linspace(0.0, 1.0, 50)
    y = np.where(np.arange(50) == 7, np.nan, x)
    trace = pick_trace(_samples((x, y)), {})
    assert trace.x.size == 49
    assert "1 missing" in trace.warnings[0]


def test_samples_at_one_voltage_are_averaged() -> None:
    x = np.insert(X, 5, X[5])
    trace = pick_trace(_samples((x, np.arange(12.0))), {})
    np.testing.assert_array_equal(trace.x, X)
    assert trace.y[5] == 5.5


BAD: dict[str, tuple[FloatArray, FloatArray, str]] = {
    "infinite": (X, np.where(X == 0.5, np.inf, X), "overloaded"),
    "all missing": (X, np.full(11, np.nan), "missing"),
    "axis missing": (np.full(11, np.nan), X, "missing"),
    "turning back": (np.array([0.0, 1.0, 0.5, 2.0]), X[:4], "turns back"),
    "stuck axis": (np.ones(11), X, "repeat the voltage"),
    "empty": (X[:0], X[:0], "too few"),
    "one sample": (X[:1], X[:1], "too few"),
}


@pytest.mark.parametrize("flaw", BAD)
def test_samples_that_cannot_be_trusted_are_refused(flaw: str) -> None:
    x, y, reason = BAD[flaw]
    samples = Samples(
        "trace", (Axis("P1", "V", x, "gate"),), (Signal("i", "A", y),), (Sweep(0, x.size, "up"),)
    )
    with pytest.raises(Refusal, match=reason):
        pick_trace(samples, {})


@pytest.mark.parametrize(
    ("samples", "given", "fault"),
    [
        (Samples("map", (Axis("a", "V", X), Axis("b", "V", X)), (Signal("i", "A", X),)), {}, "trace"),
        (Samples("series", (Axis("time", "s", X),), (Signal("i", "A", X),)), {}, "trace"),
        (Samples("trace", (Axis("field", "T", X),), (Signal("i", "A", X),)), {}, "gate voltage"),
        (_samples((X, X)), {"signal": Given("charge")}, "no signal 'charge'"),
        (_samples((X, X)), {"direction": Given("down")}, "no sweep down"),
    ],
)
def test_samples_of_another_kind_are_an_input_error(
    samples: Samples, given: dict[str, Given], fault: str
) -> None:
    with pytest.raises(InputError, match=fault):
        pick_trace(samples, given)
