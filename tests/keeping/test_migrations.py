"""The migrations make what the tables say, guarded, and copy a registry before they change it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from sqlalchemy import Connection, text

from registry.errors import RegistryError
from registry.keeping import migrating
from registry.keeping.backups import migrate
from registry.keeping.describing import add_chip
from registry.keeping.handle import SCHEMA_REVISION, Registry
from registry.keeping.opening import open_registry, stored_revision
from registry.records.tables import kept_tables, metadata


def test_the_constant_of_the_quick_questions_is_the_newest_revision() -> None:
    assert migrating.newest_revision() == SCHEMA_REVISION
    assert migrating.revisions()[-1] == SCHEMA_REVISION


def test_revisions_are_numbers_that_count_up() -> None:
    assert migrating.revisions() == [f"{i:04d}" for i in range(1, len(migrating.revisions()) + 1)]


# Kept by the first schema for plain SQL on SQLite; no record table.
ASIDE = {"power_of_two", "alembic_version"}


def test_the_migrations_make_what_the_tables_say(registry_on: Registry) -> None:
    def wanted(name: str | None, kind: str, parents: Any) -> bool:
        return not (kind == "table" and name in ASIDE)

    with registry_on.reading() as connection:
        context = MigrationContext.configure(connection, opts={"include_name": wanted, "compare_type": True})
        assert compare_metadata(context, metadata) == []


def triggers(connection: Connection) -> set[str]:
    if connection.dialect.name == "sqlite":
        return set(
            connection.execute(text("SELECT name FROM sqlite_master WHERE type = 'trigger'")).scalars()
        )
    sql = """SELECT t.tgname FROM pg_trigger t JOIN pg_class c ON c.oid = t.tgrelid
        JOIN pg_namespace n ON n.oid = c.relnamespace
        WHERE n.nspname = current_schema() AND NOT t.tgisinternal AND t.tgenabled = 'A'"""
    return set(connection.execute(text(sql)).scalars())


def test_every_record_table_has_all_its_guards(registry_on: Registry) -> None:
    acts = ("update", "delete", "replace" if registry_on.engine_name == "sqlite" else "truncate")
    wanted = {f"{table}_no_{act}" for table in kept_tables() for act in acts}
    if registry_on.engine_name == "postgresql":
        wanted.add("journal_check")
    with registry_on.reading() as connection:
        assert triggers(connection) >= wanted


def test_a_registry_of_this_version_is_left_alone(registry_on: Registry, registry_place: str) -> None:
    report = migrate(registry_place)
    assert (report.from_version, report.to_version, report.backup) == (SCHEMA_REVISION, SCHEMA_REVISION, None)


def older(registry: Registry, monkeypatch: pytest.MonkeyPatch, *, fails: bool = False) -> None:
    """Make the registry look one version older, with a migration that leads here."""
    known = migrating.revisions()

    def set_version(connection: Connection, version: str) -> None:
        connection.execute(text("UPDATE alembic_version SET version_num = :v"), {"v": version})

    def upgrade(connection: Connection, revision: str = "head") -> None:
        if stored_revision(connection) is None:
            real(connection)
            set_version(connection, revision)
            return
        connection.execute(text("CREATE TABLE made_by_the_migration (x INTEGER)"))
        set_version(connection, SCHEMA_REVISION)
        if fails:
            connection.execute(text("SELECT * FROM a_table_that_is_not_there"))

    real = migrating.upgrade
    with registry.side.writing.begin() as connection:
        set_version(connection, "0000")
    monkeypatch.setattr(migrating, "revisions", lambda: ["0000", *known])
    monkeypatch.setattr(migrating, "upgrade", upgrade)


def test_a_copy_is_made_before_anything_is_migrated(
    registry_on: Registry, registry_place: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    add_chip(registry_on, "K7")
    older(registry_on, monkeypatch)
    report = migrate(registry_place)
    assert (report.from_version, report.to_version) == ("0000", SCHEMA_REVISION)
    assert report.backup is not None
    import sqlite3

    copy = sqlite3.connect(report.backup)
    assert copy.execute("SELECT version_num FROM alembic_version").fetchall() == [("0000",)]
    assert copy.execute("SELECT label FROM chip").fetchall() == [("K7",)]
    copy.close()
    with open_registry(registry_place) as registry, registry.reading() as connection:
        assert connection.execute(text("SELECT count(*) FROM made_by_the_migration")).scalar_one() == 0


def test_a_migration_that_fails_leaves_the_registry_as_it_was(
    registry_on: Registry, registry_place: str, monkeypatch: pytest.MonkeyPatch, count: Any
) -> None:
    add_chip(registry_on, "K7")
    older(registry_on, monkeypatch, fails=True)
    with pytest.raises(RegistryError):
        migrate(registry_place)
    with registry_on.reading() as connection:
        assert stored_revision(connection) == "0000"
    with pytest.raises(RegistryError):
        count(registry_on, "made_by_the_migration")


@pytest.mark.parametrize("version", ["0999", "a1b2c3"])
def test_a_registry_of_an_unknown_version_is_not_migrated(
    registry_on: Registry, registry_place: str, version: str
) -> None:
    with registry_on.side.writing.begin() as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = :v"), {"v": version})
    with pytest.raises(RegistryError, match=version):
        migrate(registry_place)


def test_an_empty_place_is_not_migrated(tmp_path: Path) -> None:
    with pytest.raises(RegistryError, match="no registry here"):
        migrate(tmp_path)
