from __future__ import annotations

import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.fields import RawField
from registry.reading.grid import looks_like_grid
from registry.reading.limits import DEFAULT_LIMITS
from registry.reading.runs import monotone_runs
from registry.reading.shaping import shape_columns, shape_grid
from registry.samples import FloatArray, Samples

RUNS: dict[str, tuple[list[float], list[tuple[int, int, str]]]] = {
    "up": ([0, 1, 2], [(0, 3, "up")]),
    "down": ([2, 1, 0], [(0, 3, "down")]),
    "to and fro": ([0, 1, 2, 1, 0], [(0, 3, "up"), (3, 5, "down")]),
    "turning point twice": ([0, 1, 2, 2, 1, 0], [(0, 3, "up"), (3, 6, "down")]),
    "waiting at the turn": ([0, 1, 1, 1, 1, 0], [(0, 3, "up"), (3, 6, "down")]),
    "return to the start": ([0, 1, 2, 0, 1, 2, 0, 1, 2], [(0, 3, "up"), (3, 6, "up"), (6, 9, "up")]),
    "return downwards": ([2, 1, 0, 2, 1, 0], [(0, 3, "down"), (3, 6, "down")]),
    "two loops": ([0, 1, 2, 1, 0, 1, 2], [(0, 3, "up"), (3, 5, "down"), (5, 7, "up")]),
    "repeated values": ([0, 0, 1, 1, 2, 2], [(0, 6, "up")]),
    "constant": ([3, 3, 3], [(0, 3, "up")]),
    "one sample": ([3], [(0, 1, "up")]),
}


@pytest.mark.parametrize("case", RUNS)
def test_a_trace_is_cut_where_it_turns(case: str) -> None:
    values, expected = RUNS[case]
    found = monotone_runs(np.array(values, dtype=float))
    assert [(s.start, s.stop, s.direction) for s in found] == expected


def test_runs_cover_every_sample_of_any_axis_and_are_monotone() -> None:
    rng = np.random.default_rng(20310506)
    for _ in range(300):
        values = rng.integers(0, 6, size=int(rng.integers(1, 40))).astype(float)
        runs = monotone_runs(values)
        assert [run.stop for run in runs[:-1]] == [run.start for run in runs[1:]]
        assert (runs[0].start, runs[-1].stop) == (0, values.size)
        for run in runs:
            steps = np.diff(values[run.start : run.stop]) * (1 if run.direction == "up" else -1)
            assert np.all(steps >= 0)


def long_form(slow: FloatArray, fast: FloatArray, signal: FloatArray) -> Samples:
    fields = [
        RawField(name, values, unit, "here")
        for name, values, unit in (("P1", slow, "V"), ("P2", fast, "V"), ("I", signal, "A"))
    ]
    return shape_columns(fields[:2], fields[2:], where="here", limits=DEFAULT_LIMITS)


SLOW, FAST = (a.reshape(-1) for a in np.meshgrid([0.0, 1.0, 2.0], [5.0, 6.0, 7.0, 8.0], indexing="ij"))
TRUTH = 10.0 * SLOW + FAST


def test_rows_in_any_order_land_on_the_same_grid() -> None:
    order = np.random.default_rng(7).permutation(SLOW.size)
    shuffled = long_form(SLOW[order], FAST[order], TRUTH[order])
    assert np.array_equal(shuffled.signal().values, TRUTH.reshape(3, 4))


def test_a_map_swept_downwards_keeps_its_order() -> None:
    samples = long_form(SLOW[::-1], FAST[::-1], TRUTH[::-1])
    assert samples.axes[1].values.tolist() == [8.0, 7.0, 6.0, 5.0]
    assert samples.sweeps == ()
    assert samples.signal().values[0, 0] == 28.0


def test_rows_to_and_fro_keep_the_direction_of_each_row() -> None:
    fast = FAST.reshape(3, 4).copy()
    fast[1] = fast[1, ::-1]
    samples = long_form(SLOW, fast.reshape(-1), 10.0 * SLOW + fast.reshape(-1))
    assert np.array_equal(samples.signal().values, TRUTH.reshape(3, 4))
    assert [(s.start, s.stop, s.direction) for s in samples.sweeps] == [
        (0, 4, "up"),
        (4, 8, "down"),
        (8, 12, "up"),
    ]


def test_a_map_stopped_half_way_has_cells_without_a_value() -> None:
    samples = long_form(SLOW[:10], FAST[:10], TRUTH[:10])
    assert np.isnan(samples.signal().values[2]).tolist() == [False, False, True, True]
    assert samples.notes == ("2 of 12 cells have no value",)


def test_a_second_pass_becomes_a_signal_of_its_own() -> None:
    there, back = FAST.reshape(3, 4), FAST.reshape(3, 4)[:, ::-1]
    fast = np.hstack((there, back)).reshape(-1)
    slow = np.repeat([0.0, 1.0, 2.0], 8)
    samples = long_form(slow, fast, np.arange(24.0))
    assert [signal.name for signal in samples.signals] == ["I", "I (pass 2)"]
    assert samples.signals[1].values[0].tolist() == [7.0, 6.0, 5.0, 4.0]
    assert samples.notes == ("pass 1 of 2 swept 'P2' up", "pass 2 of 2 swept 'P2' down")


def test_rows_that_are_no_grid_are_refused() -> None:
    rng = np.random.default_rng(3)
    with pytest.raises(InputError, match="do not lie on a grid"):
        long_form(rng.normal(size=50), rng.normal(size=50), rng.normal(size=50))


def test_axis_values_that_differ_by_rounding_only_are_one_grid_line() -> None:
    wobble = 1e-9 * np.random.default_rng(4).normal(size=SLOW.size)
    assert long_form(SLOW + wobble, FAST, TRUTH).signal().values.shape == (3, 4)


PATTERNS: dict[str, tuple[list[float], list[float], bool]] = {
    "rows": ([0, 0, 1, 1], [3, 4, 3, 4], True),
    "to and fro": ([0, 0, 1, 1], [3, 4, 4, 3], True),
    "last row incomplete": ([0, 0, 0, 1, 1, 1, 2], [3, 4, 5, 3, 4, 5, 3], True),
    "three samples": ([0, 0, 1], [3, 4, 3], False),
    "one row": ([0, 0, 0, 0], [1, 2, 3, 4], False),
    "both move": ([0, 1, 2, 3], [0, 1, 2, 3], False),
    "rows of other values": ([0, 0, 1, 1], [3, 4, 5, 6], False),
    "rows of other lengths": ([0, 0, 1, 1, 1, 2], [3, 4, 3, 4, 5, 3], False),
    "fast does not move": ([0, 0, 1, 1], [3, 3, 3, 3], False),
}


@pytest.mark.parametrize("case", PATTERNS)
def test_a_grid_pattern_is_told_from_the_two_first_columns(case: str) -> None:
    slow, fast, expected = PATTERNS[case]
    assert looks_like_grid(np.array(slow, float), np.array(fast, float), 1e-6) is expected


def test_an_axis_given_at_every_cell_is_reduced_to_its_dimension() -> None:
    fields = [RawField("P1", SLOW.reshape(3, 4), "V", "x"), RawField("P2", FAST.reshape(3, 4), "V", "x")]
    samples = shape_grid(fields, [RawField("I", TRUTH.reshape(3, 4), "A", "x")], where="x")
    assert [axis.values.tolist() for axis in samples.axes] == [[0.0, 1.0, 2.0], [5.0, 6.0, 7.0, 8.0]]


def test_an_axis_that_is_skewed_is_refused() -> None:
    fields = [RawField("P1", TRUTH.reshape(3, 4), "V", "x"), RawField("P2", FAST.reshape(3, 4), "V", "x")]
    with pytest.raises(InputError, match="'P1' changes along the other axes"):
        shape_grid(fields, [RawField("I", TRUTH.reshape(3, 4), "A", "x")], where="x")


def test_one_axis_under_a_matrix_is_a_trace_of_repeated_sweeps() -> None:
    signal = RawField("I", np.arange(6.0).reshape(2, 3), "A", "x")
    samples = shape_grid([RawField("P1", np.array([0.0, 1.0, 2.0]), "V", "x")], [signal], where="x")
    assert samples.shape == "trace"
    assert [(s.start, s.stop, s.direction) for s in samples.sweeps] == [(0, 3, "up"), (3, 6, "up")]
