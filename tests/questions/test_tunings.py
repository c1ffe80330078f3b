"""Whether the list of states and the page of one state tell what is known."""

from __future__ import annotations

import json

from registry.keeping.changing import withdraw
from registry.questions.tunings import TuningPage, list_tunings, show_tuning
from registry.records.instants import format_instant

from .conftest import Lab, day


def test_the_list_is_newest_first_with_standing_stretch_and_parent(lab: Lab) -> None:
    first = lab.good(1, purpose="readout", sites=["Q1"])
    lab.event("power-loss", 2)
    second = lab.state(3, parent=first)
    rows = [row.to_json() for row in list_tunings(lab.registry, lab.device)]
    assert [(row["id"], row["stretch"], row["standing"], row["parent"]) for row in rows] == [
        (second, 2, None, first),
        (first, 1, "good", None),
    ]
    assert (rows[1]["purpose"], rows[1]["sites"], rows[1]["by"]) == ("readout", ["Q1"], "test person")
    assert rows[0]["at"] == format_instant(day(3))


def test_a_withdrawn_state_stays_in_the_list_and_says_why(lab: Lab) -> None:
    tuning = lab.good(1)
    withdraw(lab.registry, tuning, why="never set", at=day(2))
    (row,) = list_tunings(lab.registry, lab.device)
    assert row.withdrawn
    assert row.standing is None
    assert row.reason is not None
    assert "never set" in row.reason


def test_the_page_shows_volts_at_gate_and_source(lab: Lab) -> None:
    tuning = lab.state(1, {"P1": 0.5})
    gates = {gate.gate: (gate.at_gate, gate.at_source, gate.line) for gate in _page(lab, tuning).gates}
    assert gates == {"P1": (0.5, 2.5, "LP1"), "P2": (None, None, "LP2"), "B1": (None, None, "LB1")}


def test_the_page_shows_values_measurements_judgements_and_freshness(lab: Lab) -> None:
    tuning = lab.good(1, occupation={"Q1": 1}, settings={"bias": (100.0, "uV")})
    measurement = lab.measurement(tuning, 1.1)
    value = lab.value(tuning, 1.1, measurement=measurement)
    page = _page(lab, tuning).to_json()
    assert [point["id"] for point in page["parameters"]] == [value]
    assert [row["id"] for row in page["measurements"]] == [measurement]
    assert [judgement["standing"] for judgement in page["judgements"]] == ["good"]
    assert page["occupation"] == {"Q1": 1}
    assert page["settings"]["bias"]["unit"] == "V"
    assert page["freshness"] == "ready"
    json.dumps(page, allow_nan=False)


def test_both_sides_of_a_conflict_are_on_the_page(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.unseen(tuning, "poor", 2)
    page = _page(lab, tuning)
    assert {judgement.standing for judgement in page.judgements} == {"good", "poor"}
    assert page.decision.standing == "poor"
    assert len(page.decision.conflict) == 2


def _page(lab: Lab, tuning: str) -> TuningPage:
    return show_tuning(lab.registry, tuning)
