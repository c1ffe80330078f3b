"""Chips, devices, findings and quantities are recorded as said, or refused with the reason."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import pytest
from sqlalchemy import text

from registry.errors import InputError, LookupFailed, MillikeepError
from registry.keeping.changing import withdraw
from registry.keeping.currency import gate_sheet_in_force
from registry.keeping.describing import add_chip, add_device, add_quantity, mark_gate, revise_device
from registry.keeping.handle import Registry
from registry.keeping.naming import amended, find_chip, find_device
from registry.records.descriptions import Gate, PairLimit, Site
from registry.records.instants import now_us

WHITE = Gate("P1", "plunger", 0, 0, -1, 1, 0.01, 0.1)


def test_identity_of_a_chip_is_wafer_lot_die_and_label(registry_on: Registry) -> None:
    first = add_chip(registry_on, "K7", wafer="W1", lot="L", die="3", material="SiGe", note="clean")
    assert add_chip(registry_on, "K7", wafer="W1", lot="L", die="3").hex == first.hex
    others = {add_chip(registry_on, "K7", wafer="W2").hex, add_chip(registry_on, "K7").hex}
    assert len({first.hex, *others}) == 3
    with registry_on.reading() as connection:
        assert amended(connection, first.no, "material") == "SiGe"


def test_a_chip_with_another_material_is_refused_and_names_amend(registry_on: Registry, count: Any) -> None:
    add_chip(registry_on, "K7", material="SiGe")
    before = count(registry_on)
    with pytest.raises(InputError, match="SiGe") as caught:
        add_chip(registry_on, "K7", material="GaAs", note="new")
    assert "millikeep amend" in caught.value.remedy
    assert count(registry_on) == before


def site(gate: str) -> Site:
    return Site("Q1", "dot", (gate,))


BAD_DEVICES: dict[str, tuple[Callable[[Registry], object], str]] = {
    "no chip": (lambda r: add_device(r, "D1", gates=[WHITE]), "which chip"),
    "unknown chip": (lambda r: add_device(r, "K9/D1", gates=[WHITE]), "K9"),
    "no name": (lambda r: add_device(r, "K7/", gates=[WHITE]), "name"),
    "no gate": (lambda r: add_device(r, "K7/D2", gates=[]), "no gate"),
    "gate twice": (lambda r: add_device(r, "K7/D2", gates=[WHITE, WHITE]), "P1 stands twice"),
    "site twice": (
        lambda r: add_device(r, "K7/D2", gates=[WHITE], sites=[site("P1")] * 2),
        "Q1 stands twice",
    ),
    "site of unknown gate": (lambda r: add_device(r, "K7/D2", gates=[WHITE], sites=[site("P9")]), "P9"),
    "pair of unknown gate": (
        lambda r: add_device(r, "K7/D2", gates=[WHITE], pairs=[PairLimit("P1", "P9", -1, 1)]),
        "P9",
    ),
    "future": (lambda r: add_device(r, "K7/D2", gates=[WHITE], at=now_us() + 10**9), "future"),
    "another sheet": (lambda r: add_device(r, "K7/D1", gates=[WHITE]), "another gate sheet"),
}


@pytest.mark.parametrize("case", BAD_DEVICES)
def test_a_device_that_cannot_be_is_refused_whole(lab_here: Any, case: str, count: Any) -> None:
    call, word = BAD_DEVICES[case]
    before = count(lab_here.registry)
    with pytest.raises(MillikeepError, match=word):
        call(lab_here.registry)
    assert count(lab_here.registry) == before


def test_all_faults_of_a_gate_sheet_are_told_together(lab_here: Any) -> None:
    with pytest.raises(InputError) as caught:
        add_device(lab_here.registry, "K7/D2", gates=[WHITE, WHITE], sites=[site("P8"), site("P9")])
    assert len(caught.value.faults) == 3


def test_a_revision_keeps_what_is_not_given_and_is_in_force(lab: Any) -> None:
    revise_device(lab.registry, lab.device, sites=[site("P2")], why="renamed", at=lab.day(1))
    with lab.registry.reading() as connection:
        device = find_device(connection, lab.device).no
        no = gate_sheet_in_force(connection, device)
        row = connection.execute(text("SELECT * FROM gate_sheet WHERE no = :no"), {"no": no}).mappings().one()
    assert [gate["gate"] for gate in json.loads(row["gates"])] == ["P1", "P2", "B1"]
    assert [s["gates"] for s in json.loads(row["sites"])] == [["P2"]]
    assert row["why"] == "renamed"


def test_a_revision_of_nothing_is_refused(lab_here: Any) -> None:
    with pytest.raises(InputError, match="nothing to revise"):
        revise_device(lab_here.registry, lab_here.device, why="x")


def test_a_withdrawn_revision_gives_back_the_earlier_sheet(lab: Any) -> None:
    with lab.registry.reading() as connection:
        device = find_device(connection, lab.device).no
        first = gate_sheet_in_force(connection, device)
    revised = revise_device(lab.registry, lab.device, sites=[], why="x", at=lab.day(1))
    withdraw(lab.registry, revised.hex, why="slip", at=lab.day(2))
    with lab.registry.reading() as connection:
        assert gate_sheet_in_force(connection, device) == first


BAD_MARKS: dict[str, tuple[Callable[[Any], object], str]] = {
    "unknown finding": (lambda lab: mark_gate(lab.registry, lab.device, "P1", "tired"), "tired"),
    "unknown gate": (lambda lab: mark_gate(lab.registry, lab.device, "P3", "ok"), "P3"),
    "short to nothing": (lambda lab: mark_gate(lab.registry, lab.device, "P1", "shorted"), "other gate"),
    "short to itself": (
        lambda lab: mark_gate(lab.registry, lab.device, "P1", "shorted", to_gate="P1"),
        "itself",
    ),
    "short to unknown": (
        lambda lab: mark_gate(lab.registry, lab.device, "P1", "shorted", to_gate="X"),
        "'X'",
    ),
    "ok to another": (lambda lab: mark_gate(lab.registry, lab.device, "P1", "ok", to_gate="P2"), "short"),
    "leak without volts": (lambda lab: mark_gate(lab.registry, lab.device, "P1", "leaky"), "voltage"),
    "leak above nan": (
        lambda lab: mark_gate(lab.registry, lab.device, "P1", "leaky", above_v=float("nan")),
        "finite",
    ),
    "ok above volts": (lambda lab: mark_gate(lab.registry, lab.device, "P1", "ok", above_v=1), "leak"),
    "future": (lambda lab: mark_gate(lab.registry, lab.device, "P1", "ok", at=now_us() + 10**9), "future"),
}


@pytest.mark.parametrize("case", BAD_MARKS)
def test_a_finding_that_cannot_be_is_refused(lab_here: Any, case: str, count: Any) -> None:
    call, word = BAD_MARKS[case]
    with pytest.raises(InputError, match=word):
        call(lab_here)
    assert count(lab_here.registry, "gate_health") == 0


def test_an_unknown_gate_is_answered_with_the_nearest(lab_here: Any) -> None:
    with pytest.raises(InputError) as caught:
        mark_gate(lab_here.registry, lab_here.device, "P3", "ok")
    assert "P1" in caught.value.remedy


def test_a_quantity_of_the_laboratory_is_added_once(registry_on: Registry) -> None:
    first = add_quantity(registry_on, "flux", unit="mV", valid_until="device", meaning="m")
    assert not add_quantity(registry_on, "flux", unit="V", valid_until="device", meaning="m").new
    with pytest.raises(InputError, match="another unit"):
        add_quantity(registry_on, "flux", unit="A", valid_until="device")
    assert first.new


@pytest.mark.parametrize(
    ("name", "unit", "until", "word"),
    [
        ("lever_arm", "eV/V", "device", "controlled list"),
        ("x", "furlong", "device", "furlong"),
        ("x", "V", "tomorrow", "tomorrow"),
        ("a b", "V", "device", "name"),
        ("Valley-Splitting", "eV", "device", "small letters"),
    ],
)
def test_a_quantity_that_cannot_be_is_refused(
    registry_here: Registry, name: str, unit: str, until: str, word: str
) -> None:
    with pytest.raises(InputError) as caught:
        add_quantity(registry_here, name, unit=unit, valid_until=until)
    assert word in str(caught.value)


def test_a_device_of_a_withdrawn_chip_is_not_found(lab: Any) -> None:
    with lab.registry.reading() as connection:
        chip = find_chip(connection, "K7")
    withdraw(lab.registry, chip.hex, why="mixed up", at=lab.day(1))
    with lab.registry.reading() as connection, pytest.raises(LookupFailed):
        find_device(connection, "K7/D1")
