"""Whether values come with what is needed to judge them, each result once."""

from __future__ import annotations

import pytest

from registry.keeping.changing import withdraw
from registry.keeping.naming import find_device, find_record
from registry.questions.devices import find_body
from registry.questions.parameters import points, values_of_states, version_order
from registry.questions.stretches import history_of

from .conftest import Lab, day


def test_points_come_by_time_with_stretch_cooldown_state_and_code(lab: Lab) -> None:
    first, second = lab.state(1), lab.state(3)
    late = lab.value(second, 3.1, value=0.12)
    lab.event("power-loss", 2)
    early = lab.value(first, 1.1)
    found = points(lab.registry, lab.device, "electron_temperature")
    assert [(p.id, p.stretch, p.tuning) for p in found] == [(early, 1, first), (late, 2, second)]
    assert {(p.device, p.cooldown, p.method, p.version, p.unit) for p in found} == {
        ("K7/D1", "C1", "coulomb-peaks", "1", "K")
    }


def test_a_tainted_point_is_left_out_unless_asked_for_and_then_marked(lab: Lab) -> None:
    value = lab.value(lab.state(1), 1.1)
    withdraw(lab.registry, value, why="spike", at=day(2))
    assert points(lab.registry, lab.device) == ()
    (point,) = points(lab.registry, lab.device, with_tainted=True)
    assert point.tainted
    (before,) = points(lab.registry, lab.device, as_of=day(1.5))
    assert not before.tainted


def test_the_same_analysis_run_on_two_computers_is_one_point(lab: Lab) -> None:
    tuning = lab.state(1)
    measurement = lab.measurement(tuning, 1.1)
    ids = [lab.value(tuning, 1.1, value=0.1 + n * 1e-17 * 3, measurement=measurement) for n in (0, 1)]
    assert len(set(ids)) == 2
    assert [point.id for point in points(lab.registry, lab.device)] == [min(ids)]


def test_another_version_is_another_point_and_the_present_value_is_the_newer_ones(lab: Lab) -> None:
    tuning = lab.state(1)
    measurement = lab.measurement(tuning, 1.1)
    ids = {
        version: lab.value(tuning, 1.1, measurement=measurement, version=version) for version in ("9", "10")
    }
    assert len(points(lab.registry, lab.device)) == 2
    with lab.registry.reading() as connection:
        history = history_of(connection, find_body(connection, lab.device))
        state = find_record(connection, tuning)
        (value,) = values_of_states(connection, history, [state.no])[tuning]
    assert value.id == ids["10"]


def test_a_value_from_elsewhere_is_split_into_method_and_version(lab: Lab) -> None:
    with lab.registry.writing() as writer:
        writer.keep(
            "parameter",
            links={"device": find_device(writer.connection, lab.device).no},
            quantity="g_factor",
            value=1.99,
            unit="1",
            method="spin resonance/2024b",
            source="notebook 7",
            at=day(1),
            moment=day(1),
        )
    (point,) = points(lab.registry, lab.device, "g_factor")
    assert (point.method, point.version, point.source) == ("spin resonance", "2024b", "notebook 7")
    assert point.standard_uncertainty is None
    assert point.tuning is None


def test_subject_and_quantity_choose(lab: Lab) -> None:
    tuning = lab.state(1)
    lab.value(tuning, 1.1, "peak_position", more={"subject": "peak 1"})
    lab.value(tuning, 1.1, "peak_position", more={"subject": "peak 2"})
    assert len(points(lab.registry, lab.device, "peak_position")) == 2
    assert [p.subject for p in points(lab.registry, lab.device, "peak_position", subject="peak 2")] == [
        "peak 2"
    ]
    assert points(lab.registry, lab.device, "lever_arm") == ()


@pytest.mark.parametrize(
    ("smaller", "larger"), [("9", "10"), ("1.2", "1.10"), (None, "1"), ("1", "1b"), ("a", "b")]
)
def test_versions_are_ordered_by_their_numbers(smaller: str | None, larger: str) -> None:
    assert version_order(smaller) < version_order(larger)
