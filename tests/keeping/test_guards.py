"""The databases themselves refuse to change a record, and show volts to plain SQL."""

from __future__ import annotations

import hashlib
import math
from typing import Any

import pytest
from sqlalchemy import text
from sqlalchemy.exc import DBAPIError

from registry.errors import RegistryError
from registry.keeping.auditing import audit
from registry.keeping.changing import withdraw
from registry.keeping.journal import root_at, size_of
from registry.records.tables import kept_tables

REFUSED = "records never change"


def root(lab: Any) -> bytes:
    with lab.registry.reading() as connection:
        return bytes(root_at(connection, size_of(connection)))


def run(lab: Any, sql: str, values: dict[str, object] | None = None) -> None:
    """As somebody with the writer's rights would, past the program."""
    with lab.registry.side.writing.begin() as connection:
        connection.execute(text(sql), values or {})


def first_column(lab: Any, table: str) -> str:
    with lab.registry.reading() as connection:
        return str(next(iter(connection.execute(text(f'SELECT * FROM "{table}"')).keys())))


def acts(lab: Any, table: str) -> list[str]:
    column = first_column(lab, table)
    found = [f'UPDATE "{table}" SET "{column}" = "{column}"', f'DELETE FROM "{table}"']
    if lab.registry.engine_name == "postgresql":
        return [*found, f'TRUNCATE "{table}" CASCADE']
    return [*found, f'INSERT OR REPLACE INTO "{table}" SELECT * FROM "{table}"']


def test_every_table_refuses_to_be_changed(lab: Any) -> None:
    withdraw(lab.registry, lab.state(1, parent=lab.state(0.5)), why="wrong", at=lab.day(2))
    before = root(lab)
    empty = lab.registry.engine_name == "sqlite"
    tried = 0
    for table in kept_tables():
        with lab.registry.reading() as connection:
            if empty and connection.execute(text(f'SELECT count(*) FROM "{table}"')).scalar_one() == 0:
                continue  # SQLite's triggers fire for rows; there is none to be changed
        for act in acts(lab, table):
            tried += 1
            with pytest.raises(DBAPIError, match=REFUSED):
                run(lab, act)
    assert tried >= 25
    assert root(lab) == before
    assert audit(lab.registry).findings == ()


@pytest.mark.parametrize("key", ["no", "digest"])
def test_replacing_a_record_by_either_key_is_refused(lab_here: Any, key: str) -> None:
    other = {"no": "digest", "digest": "no"}[key]
    new = {"no": 999, "digest": hashlib.sha256(b"x").digest()}[other]
    into = f'INSERT OR REPLACE INTO record ("{key}", "{other}", kind, seq, entered, person)'
    sql = f'{into} SELECT "{key}", :new, kind, seq, entered, person FROM record'
    with pytest.raises(DBAPIError, match=REFUSED):
        run(lab_here, sql, {"new": new})


def test_an_upsert_is_refused_too(lab: Any) -> None:
    sql = "INSERT INTO chip SELECT * FROM chip WHERE true ON CONFLICT (no) DO UPDATE SET label = 'x'"
    with pytest.raises(DBAPIError):
        run(lab, sql)
    assert lab.registry.engine_name
    with lab.registry.reading() as connection:
        assert connection.execute(text("SELECT label FROM chip")).scalars().all() == ["K7"]


def test_a_refusal_inside_a_block_is_told_with_the_remedy(lab: Any) -> None:
    with pytest.raises(RegistryError, match=REFUSED) as caught, lab.registry.writing() as writer:
        writer.connection.execute(text("UPDATE chip SET label = 'x'"))
    assert "amend" in caught.value.remedy


def test_a_digest_of_another_length_is_refused(lab: Any) -> None:
    sql = "INSERT INTO record (no, kind, digest, seq, entered, person) VALUES (999, 'chip', :d, 1, 1, 'x')"
    with pytest.raises(DBAPIError, match=r"(?i)check"):
        run(lab, sql, {"d": b"short"})


@pytest.mark.parametrize(("ahead", "leaf", "word"), [(1, "right", "not the next"), (0, "wrong", "leaf")])
def test_a_forged_journal_entry_is_refused_by_the_server(lab: Any, ahead: int, leaf: str, word: str) -> None:
    if lab.registry.engine_name == "sqlite":
        pytest.skip("SQLite has no users to keep apart; audit finds it")
    with lab.registry.reading() as connection:
        seq = size_of(connection) + ahead
    good = hashlib.sha256(b"\0{}").digest()
    values = {"seq": seq, "leaf": good if leaf == "right" else bytes(32)}
    with pytest.raises(DBAPIError, match=word):
        run(lab, "INSERT INTO journal (seq, entry, leaf) VALUES (:seq, '{}', :leaf)", values)


def test_the_server_notes_whose_session_wrote_an_entry(lab: Any) -> None:
    with lab.registry.reading() as connection:
        names = set(connection.execute(text("SELECT recorded_by FROM journal")).scalars())
        if lab.registry.engine_name == "sqlite":
            assert names == {None}
        else:
            assert names == {connection.execute(text("SELECT session_user")).scalar_one()}


AWKWARD = [
    0.1,
    -0.1,
    1 / 3,
    5e-324,
    -5e-324,
    2.2250738585072014e-308,
    2.225073858507201e-308,
    1.7976931348623157e308,
    -1.7976931348623157e308,
    1.0,
    -1.0,
    0.5,
    2.0**-1022,
    2.0**52 + 0.5,
    2.0**53,
    1e-300,
    math.pi,
    -math.e,
]


def test_plain_sql_reads_volts_exactly(lab: Any) -> None:
    ids = [lab.state(1 + i, {"P1": v, "P2": -v, "B1": 0.0}) for i, v in enumerate(AWKWARD)]
    with lab.registry.reading() as connection:
        rows = connection.execute(text("SELECT * FROM tuning_volts")).mappings().all()
        digests = {
            r.no: bytes(r.digest).hex() for r in connection.execute(text("SELECT no, digest FROM tuning"))
        }
    shown = {(digests[row["tuning_no"]], row["gate"]): row["volts"] for row in rows}
    for digest, value in zip(ids, AWKWARD, strict=True):
        assert [shown[digest, gate] for gate in ("P1", "P2", "B1")] == [value, -value, 0.0]


def test_a_gate_that_was_not_recorded_has_no_volts_in_plain_sql(lab: Any) -> None:
    lab.state(1, {"P2": 0.25})
    with lab.registry.reading() as connection:
        rows = connection.execute(text("SELECT gate, volts FROM tuning_volts")).all()
    shown = {row.gate: row.volts for row in rows if row.volts is not None and not math.isnan(row.volts)}
    assert shown == {"P2": 0.25}
