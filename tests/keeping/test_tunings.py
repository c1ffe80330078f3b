"""A state is recorded as it was observed; limits are told, plans across them are refused."""

from __future__ import annotations

import json
import math
from typing import Any

import pytest

from registry.errors import InputError, LookupFailed, MillikeepError
from registry.keeping.changing import withdraw
from registry.keeping.cooling import begin_cooldown, mark_event
from registry.keeping.describing import add_chip, add_device, revise_device
from registry.keeping.tunings import record_tuning, revisit_tuning
from registry.records.instants import now_us


def test_gates_left_out_are_not_recorded(lab: Any) -> None:
    volts = lab.volts(lab.state(1, {"P2": 0.25}))
    assert volts["P2"] == 0.25
    assert math.isnan(volts["P1"])
    assert math.isnan(volts["B1"])


def test_context_is_kept_in_si(lab: Any) -> None:
    state = lab.state(
        1,
        purpose="readout",
        sites=["Q2", "Q1", "Q2"],
        occupation={"Q1": 0, "Q2": 3},
        settings={"field": (150, "mT"), "fridge": (20, "mK")},
    )
    row = lab.row("tuning", state)
    assert row["purpose"] == "readout"
    assert json.loads(row["sites"]) == ["Q1", "Q2"]
    assert json.loads(row["occupation"]) == {"Q1": 0, "Q2": 3}
    assert json.loads(row["settings"])["field"] == {"unit": "T", "value": 0.15}


OVER = {
    "above": ({"P1": 1.5}, "P1 at 1.5 V is above its limit of 1 V"),
    "below": ({"B1": -1.25}, "B1 at -1.25 V is below its limit of -1 V"),
    "pair": ({"P1": 0.75, "P2": -0.75}, "P1 minus P2 is 1.5 V"),
}


@pytest.mark.parametrize("case", OVER)
def test_observed_volts_beyond_a_limit_are_recorded_with_a_note(lab_here: Any, case: str) -> None:
    volts, sentence = OVER[case]
    kept = lab_here.record(1, volts)
    assert kept.new
    assert any(sentence in note for note in kept.notes)


@pytest.mark.parametrize("case", OVER)
def test_planned_volts_beyond_a_limit_are_refused(lab_here: Any, case: str, count: Any) -> None:
    volts, sentence = OVER[case]
    with pytest.raises(InputError, match=sentence):
        lab_here.record(1, volts, planned=True)
    assert count(lab_here.registry, "tuning") == 0


def test_volts_at_a_limit_are_inside(lab_here: Any) -> None:
    assert lab_here.record(1, {"P1": 1.0, "P2": -0.2}, planned=True).notes == ()


BAD: dict[str, tuple[dict[str, Any], str]] = {
    "no volts": ({"volts": {}}, "no gate has a voltage"),
    "unknown gate": ({"volts": {"P3": 0.1}}, "P3"),
    "no number": ({"volts": {"P1": math.nan}}, "finite"),
    "a word": ({"volts": {"P1": "0.1"}}, "not a number"),
    "a line at the gate level": ({"volts": {"L1": 0.1}}, "L1"),
    "unknown site": ({"sites": ["Q9"]}, "Q9"),
    "occupation of an unknown site": ({"occupation": {"Q9": 1}}, "Q9"),
    "half a carrier": ({"occupation": {"Q1": 0.5}}, "0.5"),
    "negative carriers": ({"occupation": {"Q1": -1}}, "-1"),
    "unknown unit": ({"settings": {"field": (1, "gauss2")}}, "gauss2"),
    "unit that does not fit": ({"settings": {"source_drain_bias": (1, "K")}}, "give it in V"),
    "setting without number": ({"settings": {"field": (math.inf, "T")}}, "finite"),
    "before the cooldown": ({"at": -1.0, "cooldown": "C1"}, "before cooldown C1"),
    "before any cooldown": ({"at": -1.0}, "no cooldown"),
    "future": ({"at": 1e5}, "future"),
    "unknown cooldown": ({"cooldown": "C9"}, "C9"),
    "unknown parent": ({"parent": "abcdef012345"}, "abcdef012345"),
}


@pytest.mark.parametrize("case", BAD)
def test_a_state_that_cannot_be_is_refused_whole(lab_here: Any, case: str, count: Any) -> None:
    given, word = BAD[case]
    values = {"at": 1.0, "volts": {"P1": 0.5}, **given}
    before = count(lab_here.registry)
    with pytest.raises(MillikeepError) as caught:
        lab_here.record(values.pop("at"), values.pop("volts"), **values)
    assert word in str(caught.value)
    assert count(lab_here.registry) == before


def test_all_faulty_volts_are_told_together(lab_here: Any) -> None:
    with pytest.raises(InputError) as caught:
        lab_here.record(1, {"P3": 0.1, "P1": math.inf, "Q": 1.0})
    assert len(caught.value.faults) == 2


def test_a_state_after_the_warm_up_is_refused(lab: Any) -> None:
    mark_event(lab.registry, "C1", "warm-up", at=lab.day(3))
    assert lab.record(2).new
    with pytest.raises(InputError, match="no cooldown"):
        lab.record(4)
    with pytest.raises(InputError, match="after the end of cooldown C1"):
        lab.record(4, cooldown="C1")


def test_a_state_of_an_earlier_cooldown_can_be_entered_late(lab: Any) -> None:
    begin_cooldown(lab.registry, "C2", cryostat="Blue", chips=["K7"], at=lab.day(9))
    early, late = lab.state(3), lab.state(10)
    assert lab.row("tuning", early)["cooldown_no"] != lab.row("tuning", late)["cooldown_no"]
    with pytest.raises(InputError, match="cooldown C2 began"):
        lab.record(10, cooldown="C1")


def test_a_chip_that_stays_cold_beside_one_that_leaves_is_still_in_its_cooldown(lab: Any) -> None:
    registry = lab.registry
    add_chip(registry, "K8")
    add_device(registry, "K8/D1", gates=lab.gates, at=lab.day(0))
    begin_cooldown(registry, "C2", cryostat="Blue", chips=["K7", "K8"], at=lab.day(5))
    begin_cooldown(registry, "C3", cryostat="Red", chips=["K7"], at=lab.day(7))
    assert record_tuning(registry, "K8/D1", {"P1": 0.1}, at=lab.day(8)).new
    assert mark_event(registry, "C2", "note", note="K8 alone", at=lab.day(8)).new
    with pytest.raises(InputError, match="cooldown C3 began"):
        lab.record(8, cooldown="C2")


def test_volts_at_the_source_are_given_by_line_or_gate(lab: Any) -> None:
    by_line = lab.volts(lab.state(1, {"L1": 2.0, "LS": -1.0}, level="source"))
    assert by_line == {"P1": 2.0, "P2": -1.0, "B1": -1.0}
    by_gate = lab.volts(lab.state(2, {"P1": 2.0, "P2": -1.0}, level="source"))
    assert (by_gate["P1"], by_gate["P2"]) == (2.0, -1.0)


def test_limits_at_the_source_are_checked_behind_the_divider(lab: Any) -> None:
    assert lab.record(1, {"L1": 4.5}, level="source").notes == ()  # 4.5 V / 5 + 0.1 V = 1 V
    assert any("P1 at 1.1 V" in note for note in lab.record(2, {"L1": 5.0}, level="source").notes)


@pytest.mark.parametrize("volts", [{"P2": 1.0, "B1": 2.0}, {"LS": 1.0, "B1": 2.0}])
def test_one_line_cannot_be_at_two_voltages(lab_here: Any, volts: dict[str, float]) -> None:
    with pytest.raises(InputError) as caught:
        lab_here.record(1, volts, level="source")
    assert "1.0" in str(caught.value)
    assert "2.0" in str(caught.value)
    assert lab_here.record(1, dict.fromkeys(volts, 1.0), level="source").new


def test_gates_on_one_line_may_differ_at_the_gate_level_as_observed(lab_here: Any) -> None:
    assert lab_here.record(1, {"P2": 0.1, "B1": 0.2}).new


def test_without_a_line_the_volts_at_the_gate_are_said_to_be_unknown(lab: Any) -> None:
    begin_cooldown(lab.registry, "C2", cryostat="Blue", chips=["K7"], at=lab.day(9))
    kept = lab.record(10, {"P1": 1.0}, level="source")
    assert any("without a line" in note and "P1" in note for note in kept.notes)


def test_the_same_volts_at_another_time_are_another_state(lab_here: Any) -> None:
    assert lab_here.state(1) != lab_here.state(2)
    assert lab_here.state(1) == lab_here.state(1)


def test_a_revisit_is_a_state_of_its_own_with_the_old_one_as_parent(lab: Any) -> None:
    old = lab.state(
        1,
        {"L1": 2.0, "LS": 1.0},
        level="source",
        purpose="readout",
        sites=["Q1"],
        occupation={"Q1": 1},
        settings={"field": (150, "mT")},
    )
    new = revisit_tuning(lab.registry, old, at=lab.day(2)).hex
    before, after = lab.row("tuning", old), lab.row("tuning", new)
    same = ("volts", "level", "purpose", "sites", "occupation", "settings", "device_no")
    assert [before[name] for name in same] == [after[name] for name in same]
    assert after["parent_no"] == before["no"]
    assert after["at"] == lab.day(2)


@pytest.mark.parametrize("days", [0.5, 1.0])
def test_a_revisit_comes_after_its_state(lab_here: Any, days: float) -> None:
    old = lab_here.state(1)
    with pytest.raises(InputError, match="after the state"):
        revisit_tuning(lab_here.registry, old, at=lab_here.day(days))


def test_a_revisit_in_another_cooldown_belongs_to_that_one(lab: Any) -> None:
    old = lab.state(1)
    begin_cooldown(lab.registry, "C2", cryostat="Blue", chips=["K7"], wiring=lab.lines(), at=lab.day(9))
    new = revisit_tuning(lab.registry, old, at=lab.day(10)).hex
    assert lab.row("tuning", new)["cooldown_no"] != lab.row("tuning", old)["cooldown_no"]


def test_a_revisit_of_a_gate_that_is_gone_is_refused(lab_here: Any) -> None:
    old = lab_here.state(1, {"B1": 0.1})
    revise_device(
        lab_here.registry, lab_here.device, gates=lab_here.gates[:2], why="gone", at=lab_here.day(2)
    )
    with pytest.raises(InputError, match="B1"):
        revisit_tuning(lab_here.registry, old, at=lab_here.day(3))


def test_now_is_the_default_time(lab_here: Any) -> None:
    before = now_us()
    kept = record_tuning(lab_here.registry, lab_here.device, {"P1": 0.1})
    assert before <= lab_here.row("tuning", kept.hex)["at"] <= now_us()


def test_a_withdrawn_cooldown_is_not_open(lab: Any) -> None:
    with lab.registry.reading() as connection:
        from registry.keeping.naming import find_cooldown

        cooldown = find_cooldown(connection, "C1").hex
    withdraw(lab.registry, cooldown, why="never happened", at=lab.day(1))
    with pytest.raises(InputError, match="no cooldown"):
        lab.record(2)
    with pytest.raises(LookupFailed):
        lab.record(2, cooldown="C1")


def test_a_parent_of_another_device_is_refused(lab_here: Any) -> None:
    add_device(lab_here.registry, "K7/D2", gates=lab_here.gates, at=lab_here.day(0))
    other = record_tuning(lab_here.registry, "K7/D2", {"P1": 0.1}, at=lab_here.day(1)).hex
    with pytest.raises(InputError, match="K7/D2"):
        lab_here.record(2, parent=other)
