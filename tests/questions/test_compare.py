"""Whether two states are told apart rightly, with what stood around them."""

from __future__ import annotations

import json
import math

import pytest

from registry.errors import InputError
from registry.keeping.changing import withdraw
from registry.keeping.cooling import revise_wiring
from registry.keeping.describing import add_device, revise_device
from registry.keeping.tunings import record_tuning
from registry.questions.compare import compare
from registry.records.descriptions import Gate

from .conftest import Lab, day


def _gate(name: str) -> Gate:
    return Gate(name, "plunger", 0.0, 0.0, -1, 1, 0.01, 0.1)


def _context(lab: Lab, a: str, b: str) -> dict[str, tuple[object, object]]:
    return {item.what: (item.a, item.b) for item in compare(lab.registry, a, b).context}


def test_differences_are_b_minus_a_in_volts_at_the_gate(lab: Lab) -> None:
    a = lab.state(1, {"P1": 0.5, "P2": 0.4})
    b = lab.state(2, {"P1": 2.6, "B1": 1.0}, level="source")
    answer = compare(lab.registry, a, b).to_json()
    assert (answer["a"], answer["b"]) == (a, b)
    assert answer["gates"] == [
        {"gate": "P1", "a": 0.5, "b": 0.52, "difference": 0.52 - 0.5, "repeatability_units": None},
        {"gate": "P2", "a": 0.4, "b": None, "difference": None, "repeatability_units": None},
        {"gate": "B1", "a": None, "b": 0.2, "difference": None, "repeatability_units": None},
    ]
    json.dumps(answer, allow_nan=False)


def test_the_document_begins_with_the_promised_keys_in_their_order(lab: Lab) -> None:
    answer = compare(lab.registry, lab.state(1), lab.state(2)).to_json()
    assert list(answer)[:5] == ["a", "b", "gates", "parameters", "context"]


def test_a_corrected_wiring_corrects_volts_recorded_at_the_source(lab: Lab) -> None:
    a, b = lab.state(1), lab.state(2, {"P1": 2.0}, level="source")
    revise_wiring(lab.registry, "C1", lab.lines(4.0, 0.01), correct=True, why="box was x4", at=day(3))
    gate = compare(lab.registry, a, b).gates[0]
    assert gate.b == pytest.approx(0.51, abs=1e-15)


def test_a_rewiring_between_the_states_shows_wiring_and_dividers(lab: Lab) -> None:
    a = lab.state(1)
    revise_wiring(lab.registry, "C1", lab.lines(10.0), since=day(2), why="new box", at=day(2))
    b = lab.state(3)
    context = _context(lab, a, b)
    assert context["divider of P1"] == (5.0, 10.0)
    assert "wiring in force" in context
    assert "offset of P1" not in context


def test_parameters_stand_side_by_side_with_the_uncertainty_of_their_difference(lab: Lab) -> None:
    a, b = lab.state(1), lab.state(2)
    lab.value(a, 1.1, value=0.10, u=0.003)
    lab.value(b, 2.1, value=0.12, u=0.004)
    (row,) = compare(lab.registry, a, b).to_json()["parameters"]
    assert (row["quantity"], row["a"], row["b"], row["unit"]) == ("electron_temperature", 0.10, 0.12, "K")
    assert row["difference"] == 0.12 - 0.10
    assert row["standard_uncertainty"] == pytest.approx(0.005, rel=1e-12)
    assert row["e_n"] == pytest.approx(2.0, rel=1e-9)


def test_a_shared_lever_arm_cancels_in_the_difference(lab: Lab) -> None:
    a, b = lab.state(1), lab.state(2)
    lab.value(a, 1.1, value=0.10, u=0.005, shared={"ab": 0.004})
    lab.value(b, 2.1, value=0.12, u=0.005, shared={"ab": 0.004})
    (row,) = compare(lab.registry, a, b).parameters
    assert row.difference.standard_uncertainty == pytest.approx(math.sqrt(2 * 0.003**2), rel=1e-9)


def test_of_opposite_sign_a_shared_part_counts_twice(lab: Lab) -> None:
    a, b = lab.state(1), lab.state(2)
    lab.value(a, 1.1, u=0.005, shared={"ab": 0.004})
    lab.value(b, 2.1, u=0.005, shared={"ab": -0.004})
    (row,) = compare(lab.registry, a, b).parameters
    assert row.difference.standard_uncertainty == pytest.approx(math.sqrt(2 * 0.003**2 + 0.008**2), rel=1e-9)


@pytest.mark.parametrize("more", [{"bound": "upper"}, {}])
def test_a_bound_or_a_missing_uncertainty_gives_no_false_difference(
    lab: Lab, more: dict[str, object]
) -> None:
    a, b = lab.state(1), lab.state(2)
    lab.value(a, 1.1)
    lab.value(b, 2.1, u=None, more=more)
    (row,) = compare(lab.registry, a, b).parameters
    assert row.difference.standard_uncertainty is None
    assert (row.difference.value is None) == bool(more)


def test_a_value_of_one_state_only_is_shown_with_the_other_side_empty(lab: Lab) -> None:
    a, b = lab.state(1), lab.state(2)
    lab.value(b, 2.1)
    (row,) = compare(lab.registry, a, b).to_json()["parameters"]
    assert row["a"] is None
    assert row["b"] == 0.1
    assert row["difference"] is None


def test_a_tainted_value_is_left_out(lab: Lab) -> None:
    a, b = lab.state(1), lab.state(2)
    value = lab.value(a, 1.1)
    withdraw(lab.registry, value, why="spike", at=day(3))
    assert compare(lab.registry, a, b).parameters == ()


def test_context_names_settings_occupation_purpose_sheet_events_and_method(lab: Lab) -> None:
    a = lab.state(1, purpose="readout", occupation={"Q1": 1}, settings={"bias": (1e-4, "V")})
    lab.event("charge-jump", 1.5, site="Q1", note="after the fridge door")
    gates = [_gate(name) for name in ("P1", "P2", "B1", "B2")]
    revise_device(lab.registry, lab.device, gates=gates, why="second barrier bonded", at=day(1.6))
    b = lab.state(2, purpose="exchange", occupation={"Q1": 2}, settings={"bias": (2e-4, "V")})
    lab.value(a, 1.1, version="1")
    lab.value(b, 2.1, version="2")
    context = _context(lab, a, b)
    assert context["purpose"] == ("readout", "exchange")
    assert context["Q1"] == (1, 2)
    assert context["bias"] == ({"unit": "V", "value": 1e-4}, {"unit": "V", "value": 2e-4})
    assert "gate sheet" in context
    assert "method of electron_temperature" in context
    (event,) = [words for words in context if words.startswith("charge-jump")]
    assert "of Q1" in event
    assert "after the fridge door" in event


def test_states_of_two_cooldowns_show_cooldown_and_stretch(lab: Lab) -> None:
    a = lab.state(1)
    lab.begin("C2", 10)
    b = lab.state(11)
    context = _context(lab, a, b)
    assert context["cooldown"] == ("C1", "C2")
    assert context["cold stretch"][1] == "stretch 2, since begin of cooldown C2 at 2026-01-11T00:00:00Z"


def test_a_state_compared_with_itself_differs_in_nothing(lab: Lab) -> None:
    tuning = lab.state(1, purpose="readout")
    lab.value(tuning, 1.1)
    answer = compare(lab.registry, tuning, tuning)
    assert answer.context == ()
    assert [gate.difference for gate in answer.gates] == [0.0, 0.0, None]
    assert answer.parameters[0].difference.standard_uncertainty == 0.0


def test_latest_and_previous_are_understood(lab: Lab) -> None:
    a, b = lab.state(1), lab.state(2)
    answer = compare(lab.registry, "K7/D1:previous", "K7/D1:latest")
    assert (answer.a.hex, answer.b.hex) == (a, b)


def test_states_of_two_devices_are_refused(lab: Lab) -> None:
    add_device(lab.registry, "K7/D2", gates=[_gate("P1")], at=day(0))
    other = record_tuning(lab.registry, "K7/D2", {"P1": 0.1}, at=day(1)).hex
    with pytest.raises(InputError, match="K7/D2"):
        compare(lab.registry, lab.state(1), other)
