"""What can each database say about its own soundness?

Index pages, triggers and views are covered by no digest, yet they change answers or keep
records from being changed; each engine has its own way to look at them.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from functools import cache

from sqlalchemy import Connection, create_engine, text

from registry.records.tables import kept_tables

__all__ = ["Fault", "database_checks"]

Fault = tuple[str, str]
"""What is wrong, and where."""

Check = Callable[[Connection], Iterator[Fault]]

MOST_LINES = 20
"""Lines taken from one integrity check: the first tell, the others follow from them."""


def database_checks(connection: Connection) -> tuple[tuple[str, Check], ...]:
    """(name, check) for the engine of a connection; each check yields faults."""
    return _CHECKS[connection.dialect.name]


def _integrity(connection: Connection) -> Iterator[Fault]:
    for line in connection.execute(text(f"PRAGMA integrity_check({MOST_LINES})")).scalars():
        if line != "ok":
            yield f"the database file is damaged: {' '.join(str(line).split())}", "SQLite's integrity check"


def _foreign_keys(connection: Connection) -> Iterator[Fault]:
    rows = connection.execute(text("PRAGMA foreign_key_check")).fetchmany(MOST_LINES)
    for table, rowid, parent, _ in rows:
        yield f"a row names a {parent} that does not exist", f"table {table}, row {rowid}"


def _sqlite_schema(connection: Connection) -> Iterator[Fault]:
    """Tables, indexes, triggers and views against those of a registry made afresh."""
    expected, found = _fresh_schema(), _described(connection)
    for name in sorted({*expected, *found}):
        if name not in found:
            yield f"{expected[name][0]} {name} is missing", "the database's schema"
        elif name not in expected:
            yield f"{found[name][0]} {name} does not belong to a registry", "the database's schema"
        elif expected[name] != found[name]:
            yield f"{found[name][0]} {name} is not as the program makes it", "the database's schema"


@cache
def _fresh_schema() -> dict[str, tuple[str, str]]:
    from registry.keeping.migrating import upgrade  # heavy: Alembic

    engine = create_engine("sqlite://")
    try:
        with engine.begin() as connection:
            upgrade(connection)
            return _described(connection)
    finally:
        engine.dispose()


def _described(connection: Connection) -> dict[str, tuple[str, str]]:
    """Name -> kind and text of everything in an SQLite schema, white space evened out."""
    rows = connection.execute(
        text("SELECT type, name, sql FROM sqlite_schema WHERE name NOT LIKE 'sqlite_stat%'")
    ).all()
    return {str(name): (str(kind), " ".join(str(sql).split())) for kind, name, sql in rows}


def _powers(connection: Connection) -> Iterator[Fault]:
    """The table by which plain SQL decodes volts."""
    rows = connection.execute(text("SELECT k, value FROM power_of_two")).all()
    right = {k: 2.0**k for k in range(-1074, 972)}
    if {int(k): value for k, value in rows} != right:
        yield "volts read by plain SQL may be wrong: the table of powers has changed", "table power_of_two"


def _postgres_guards(connection: Connection) -> Iterator[Fault]:
    """Triggers that refuse changes, also in sessions that switch ordinary triggers off."""
    rows = connection.execute(
        text(
            "SELECT t.tgname, t.tgenabled::text, p.prosrc FROM pg_trigger t "
            "JOIN pg_class c ON c.oid = t.tgrelid JOIN pg_proc p ON p.oid = t.tgfoid "
            "WHERE NOT t.tgisinternal AND c.relnamespace = current_schema()::regnamespace"
        )
    )
    found = {name: (enabled, body) for name, enabled, body in rows}
    names = [f"{table}_no_{act}" for table in kept_tables() for act in ("update", "delete", "truncate")]
    for name in sorted([*names, "journal_check"]):
        enabled, body = found.get(name, (None, ""))
        if enabled is None:
            yield f"trigger {name} is missing", "the database's schema"
        elif enabled != "A":
            yield f"trigger {name} is switched off or can be", "the database's schema"
        elif not re.search(r"\bRAISE EXCEPTION\b", body):
            yield f"trigger {name} no longer refuses anything", "the database's schema"


def _postgres_constraints(connection: Connection) -> Iterator[Fault]:
    rows = connection.execute(
        text(
            "SELECT conname, conrelid::regclass::text FROM pg_constraint "
            "WHERE NOT convalidated AND connamespace = current_schema()::regnamespace"
        )
    )
    for name, table in rows:
        yield f"rule {name} has not been checked on all rows", f"table {table}"


_CHECKS: dict[str, tuple[tuple[str, Check], ...]] = {
    "sqlite": (
        ("the database file", _integrity),
        ("links between rows", _foreign_keys),
        ("the database's schema", _sqlite_schema),
        ("table power_of_two", _powers),
    ),
    "postgresql": (
        ("the database's schema", _postgres_guards),
        ("links between rows", _postgres_constraints),
    ),
}
