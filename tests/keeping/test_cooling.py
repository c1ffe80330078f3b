"""Cooldowns, events and wirings are recorded as said, or refused with the reason."""

from __future__ import annotations

import json
from typing import Any

import pytest
from sqlalchemy import text

from registry.errors import InputError, MillikeepError
from registry.keeping.changing import withdraw
from registry.keeping.cooling import begin_cooldown, mark_event, revise_wiring
from registry.keeping.currency import wiring_in_force
from registry.keeping.describing import add_chip, add_device
from registry.keeping.naming import find_cooldown
from registry.records.descriptions import Line

BAD_EVENTS: dict[str, tuple[dict[str, Any], str]] = {
    "unknown kind": ({"event": "earthquake"}, "earthquake"),
    "cycled without kelvin": ({"event": "cycled"}, "kelvin"),
    "charge-jump without site": ({"event": "charge-jump"}, "site"),
    "gate-stress without gate": ({"event": "gate-stress"}, "gate"),
    "note without note": ({"event": "note"}, "note"),
    "bias-cooling without volts": ({"event": "bias-cooling"}, "volts"),
    "below zero kelvin": ({"event": "cycled", "kelvin": -1}, "below zero"),
    "kelvin unknown": ({"event": "cycled", "kelvin": float("nan")}, "finite"),
    "unknown gate": ({"event": "gate-stress", "gate": "X1"}, "X1"),
    "unknown site": ({"event": "charge-jump", "site": "Q9"}, "Q9"),
    "volts of an unknown gate": ({"event": "bias-cooling", "volts": {"X1": 0.1}}, "X1"),
    "ends before it begins": ({"event": "illumination", "at": 5.0, "until": 4.0}, "before it begins"),
    "before the cooldown": ({"event": "power-loss", "at": -1.0}, "before cooldown C1 began"),
    "future": ({"event": "power-loss", "at": 1e5}, "future"),
    "unknown device": ({"event": "power-loss", "device": "K7/D9"}, "D9"),
    "unknown cooldown": ({"event": "power-loss", "cooldown": "C9"}, "C9"),
}


@pytest.mark.parametrize("case", BAD_EVENTS)
def test_an_event_that_cannot_be_is_refused(lab_here: Any, case: str, count: Any) -> None:
    given, word = BAD_EVENTS[case]
    values = {"cooldown": "C1", "at": 1.0, **given}
    for name in ("at", "until"):
        if name in values:
            values[name] = lab_here.day(values[name])
    with pytest.raises(MillikeepError, match=word):
        mark_event(lab_here.registry, values.pop("cooldown"), values.pop("event"), **values)
    assert count(lab_here.registry, "event") == 0


def test_with_two_devices_an_event_at_a_gate_asks_whose(lab: Any) -> None:
    add_device(lab.registry, "K7/D2", gates=lab.gates, at=lab.day(0))
    with pytest.raises(InputError, match="which device") as caught:
        mark_event(lab.registry, "C1", "gate-stress", gate="P1", at=lab.day(1))
    assert "K7/D2" in caught.value.remedy
    assert mark_event(lab.registry, "C1", "gate-stress", gate="P1", device="K7/D2", at=lab.day(1)).new


def test_a_device_elsewhere_is_not_in_this_cooldown(lab: Any) -> None:
    add_chip(lab.registry, "K8")
    add_device(lab.registry, "K8/D1", gates=lab.gates, at=lab.day(0))
    with pytest.raises(InputError, match="not in this cooldown"):
        mark_event(lab.registry, "C1", "power-loss", device="K8/D1", at=lab.day(1))


def test_a_next_cooldown_says_that_it_ends_the_open_one(lab: Any) -> None:
    kept = begin_cooldown(lab.registry, "C2", cryostat="Blue", chips=["K7"], at=lab.day(9))
    assert any("C1" in note for note in kept.notes)
    mark_event(lab.registry, "C2", "warm-up", at=lab.day(12))
    assert begin_cooldown(lab.registry, "C3", cryostat="Blue", chips=["K7"], at=lab.day(13)).notes == ()


BAD_BEGINS: dict[str, tuple[dict[str, Any], str]] = {
    "no chip": ({"chips": []}, "needs a chip"),
    "unknown chip": ({"chips": ["K7", "K9"]}, "K9"),
    "label used": ({"label": "C1"}, "before"),
    "label unfit": ({"label": "C 2"}, "white space"),
    "future": ({"at": 1e5}, "future"),
    "unknown gate": ({"wiring": [Line("L1", ("X",), "s", 1, 0, -1, 1, 1e-3)]}, "'X'"),
    "line twice": (
        {"wiring": [Line("L1", (g,), "s", 1, 0, -1, 1, 1e-3) for g in ("P1", "P2")]},
        "L1 stands twice",
    ),
    "two dc lines": (
        {"wiring": [Line(n, ("P1",), "s", 1, 0, -1, 1, 1e-3) for n in ("L1", "L2")]},
        "two dc lines",
    ),
    "a gate's name for another": (
        {"wiring": [Line("P2", ("P1",), "s", 1, 0, -1, 1, 1e-3)]},
        "name of a gate that it does not serve",
    ),
}


@pytest.mark.parametrize("case", BAD_BEGINS)
def test_a_cooldown_that_cannot_be_is_refused_whole(lab_here: Any, case: str, count: Any) -> None:
    given, word = BAD_BEGINS[case]
    values = {"label": "C2", "cryostat": "Blue", "chips": ["K7"], "at": 9.0, **given}
    values["at"] = lab_here.day(values["at"])
    before = count(lab_here.registry)
    with pytest.raises(MillikeepError) as caught:
        begin_cooldown(lab_here.registry, values.pop("label"), **values)
    assert word in str(caught.value)
    assert count(lab_here.registry) == before


def test_a_gate_may_have_a_dc_and_a_fast_line(lab: Any) -> None:
    lines = [
        Line("L1", ("P1",), "s", 5, 0, -1, 1, 1e-3),
        Line("F1", ("K7/D1:P1",), "awg", 1, 0, -1, 1, 1e-3, kind="fast", attenuation_db=20),
    ]
    assert begin_cooldown(lab.registry, "C2", cryostat="Blue", chips=["K7"], wiring=lines, at=lab.day(9)).new


def wiring_at(lab: Any, day: float) -> float:
    """The divider of line L1 in force."""
    with lab.registry.reading() as connection:
        no = wiring_in_force(connection, find_cooldown(connection, "C1").no, lab.day(day))
        lines = connection.execute(text("SELECT lines FROM wiring WHERE no = :no"), {"no": no}).scalar_one()
    return float(next(line["divider"] for line in json.loads(lines) if line["line"] == "L1"))


def test_a_rewiring_is_in_force_from_its_moment_and_a_correction_throughout(lab: Any) -> None:
    revise_wiring(lab.registry, "C1", lab.lines(7), since=lab.day(5), why="rewired", at=lab.day(6))
    assert [wiring_at(lab, day) for day in (0, 4.9, 5, 6)] == [5, 5, 7, 7]
    revise_wiring(
        lab.registry, "C1", lab.lines(8), since=lab.day(1), correct=True, why="misread", at=lab.day(7)
    )
    assert [wiring_at(lab, day) for day in (0, 4.9, 5, 6)] == [8, 8, 7, 7]
    late = revise_wiring(lab.registry, "C1", lab.lines(9), correct=True, why="misread", at=lab.day(8))
    assert [wiring_at(lab, day) for day in (0, 4.9, 5, 6)] == [8, 8, 9, 9]
    withdraw(lab.registry, late.hex, why="slip", at=lab.day(9))
    assert [wiring_at(lab, day) for day in (0, 4.9, 5, 6)] == [8, 8, 7, 7]


@pytest.mark.parametrize(
    ("given", "word"),
    [
        ({}, "new wiring or a correction"),
        ({"since": -1.0}, "before cooldown C1 began"),
        ({"since": 1e5}, "future"),
        ({"correct": True, "lines": []}, "no line"),
    ],
)
def test_a_wiring_that_cannot_be_is_refused(lab_here: Any, given: dict[str, Any], word: str) -> None:
    values = {"lines": lab_here.lines(), **given}
    if "since" in values:
        values["since"] = lab_here.day(values["since"])
    with pytest.raises(InputError, match=word):
        revise_wiring(lab_here.registry, "C1", values.pop("lines"), why="x", **values)
