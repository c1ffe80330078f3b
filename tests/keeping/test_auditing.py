"""An audit is clean on what was recorded, and finds whatever was changed afterwards."""

from __future__ import annotations

import random
import re
import shutil
import sqlite3
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import text

from registry.errors import DamageError, MillikeepError
from registry.keeping import head
from registry.keeping.auditing import AuditReport, audit
from registry.keeping.handle import Registry
from registry.keeping.opening import create, open_registry
from registry.keeping.writing import Writer

NOON = 1_772_452_800_000_000
GATES = '[{"gate":"P1","role":"plunger"},{"gate":"B1","role":"barrier"}]'


def keep(writer: Writer, kind: str, links: dict[str, int | list[int]] | None = None, **values: Any) -> int:
    return writer.keep(kind, links=links, **values).no


def recorded(registry: Registry, times: int = 1) -> dict[str, int]:
    """A small history with a row of nearly every kind and two files; kind -> number of the last."""
    nos: dict[str, int] = {}
    with registry.writing() as writer:
        for run in range(times):
            nos |= _history(registry, writer, run)
    return nos


def _history(registry: Registry, writer: Writer, run: int) -> dict[str, int]:
    trace = registry.files.put_bytes(f"trace {run}\n1 2\n".encode() * 9)
    at = NOON + run
    no: dict[str, int] = {}
    no["chip"] = keep(writer, "chip", label=f"K{run}", wafer="W3")
    no["device"] = keep(writer, "device", {"chip": no["chip"]}, name="D1")
    sheet = {"gates": [{"gate": "P1"}, {"gate": "B1"}], "sites": [], "pairs": []}
    first = keep(writer, "gate_sheet", {"device": no["device"]}, at=at, why="first", **sheet)
    no["gate_sheet"] = keep(
        writer, "gate_sheet", {"device": no["device"], "after": [first]}, at=at + 1, **sheet
    )
    no["cooldown"] = keep(writer, "cooldown", {"chips": [no["chip"]]}, label=f"C{run}", cryostat="F", at=at)
    no["event"] = keep(writer, "event", {"cooldown": no["cooldown"]}, event="note", at=at, kelvin=0.013)
    no["raw_file"] = keep(writer, "raw_file", sha256=trace.sha256, size=trace.size)
    state = {"device": no["device"], "cooldown": no["cooldown"], "gate_sheet": no["gate_sheet"]}
    parent = keep(writer, "tuning", {**state}, level="gate", volts=[0.1, float("nan")], at=at, moment=at)
    no["tuning"] = keep(
        writer,
        "tuning",
        {**state, "parent": parent},
        level="gate",
        volts=[0.25, -1.5],
        settings={"bias": {"value": 1e-3, "unit": "V"}},
        occupation={"S1": 1},
        moment=at + 5,
    )
    no["measurement"] = keep(
        writer,
        "measurement",
        {"tuning": no["tuning"], "raw_file": no["raw_file"]},
        shape="trace",
        axes=[{"name": "P1", "unit": "V", "n": 9}],
        signals=[{"name": "I", "unit": "A"}],
        at=at,
        moment=at,
        file_name="trace.dat",
    )
    no["analysis"] = keep(
        writer,
        "analysis",
        {"measurements": [no["measurement"]]},
        method="coulomb-peaks",
        version="1",
        source_digest="ab" * 32,
        settings={"model": "auto"},
        warnings=["few points"],
    )
    no["parameter"] = keep(
        writer,
        "parameter",
        {"analysis": no["analysis"], "device": no["device"], "tuning": no["tuning"]},
        quantity="electron_temperature",
        value=0.1,
        standard_uncertainty=2e-3,
        unit="K",
        moment=at,
    )
    no["standing"] = keep(
        writer,
        "standing",
        {"tuning": no["tuning"], "evidence": [no["parameter"]], "device": no["device"]},
        standing="good",
        why="clean peaks",
        at=at,
        tuning_moment=at + 5,
    )
    return no


def withdraw(registry: Registry, target: int, at: int = NOON) -> int:
    with registry.writing() as writer:
        kept = writer.keep("withdrawal", links={"target": target}, why="wrong wire", at=at)
        writer.taint(kept.no, target)
        return kept.no


def tamper(registry: Registry, *statements: str) -> None:
    """Change rows as somebody would who owns the database, its guards switched off."""
    with registry.side.writing.begin() as connection:
        if registry.engine_name == "sqlite":
            connection.execute(text("PRAGMA defer_foreign_keys=ON"))
            for name in (
                connection.execute(text("SELECT name FROM sqlite_schema WHERE type='trigger'"))
                .scalars()
                .all()
            ):
                connection.execute(text(f'DROP TRIGGER "{name}"'))
        else:
            tables = connection.execute(
                text("SELECT tablename FROM pg_tables WHERE schemaname = current_schema()")
            ).scalars()
            for table in tables.all():
                connection.execute(text(f'ALTER TABLE "{table}" DISABLE TRIGGER ALL'))
        for statement in statements:
            connection.execute(text(statement))


def whats(report: AuditReport) -> str:
    return "\n".join(f"{each.what} @ {each.where}" for each in report.findings)


def test_an_empty_registry_is_sound(registry_on: Registry) -> None:
    report = audit(registry_on)
    assert whats(report) == ""
    assert (report.records, report.files, report.journal) == (0, 0, 1)
    assert report.sound


def test_a_history_is_sound_and_counted(registry_on: Registry) -> None:
    recorded(registry_on, times=40)
    report = audit(registry_on)
    assert whats(report) == ""
    assert report.remarks == ()
    assert (report.records, report.files, report.journal) == (40 * 13, 40, 40 * 13 + 1)
    assert registry_on.frontier is not None
    assert report.root == registry_on.frontier.root().hex()


def test_progress_ends_at_the_total(registry_here: Registry) -> None:
    recorded(registry_here, times=3)
    told: list[tuple[int, int]] = []
    audit(registry_here, progress=lambda done, total: told.append((done, total)))
    assert [done for done, _ in told] == list(range(1, len(told) + 1))
    assert told[-1] == (told[-1][1], told[0][1])


def test_withdrawals_and_what_is_recorded_later_are_sound(registry_on: Registry) -> None:
    nos = recorded(registry_on)
    first = withdraw(registry_on, nos["measurement"])
    with registry_on.writing() as writer:
        links: dict[str, int | list[int]] = {"analysis": nos["analysis"], "device": nos["device"]}
        keep(writer, "parameter", links, quantity="lever_arm", value=0.1, unit="1", moment=NOON)
    withdraw(registry_on, nos["analysis"])
    withdraw(registry_on, first, NOON + 9)
    report = audit(registry_on)
    assert whats(report) == ""


TAMPERINGS = {
    "a value": ("UPDATE parameter SET value = 0.2", "its content no longer gives its id"),
    "a last digit": ("UPDATE parameter SET value = 0.10000000000000002", "content no longer gives its id"),
    "a reason": ("UPDATE standing SET why = 'clean peakz'", "content no longer gives its id"),
    "a time": ("UPDATE event SET at = at + 1", "content no longer gives its id"),
    "an absurd time": ("UPDATE event SET at = 9000000000000000000", "content no longer gives its id"),
    "a text that was none": ("UPDATE event SET note = 'x'", "content no longer gives its id"),
    "a JSON text": ("UPDATE tuning SET settings = '{'", "content no longer gives its id"),
    "a guessed time": ("UPDATE tuning SET moment = moment + 1", "entry disagree on: moment"),
    "a file name": ("UPDATE measurement SET file_name = 'other'", "entry disagree on: file_name"),
    "a warning": ("UPDATE analysis SET warnings = NULL", "entry disagree on: warnings"),
    "a copied link": ("UPDATE standing SET tuning_moment = 0", "entry disagree on: tuning_moment"),
    "a person": ("UPDATE record SET person = 'somebody else'", "entry disagree on: by"),
    "a time of entry": ("UPDATE record SET entered = entered + 1", "entry disagree on: entered"),
    "a link": ("UPDATE tuning SET parent_no = NULL", "content no longer gives its id"),
    "a link of many": ("DELETE FROM link WHERE role = 'evidence'", "content no longer gives its id"),
    "a strange link": (
        "INSERT INTO link SELECT no, 'chips', 1 FROM parameter",
        "a parameter has a link 'chips', which it cannot have",
    ),
    "a row": ("DELETE FROM standing", "standing .* is gone from its table"),
    "a row and its spine": (
        "DELETE FROM link WHERE role = 'evidence'; DELETE FROM standing; "
        "DELETE FROM record WHERE kind = 'standing'",
        "was recorded here and is gone from the records",
    ),
    "a kind in the spine": (
        "UPDATE record SET kind = 'chip' WHERE kind = 'device'",
        "list of all records as chip",
    ),
    "an unknown kind": ("UPDATE record SET kind = 'gadget' WHERE kind = 'device'", "unknown kind 'gadget'"),
    "a journal entry": ("UPDATE journal SET entry = replace(entry, 'test', 'tess')", "its hash differs"),
    "a leaf": (
        "UPDATE journal SET leaf = (SELECT leaf FROM journal WHERE seq = 3) WHERE seq = 4",
        "its hash differs",
    ),
    "an entry in the middle": ("DELETE FROM journal WHERE seq = 5", "entries 5 to 5 are missing"),
    "the last entries": ("DELETE FROM journal WHERE seq > 9", "the journal has no entry of"),
    "the opening": ("UPDATE journal SET entry = '{}' WHERE seq = 0", "entry cannot be read"),
    "a tile": ("UPDATE tile SET pos = 7", "block of kept hashes is missing"),
    "the hashes of a tile": (
        "UPDATE tile SET hashes = (SELECT leaf FROM journal WHERE seq = 3)",
        "block of kept hashes does not agree",
    ),
    "one tile too many": (
        "INSERT INTO tile SELECT 5, 5, hashes FROM tile",
        "1 blocks of kept hashes too many",
    ),
    "a taint added": (
        "INSERT INTO tainted VALUES (1, 2)",
        "is marked as resting on what was withdrawn, and does not",
    ),
    "a file's size": ("UPDATE raw_file SET size = size + 1", "content no longer gives its id"),
}


@pytest.mark.parametrize("name", TAMPERINGS)
def test_what_was_changed_in_the_database_is_found(registry_on: Registry, name: str) -> None:
    harm, words = TAMPERINGS[name]
    recorded(registry_on, times=20 if "tile" in harm else 1)  # the first tile has 256 entries
    assert audit(registry_on).sound
    tamper(registry_on, *harm.split("; "))
    report = audit(registry_on)
    assert any(re.search(words, each.what) for each in report.findings), whats(report)
    assert all(each.where and each.remedy for each in report.findings)


def test_a_link_to_another_kind_is_named(registry_here: Registry) -> None:
    nos = recorded(registry_here)
    tamper(registry_here, f"UPDATE link SET target_no = {nos['chip']} WHERE role = 'measurements'")
    assert "names a chip where a measurement belongs" in whats(audit(registry_here))


def test_a_forgotten_taint_is_found(registry_on: Registry) -> None:
    nos = recorded(registry_on)
    withdraw(registry_on, nos["measurement"])
    tamper(registry_on, f"DELETE FROM tainted WHERE record_no = {nos['standing']}")
    found = whats(audit(registry_on))
    assert f"record {nos['standing']} rests on what was withdrawn, and is not marked so" in found


def test_switched_off_guards_are_found(registry_on: Registry) -> None:
    tamper(registry_on)
    report = audit(registry_on)
    assert sum("trigger" in each.what for each in report.findings) > 60


def test_a_damaged_and_a_missing_file_are_named(registry_on: Registry) -> None:
    recorded(registry_on, times=3)
    first, second, _ = list(registry_on.files)
    path = registry_on.files.open_path(first)
    path.chmod(0o644)
    path.write_bytes(path.read_bytes()[:-1] + b"?")
    registry_on.files.open_path(second).unlink()
    report = audit(registry_on)
    assert [each.what.split()[:3] for each in report.findings] == [
        ["raw", "file", first[:10]],
        ["raw", "file", second[:10]],
    ]
    assert "has changed" in report.findings[0].what
    assert "is missing" in report.findings[1].what
    assert report.files == 3


def test_a_file_that_no_record_names_is_only_remarked(registry_on: Registry) -> None:
    recorded(registry_on)
    extra = registry_on.files.put_bytes(b"interrupted")
    (extra.path.parent / "notes.txt").write_text("mine")
    report = audit(registry_on)
    assert report.sound
    assert [each.what for each in report.remarks] == [
        f"file {extra.sha256[:10]} belongs to no record",
        "this is no file of the store",
    ]


def test_a_witness_ahead_of_the_journal_is_found(registry_here: Registry) -> None:
    recorded(registry_here)
    assert registry_here.head_path is not None
    head.write(registry_here.head_path, head.Head(90, bytes(32)))
    assert "76 acknowledged entries are missing" in whats(audit(registry_here))


def test_a_witness_of_another_history_is_found(registry_on: Registry) -> None:
    recorded(registry_on)
    head.write(registry_on.files.root / "head", head.Head(4, bytes(32)))
    assert "first 4 entries of the journal are not those" in whats(audit(registry_on))


def test_a_witness_of_noise_is_found(registry_here: Registry) -> None:
    assert registry_here.head_path is not None
    registry_here.head_path.write_bytes(b"noise" * 50)
    assert "witness of what was last acknowledged is damaged" in whats(audit(registry_here))


# --- flipped bytes -------------------------------------------------------------------


@pytest.fixture
def closed(tmp_path: Path) -> Path:
    """Folder of a registry with a history, closed."""
    folder = tmp_path / "sound"
    with create(folder) as registry:
        nos = recorded(registry, times=3)
        withdraw(registry, nos["measurement"])
    return folder


def flipped(path: Path, place: int, bit: int) -> None:
    path.chmod(0o644)
    with path.open("r+b") as file:
        file.seek(place)
        byte = file.read(1)[0]
        file.seek(place)
        file.write(bytes([byte ^ (1 << bit)]))


def contents(database: Path) -> object:
    """Everything that SQL can read of a database; the error where it cannot."""
    connection = sqlite3.connect(f"file:{database}?mode=ro&immutable=1", uri=True)
    try:
        tables = connection.execute("SELECT name, sql FROM sqlite_schema ORDER BY name").fetchall()
        names = [name for name, sql in tables if sql and sql.startswith("CREATE TABLE")]
        schema = [(name, str(sql).split()) for name, sql in tables]  # white space says nothing
        return schema, [sorted(map(repr, connection.execute(f'SELECT * FROM "{name}"'))) for name in names]
    except (sqlite3.Error, UnicodeDecodeError) as error:
        return error
    finally:
        connection.close()


def noticed(folder: Path) -> bool:
    try:
        with open_registry(folder) as registry:
            return not audit(registry).sound
    except MillikeepError:
        return True


def test_every_flipped_byte_of_the_database_that_changes_a_value_is_found(
    closed: Path, tmp_path: Path
) -> None:
    database = closed / "millikeep.db"
    data, before = database.read_bytes(), contents(database)
    draw = random.Random(60)
    places = [place for place in draw.sample(range(len(data)), 1000) if data[place]][:60]
    changed = 0
    for number, place in enumerate(places):
        folder = tmp_path / f"flip{number}"
        shutil.copytree(closed, folder)
        flipped(folder / "millikeep.db", place, draw.randrange(8))
        if contents(folder / "millikeep.db") != before:
            changed += 1
            assert noticed(folder), f"byte {place}"
        shutil.rmtree(folder)
    assert changed > 20


def test_every_flipped_byte_of_a_stored_file_is_found_by_an_audit(closed: Path) -> None:
    draw = random.Random(61)
    with open_registry(closed) as registry:
        for sha256 in registry.files:
            path = registry.files.open_path(sha256)
            for _ in range(8):
                place, bit = draw.randrange(path.stat().st_size), draw.randrange(8)
                flipped(path, place, bit)
                assert sha256[:10] in whats(audit(registry))
                flipped(path, place, bit)
        assert audit(registry).sound


def test_a_flipped_byte_in_the_write_ahead_log_is_noticed_on_opening(tmp_path: Path) -> None:
    """As after a power cut: the log was never folded into the database."""
    folder = tmp_path / "sound"
    with create(folder):
        pass
    with open_registry(folder) as registry:
        recorded(registry)
        torn = tmp_path / "torn"
        shutil.copytree(folder, torn)
    log = torn / "millikeep.db-wal"
    header, frame = 32, 24 + 4096
    first_frames = range(header, min(log.stat().st_size, header + 6 * frame), 997)
    for place in first_frames:
        flipped(log, place, 3)
        copy = tmp_path / "copy"
        shutil.copytree(torn, copy)
        with pytest.raises(DamageError, match="13 acknowledged entries are missing"):
            open_registry(copy)
        shutil.rmtree(copy)
        flipped(log, place, 3)


def test_an_older_copy_of_the_database_is_noticed_on_opening(closed: Path, tmp_path: Path) -> None:
    older = tmp_path / "older.db"
    shutil.copy(closed / "millikeep.db", older)
    with open_registry(closed) as registry:
        recorded(registry, times=5)
    shutil.copy(older, closed / "millikeep.db")
    with pytest.raises(DamageError, match="acknowledged entries are missing"):
        open_registry(closed)


def test_a_journal_cut_short_is_noticed_on_opening(closed: Path) -> None:
    with open_registry(closed) as registry:
        tamper(registry, "DELETE FROM journal WHERE seq > 9")
    with pytest.raises(DamageError, match="acknowledged entries are missing"):
        open_registry(closed)


def test_a_report_is_the_promised_json(registry_here: Registry) -> None:
    report = audit(registry_here).to_json()
    assert list(report)[:5] == ["records", "files", "journal", "root", "findings"]
    tamper(registry_here, "UPDATE journal SET entry = '{}'")
    (listed,) = [part for name, part in audit(registry_here).to_json().items() if name == "findings"]
    assert isinstance(listed, list)
    assert set(listed[0]) == {"what", "where", "remedy"}
