"""A judgement is dated, has a reason, and supersedes those of the same purpose and sites."""

from __future__ import annotations

import json
from typing import Any

import pytest
from sqlalchemy import text

from registry.errors import InputError, MillikeepError
from registry.keeping.changing import withdraw
from registry.keeping.currency import heads
from registry.keeping.describing import add_quantity
from registry.keeping.judging import add_criteria, judge
from registry.keeping.naming import find_record
from registry.records.descriptions import Requirement
from registry.records.instants import now_us


def current(lab: Any, state: str) -> list[str]:
    with lab.registry.reading() as connection:
        no = find_record(connection, state).no
        found = heads(connection, "standing", "x.tuning_no = :no", {"no": no})
        sql = text("SELECT standing FROM standing WHERE no = :no")
        return [connection.execute(sql, {"no": head}).scalar_one() for head in found]


def test_good_then_poor_then_good_in_the_same_words_are_three_judgements(lab: Any) -> None:
    state = lab.state(1)
    said = [
        judge(lab.registry, state, standing, why="looked", at=lab.day(2 + i)).hex
        for i, standing in enumerate(("good", "poor", "good"))
    ]
    assert len(set(said)) == 3
    assert current(lab, state) == ["good"]


def test_purposes_and_sites_are_judged_apart(lab: Any) -> None:
    state = lab.state(1)
    judge(lab.registry, state, "good", why="x", purpose="readout", at=lab.day(2))
    judge(lab.registry, state, "poor", why="x", purpose="shuttling", at=lab.day(3))
    judge(lab.registry, state, "usable", why="x", sites=["Q2", "Q1"], at=lab.day(4))
    assert current(lab, state) == ["good", "poor", "usable"]
    judge(lab.registry, state, "good", why="x", sites=["Q1", "Q2", "Q1"], at=lab.day(5))
    assert current(lab, state) == ["good", "poor", "good"]


def test_a_judgement_at_the_moment_of_its_state_is_taken(lab_here: Any) -> None:
    assert judge(lab_here.registry, lab_here.state(1), "good", why="x", at=lab_here.day(1)).new


BAD: dict[str, tuple[dict[str, Any], str]] = {
    "unknown standing": ({"standing": "fine"}, "fine"),
    "no reason": ({"why": " "}, "no reason"),
    "unknown site": ({"sites": ["Q9"]}, "Q9"),
    "before its state": ({"at": 0.5}, "before the state"),
    "future": ({"at": 1e5}, "future"),
    "no state": ({"tuning": "abcdef0123"}, "abcdef0123"),
}


@pytest.mark.parametrize("case", BAD)
def test_a_judgement_that_cannot_be_is_refused(lab_here: Any, case: str, count: Any) -> None:
    given, word = BAD[case]
    values = {"tuning": lab_here.state(1), "standing": "good", "why": "x", "at": 2.0, **given}
    values["at"] = lab_here.day(values["at"])
    with pytest.raises(MillikeepError) as caught:
        judge(lab_here.registry, values.pop("tuning"), values.pop("standing"), **values)
    assert word in str(caught.value)
    assert count(lab_here.registry, "standing") == 0


def test_limits_are_kept_in_the_unit_of_their_quantity(lab: Any) -> None:
    kept = add_criteria(
        lab.registry,
        "cold",
        [
            Requirement("electron_temperature", at_most=150, unit="mK"),
            Requirement("lever_arm", at_least=0.05),
        ],
        at=lab.day(1),
    )
    stored = json.loads(lab.row("criteria", kept.hex)["requirements"])
    assert [(r.get("at_most"), r.get("at_least"), r["unit"]) for r in stored] == [
        (0.15, None, "K"),
        (None, 0.05, "eV/V"),
    ]


def test_a_newer_list_of_the_same_name_supersedes(lab: Any) -> None:
    def limit(kelvin: float, day: float) -> Any:
        requirement = Requirement("electron_temperature", at_most=kelvin)
        return add_criteria(lab.registry, "cold", [requirement], at=lab.day(day))

    first, second = limit(0.2, 1), limit(0.1, 2)
    assert not limit(0.1, 3).new
    back = limit(0.2, 4)
    assert len({first.hex, second.hex, back.hex}) == 3
    with lab.registry.reading() as connection:
        assert heads(connection, "criteria", "x.name = 'cold'", {}) == [back.no]


def test_withdrawing_the_middle_of_a_chain_does_not_bring_its_oldest_back(lab: Any) -> None:
    def add(limit: float, day: float) -> Any:
        return add_criteria(
            lab.registry, "cold", [Requirement("electron_temperature", at_most=limit)], at=lab.day(day)
        )

    add(0.2, 1)
    middle, newest = add(0.19, 2), add(0.18, 3)
    withdraw(lab.registry, middle.hex, why="mistyped", at=lab.day(4))
    with lab.registry.reading() as connection:
        assert heads(connection, "criteria", "x.name = 'cold'", {}) == [newest.no]


def test_a_quantity_of_the_laboratory_can_be_required(lab: Any) -> None:
    add_quantity(lab.registry, "visibility", unit="percent", valid_until="jump")
    kept = add_criteria(lab.registry, "v", [Requirement("visibility", at_least=90, unit="percent")])
    assert json.loads(lab.row("criteria", kept.hex)["requirements"])[0]["at_least"] == 0.9


@pytest.mark.parametrize(
    ("name", "requirements", "word"),
    [
        ("cold", [], "no requirement"),
        ("co ld", [Requirement("lever_arm", at_most=1)], "white space"),
        ("cold", [Requirement("lever_arms", at_most=1)], "lever_arm"),
        ("cold", [Requirement("lever_arm", at_most=1, unit="V")], "eV/V"),
        ("cold", [Requirement("lever_arm", at_most=1, unit="furlong")], "furlong"),
    ],
)
def test_criteria_that_cannot_be_are_refused(
    lab_here: Any, name: str, requirements: list[Requirement], word: str, count: Any
) -> None:
    with pytest.raises(InputError) as caught:
        add_criteria(lab_here.registry, name, requirements)
    assert word in str(caught.value)
    assert count(lab_here.registry, "criteria") == 0


def test_criteria_of_tomorrow_are_refused(lab_here: Any) -> None:
    with pytest.raises(InputError, match="future"):
        add_criteria(lab_here.registry, "c", [Requirement("lever_arm", at_most=1)], at=now_us() + 10**9)
