"""A newcomer's afternoon, and the weeks after it, through the command line alone."""

from __future__ import annotations

import hashlib
import os
import sqlite3
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

Shell = Callable[..., Any]
CRITERIA = '[[require]]\nquantity = "electron_temperature"\nat_most = 150\nunit = "mK"\nsubject = "D1"\n'


@pytest.fixture
def afternoon(lab: Shell, peaks: Path) -> dict[str, str]:
    """The afternoon on SQLite."""
    return spend_the_afternoon(lab, peaks)


def spend_the_afternoon(lab: Shell, peaks: Path) -> dict[str, str]:
    """Two states, one judged good by criteria on a measured file and one poor by hand."""
    ids: dict[str, str] = {}

    def record(name: str, *words: str) -> None:
        outcome = lab(*words, "--json")
        assert outcome.code == 0, outcome.out
        ids[name] = outcome.document["id"]

    Path("cold.toml").write_text(CRITERIA)
    at = ("--at", "2026-03-02T08:00:00Z")
    record("first", "tuning", "record", "K7/A", "--cooldown", "C1", "--volts", "first.csv", *at)
    admission = lab("admit", peaks, "--tuning", ids["first"], "--kind", "coulomb-peaks", "--json").document
    assert admission["failed"] == []
    ids["measurement"] = admission["measurements"][0]["id"]
    derived = lab(
        *("derive", "coulomb-peaks", ids["measurement"], "--given", "lever_arm=0.1±0.001"),
        *("--subject", "D1", "--json"),
    )
    assert derived.code == 0, derived.err
    (temperature,) = (
        one
        for one in derived.document["quantities"]
        if one["quantity"] == "electron_temperature" and one["subject"] == "D1"
    )
    ids["temperature"] = temperature["id"]
    assert temperature["value"] == pytest.approx(0.1, abs=4 * temperature["standard_uncertainty"])
    at = ("--at", "2026-03-02T10:00:00Z")
    record("criteria", "criteria", "add", "cold", "cold.toml", *at)
    record("good", "judge", ids["first"], "--by", "cold", *at)
    at = ("--at", "2026-03-03T08:00:00Z")
    record("second", "tuning", "record", "K7/A", "--volts", "second.csv", "--from", ids["first"], *at)
    at = ("--at", "2026-03-03T09:00:00Z")
    record("poor", "judge", ids["second"], "poor", "--why", "sensor drifts away", *at)
    record("warm", "cooldown", "mark", "C1", "warm-up", "--at", "2026-04-01T08:00:00Z")
    at = ("--at", "2026-05-01T08:00:00Z")
    record(
        *("next", "cooldown", "begin", "C2", "--cryostat", "Pond", "--chip", "K7", "--wiring", "wiring.csv"),
        *at,
    )
    return ids


def test_last_good_names_the_first_state_and_why_the_newer_one_was_passed_over(
    lab: Shell, afternoon: dict[str, str]
) -> None:
    answer = lab("last-good", "K7/A", "--json")
    assert answer.code == 0
    assert answer.document["state"]["id"] == afternoon["first"]
    assert answer.document["standing"] == "good"
    assert answer.document["by"] == "cold"
    assert answer.document["state"]["volts"] == {"B1": 0.42, "P1": 0.61, "B2": 0.4, "T1": 0.8}
    (passed,) = answer.document["passed_over"]
    assert passed["id"] == afternoon["second"]
    assert "sensor drifts away" in passed["reason"]
    text = " ".join(lab("last-good", "K7/A").out.split())
    assert afternoon["first"][:10] in text
    assert "sensor drifts away" in text
    assert "610.000" in text


def test_the_lineage_of_a_number_ends_at_the_file_as_sha256sum_names_it(
    lab: Shell, afternoon: dict[str, str]
) -> None:
    sha256 = hashlib.sha256(Path("peaks.h5").read_bytes()).hexdigest()
    assert sha256 in lab("lineage", afternoon["temperature"]).out
    document = lab("lineage", afternoon["temperature"], "--json").document
    assert document["files"] == [sha256]
    assert afternoon["measurement"] in [node["id"] for node in document["nodes"]]


def test_the_audit_is_clean_after_the_afternoon(lab: Shell, afternoon: dict[str, str]) -> None:
    report = lab("audit", "--json")
    assert report.code == 0, report.out
    assert report.document["findings"] == []
    assert report.document["files"] >= 1
    assert report.document["journal"] > report.document["records"] > len(afternoon)


def flip_a_byte_of_a_file(registry: Path) -> None:
    stored = max((registry / "files").rglob("??/*"), key=lambda path: path.stat().st_size)
    stored.chmod(0o644)
    data = bytearray(stored.read_bytes())
    data[len(data) // 2] ^= 1
    stored.write_bytes(data)


def change_a_number_behind_the_triggers(registry: Path) -> None:
    with sqlite3.connect(registry / "millikeep.db") as connection:
        triggers = connection.execute("SELECT name FROM sqlite_master WHERE type = 'trigger'").fetchall()
        for (name,) in triggers:
            connection.execute(f'DROP TRIGGER "{name}"')
        changed = connection.execute(
            "UPDATE parameter SET value = value * 1.01 WHERE quantity = 'electron_temperature'"
        )
        assert changed.rowcount > 0
    connection.close()


@pytest.mark.parametrize("damage", [flip_a_byte_of_a_file, change_a_number_behind_the_triggers])
def test_damage_is_found_by_the_audit(
    lab: Shell, afternoon: dict[str, str], damage: Callable[[Path], None]
) -> None:
    damage(Path(os.environ["MILLIKEEP_REGISTRY"]))
    report = lab("audit", "--json")
    assert report.code == 1
    assert all(set(finding) == {"what", "where", "remedy"} for finding in report.document["findings"])
    assert report.document["findings"]
    assert lab("audit").code == 1


def test_after_the_measurement_is_withdrawn_no_good_state_is_left_and_it_says_why(
    lab: Shell, afternoon: dict[str, str]
) -> None:
    withdrawn = lab("withdraw", afternoon["measurement"], "--why", "bias cable was unplugged", "--json")
    assert withdrawn.code == 0
    answer = lab("last-good", "K7/A", "--json")
    assert answer.code == 1
    assert answer.document["state"] is None
    reasons = {one["id"]: one["reason"] for one in answer.document["passed_over"]}
    assert "bias cable was unplugged" in reasons[afternoon["first"]]
    text = lab("last-good", "K7/A")
    assert text.code == 1
    told = " ".join(text.out.split())
    assert "no good state of K7/A is left" in told
    assert "bias cable was unplugged" in told
    assert lab("withdraw", withdrawn.document["id"], "--why", "it was plugged in").code == 0
    assert lab("last-good", "K7/A", "--json").document["state"]["id"] == afternoon["first"]


def test_every_page_fits_into_80_columns(lab: Shell, afternoon: dict[str, str]) -> None:
    for words in (
        ("now", "K7/A"),
        ("last-good", "K7/A"),
        ("compare", "previous", "latest"),
        ("tuning", "list", "K7/A"),
        ("tuning", "show", afternoon["first"]),
        ("lineage", afternoon["good"]),
        ("lineage", afternoon["measurement"], "--down"),
        ("find", "peaks"),
        ("quantities",),
        ("methods",),
        ("events",),
    ):
        page = lab(*words).out
        assert page
        assert [line for line in page.splitlines() if len(line) > 80] == []


def test_the_present_page_tells_of_the_new_cooldown_and_of_what_no_longer_holds(
    lab: Shell, afternoon: dict[str, str]
) -> None:
    page = lab("now", "K7/A").out
    assert "C2 in Pond" in page
    assert "warm-up" in page
    assert "electron_temperature" in page


def test_the_afternoon_gives_the_same_ids_and_answers_on_postgresql(
    lab: Shell, afternoon: dict[str, str], request: pytest.FixtureRequest
) -> None:
    questions = (("last-good", "K7/A"), ("compare", "previous", "latest"), ("tuning", "list", "K7/A"))
    here = [lab(*words, "--json").out for words in questions]
    there_lab = request.getfixturevalue("lab_on_postgresql")
    assert spend_the_afternoon(there_lab, Path("peaks.h5")) == afternoon
    assert [there_lab(*words, "--json").out for words in questions] == here
    assert there_lab("audit").code == 0
