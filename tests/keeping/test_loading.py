"""A table of older history is taken whole or not at all, with every fault and its line."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import text

from registry.errors import InputError, LookupFailed
from registry.keeping.auditing import audit
from registry.keeping.describing import add_device
from registry.keeping.loading import load_parameters, load_tunings
from registry.keeping.tunings import record_tuning

TUNINGS = """at,cooldown,purpose,sites,standing,why,P1,P2
2026-01-02T10:00:00Z,C1,readout,Q1 Q2,good,clean peaks,0.5,
2026-01-02T12:00:00+01:00,C1,,,,,-0.25,0.125
"""
HEAD = "cooldown,quantity,subject,value,standard_uncertainty,unit,at,source"
PARAMETERS = f"""{HEAD},method,colour
C1,lever_arm,Q1,0.1,0.008,eV/V,2026-01-02T10:00:00Z,notebook 3,by-eye/1,red
,electron_temperature,,120,5,mK,2026-01-03T10:00:00Z,notebook 3,,
C1,threshold_voltage,P1,0.3,,V,2026-01-04T10:00:00Z,notebook 4,by-eye/2,
"""


def table(folder: Path, content: str) -> Path:
    path = folder / "table.csv"
    path.write_text(content, encoding="utf-8")
    return path


def test_states_and_their_standings_are_loaded(lab: Any, tmp_path: Path, count: Any) -> None:
    told: list[tuple[int, int]] = []
    loaded = load_tunings(
        lab.registry, lab.device, table(tmp_path, TUNINGS), progress=lambda a, b: told.append((a, b))
    )
    assert (loaded.rows, loaded.new, loaded.already, loaded.standings) == (2, 2, 0, 1)
    assert told == [(2, 2)]
    with lab.registry.reading() as connection:
        ids = connection.execute(text("SELECT digest FROM tuning ORDER BY moment")).scalars().all()
    first, second = (lab.volts(bytes(digest).hex()) for digest in ids)
    assert (first["P1"], second["P1"], second["P2"]) == (0.5, -0.25, 0.125)
    assert math.isnan(first["P2"])
    assert count(lab.registry, "standing") == 1
    assert audit(lab.registry).findings == ()


def test_a_second_load_records_nothing(lab: Any, tmp_path: Path, count: Any) -> None:
    path = table(tmp_path, TUNINGS)
    load_tunings(lab.registry, lab.device, path)
    before = count(lab.registry, "journal")
    loaded = load_tunings(lab.registry, lab.device, path)
    assert (loaded.new, loaded.already, loaded.standings) == (0, 2, 0)
    assert count(lab.registry, "journal") == before


def test_a_trial_run_tells_and_records_nothing(lab: Any, tmp_path: Path, count: Any) -> None:
    before = count(lab.registry), count(lab.registry, "journal")
    assert load_tunings(lab.registry, lab.device, table(tmp_path, TUNINGS), dry_run=True).new == 2
    assert load_parameters(lab.registry, lab.device, table(tmp_path, PARAMETERS), dry_run=True).new == 3
    assert (count(lab.registry), count(lab.registry, "journal")) == before


def test_a_loaded_state_is_the_one_recorded_by_hand(lab_here: Any, tmp_path: Path) -> None:
    at = lab_here.day(1 + 10 / 24)
    record_tuning(
        lab_here.registry, lab_here.device, {"P1": 0.5}, at=at, purpose="readout", sites=["Q1", "Q2"]
    )
    assert load_tunings(lab_here.registry, lab_here.device, table(tmp_path, TUNINGS)).already == 1


def test_decimal_commas_are_read_between_semicolons(lab_here: Any, tmp_path: Path) -> None:
    load_tunings(
        lab_here.registry,
        lab_here.device,
        table(tmp_path, "at;cooldown;P1;P2\n2026-01-02T10:00:00Z;C1;0,5;-1,25e-1\n"),
    )
    with lab_here.registry.reading() as connection:
        digest = connection.execute(text("SELECT digest FROM tuning")).scalar_one()
    assert lab_here.volts(bytes(digest).hex())["P2"] == -0.125


def test_crossed_limits_are_told_with_their_line(lab_here: Any, tmp_path: Path) -> None:
    path = table(tmp_path, "at,cooldown,P1\n2026-01-02T10:00:00Z,C1,1.5\n")
    (note,) = load_tunings(lab_here.registry, lab_here.device, path).notes
    assert note.startswith("line 2: ")
    assert "P1 at 1.5 V" in note


ROW = "2026-01-02T10:00:00Z,C1,0.5"
BAD_TUNINGS = {
    "no such gate": ("at,cooldown,P1,P9\n" + ROW + ",1", ["P9"]),
    "no column": ("at,P1\n2026-01-02T10:00:00Z,0.5", ["cooldown"]),
    "times and words": (
        f"at,cooldown,P1\n2026-01-02,C1,0.5\n{ROW}\n2026-01-02T10:00:00Z,C1,half\n"
        "2026-01-02T10:00:00Z,C9,0.5\n2025-01-02T10:00:00Z,C1,0.5\n",
        ["line 2", "line 4", "'half'", "line 5", "C9", "line 6", "before cooldown C1"],
    ),
    "no volts": ("at,cooldown,P1\n2026-01-02T10:00:00Z,C1,", ["line 2", "no gate has a voltage"]),
    "standing without why": (f"at,cooldown,P1,standing\n{ROW},good", ["line 2", "why"]),
    "unknown standing": (f"at,cooldown,P1,standing,why\n{ROW},fine,x", ["line 2", "fine"]),
    "unknown site": (f"at,cooldown,P1,sites\n{ROW},Q9", ["line 2", "Q9"]),
    "future": ("at,cooldown,P1\n2199-01-02T10:00:00Z,C1,0.5", ["line 2", "future"]),
    "cells too many": (f"at,cooldown,P1\n{ROW},7", ["line 2", "4 cells"]),
    "empty": ("", []),
    "header only": ("at,cooldown,P1\n", ["no row"]),
}


@pytest.mark.parametrize("case", BAD_TUNINGS)
def test_every_faulty_row_of_states_is_told_and_nothing_is_recorded(
    lab_here: Any, tmp_path: Path, case: str, count: Any
) -> None:
    content, words = BAD_TUNINGS[case]
    before = count(lab_here.registry)
    with pytest.raises(InputError) as caught:
        load_tunings(lab_here.registry, lab_here.device, table(tmp_path, content))
    for word in words:
        assert word in str(caught.value)
    assert count(lab_here.registry) == before


def test_parameters_are_loaded_in_their_units_with_notes(lab: Any, tmp_path: Path) -> None:
    path = table(tmp_path, PARAMETERS)
    assert load_parameters(lab.registry, lab.device, path).new == 3
    again = load_parameters(lab.registry, lab.device, path)
    assert (again.new, again.already) == (0, 3)
    with lab.registry.reading() as connection:
        rows = connection.execute(text("SELECT * FROM parameter ORDER BY moment")).mappings().all()
    assert [(row["value"], row["standard_uncertainty"], row["unit"]) for row in rows] == [
        (0.1, 0.008, "eV/V"),
        (0.12, 0.005, "K"),
        (0.3, None, "V"),
    ]
    assert json.loads(rows[0]["notes"]) == {"colour": "red"}
    assert (rows[0]["method"], rows[1]["method"], rows[1]["subject"]) == ("by-eye/1", None, None)
    assert rows[1]["cooldown_no"] == rows[0]["cooldown_no"]
    assert audit(lab.registry).findings == ()


def test_a_spread_has_no_offset_of_a_temperature_scale(lab_here: Any, tmp_path: Path) -> None:
    path = table(tmp_path, f"{HEAD}\nC1,electron_temperature,,-272.15,0.5,degC,2026-01-02T10:00:00Z,n\n")
    load_parameters(lab_here.registry, lab_here.device, path)
    with lab_here.registry.reading() as connection:
        row = connection.execute(text("SELECT value, standard_uncertainty FROM parameter")).one()
    assert tuple(row) == pytest.approx((1.0, 0.5), rel=1e-9)


GOOD = "C1,lever_arm,Q1,0.1,0.008,eV/V,2026-01-02T10:00:00Z,n"
BAD_PARAMETERS = {
    "column": ("cooldown,quantity\nC1,lever_arm", ["'value'", "'at'"]),
    "rows": (
        f"{HEAD}\n{GOOD}\nC1,lever_arms,,1,,eV/V,2026-01-02T10:00:00Z,n\nC1,lever_arm,,1,,V,2026-01-02T10:00:00Z,n\n"
        "C1,lever_arm,,1,-1,eV/V,2026-01-02T10:00:00Z,n\nC1,lever_arm,,,,eV/V,2026-01-02T10:00:00Z,n\n"
        "C1,lever_arm,,1,,eV/V,yesterday,n\nC1,lever_arm,,1e999,,eV/V,2026-01-02T10:00:00Z,n",
        [
            "line 3",
            "lever_arms",
            "line 4",
            "eV/V",
            "line 5",
            "negative",
            "line 6",
            "line 7",
            "yesterday",
            "line 8",
        ],
    ),
    "unknown state": (f"{HEAD},tuning\n{GOOD},abcdef0123", ["line 2", "abcdef0123"]),
    "after the warm-up of nothing": (
        f"{HEAD}\n,lever_arm,,1,,eV/V,2025-01-02T10:00:00Z,n",
        ["line 2", "no cooldown"],
    ),
}


@pytest.mark.parametrize("case", BAD_PARAMETERS)
def test_every_faulty_row_of_parameters_is_told_and_nothing_is_recorded(
    lab_here: Any, tmp_path: Path, case: str, count: Any
) -> None:
    content, words = BAD_PARAMETERS[case]
    with pytest.raises(InputError) as caught:
        load_parameters(lab_here.registry, lab_here.device, table(tmp_path, content))
    for word in words:
        assert word in str(caught.value)
    assert count(lab_here.registry, "parameter") == 0


def test_a_parameter_of_another_devices_state_is_refused(lab_here: Any, tmp_path: Path) -> None:
    add_device(lab_here.registry, "K7/D2", gates=lab_here.gates, at=lab_here.day(0))
    other = record_tuning(lab_here.registry, "K7/D2", {"P1": 0.1}, at=lab_here.day(1)).hex
    with pytest.raises(InputError, match="K7/D2"):
        load_parameters(
            lab_here.registry, lab_here.device, table(tmp_path, f"{HEAD},tuning\n{GOOD},{other[:10]}")
        )


def test_an_unknown_device_is_told(lab_here: Any, tmp_path: Path) -> None:
    for load, content in ((load_tunings, TUNINGS), (load_parameters, PARAMETERS)):
        with pytest.raises((InputError, LookupFailed), match="K9"):
            load(lab_here.registry, "K9/D1", table(tmp_path, content))
