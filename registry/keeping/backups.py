"""How a registry is copied whole, and brought to the newest schema with a copy made first.

A backup is a registry directory of its own, whatever engine the original runs on: rows
are the same on both, so a PostgreSQL registry is backed up without any server tool.
"""

from __future__ import annotations

import os
import shutil
import sqlite3
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import RegistryError
from registry.keeping import head as head_file
from registry.keeping import journal
from registry.keeping.engines import EngineSide
from registry.keeping.engines.sqlite import DATABASE_NAME, SqliteSide
from registry.keeping.handle import SCHEMA_REVISION, Registry, translated
from registry.keeping.opening import file_store, side_of, stored_revision
from registry.keeping.places import FILES_NAME, HEAD_NAME, Place, place_of
from registry.records.instants import format_instant, now_us
from registry.records.tables import kept_tables
from registry.records.volts import pack

__all__ = ["MigrationReport", "backup", "migrate"]

Progress = Callable[[int, int], None]

# Rows moved at once between two databases.
ROWS = 1_000


@dataclass(frozen=True)
class MigrationReport:
    """What a migration did.

    Attributes:
        from_version, to_version: equal where there was nothing to do.
        backup: the copy made first, None where there was nothing to do.
    """

    from_version: str
    to_version: str
    backup: Path | None


def backup(registry: Registry, out: str | os.PathLike[str], *, progress: Progress | None = None) -> Path:
    """Copy a registry, its file store included, into a new registry directory.

    Args:
        registry: open; others may go on writing meanwhile.
        out: the new directory; must not exist or be empty.
        progress: called with (files copied, files in all).

    Raises:
        RegistryError: the directory is not empty or cannot be written.
        DamageError: a stored file is not what its name says.
    """
    target = _new_directory(Path(out))
    with translated(str(target)):
        size, root = _copy_database(registry.side, target / DATABASE_NAME)
        head_file.write(target / HEAD_NAME, head_file.Head(size, root))
        names = list(registry.files)
        for place, sha256 in enumerate(names, start=1):
            registry.files.verify(sha256)
            copy = target / FILES_NAME / sha256[:2] / sha256[2:]
            copy.parent.mkdir(parents=True, exist_ok=True)
            shutil.copy2(registry.files.open_path(sha256), copy)
            if progress is not None:
                progress(place, len(names))
    return target


def migrate(where: str | os.PathLike[str] | None = None) -> MigrationReport:
    """Bring a registry to this program's schema, after copying its database.

    Raises:
        RegistryError: no registry there, or one of a newer program.
    """
    from registry.keeping.migrating import revisions, upgrade

    place = place_of(where)
    side = side_of(place)
    try:
        with translated(side.where), side.reading.connect() as connection:
            present = stored_revision(connection)
        if present is None or present not in revisions():
            raise RegistryError(
                f"its schema version is {present or 'none'}, which this program does not know",
                where=side.where,
                remedy="install a newer millikeep, or name the right place with --registry",
            )
        if present == SCHEMA_REVISION:
            return MigrationReport(present, present, None)
        saved = _save_before(place, side, present)
        with translated(side.where), side.turn(), side.writing.begin() as connection:
            side.claim(connection)
            upgrade(connection)
        return MigrationReport(present, SCHEMA_REVISION, saved)
    finally:
        side.close()


def _save_before(place: Place, side: EngineSide, present: str) -> Path:
    """Copy the database (the file store is not touched by migrations)."""
    stamp = format_instant(now_us())[:19].replace(":", "").replace("-", "")
    if place.directory is not None:
        folder = place.directory / "backups"
    else:
        with side.reading.connect() as connection:
            folder = file_store(place, connection).root.parent / "backups"
    folder.mkdir(parents=True, exist_ok=True)
    copy = folder / f"before-migration-of-{present}-{stamp}.db"
    _copy_database(side, copy)
    return copy


def _new_directory(target: Path) -> Path:
    try:
        target.mkdir(parents=True, exist_ok=True)
        occupied = any(target.iterdir())
    except OSError as error:
        raise RegistryError(
            f"it cannot be made: {error.strerror}",
            where=str(target),
            remedy="name a place that you may write to",
        ) from error
    if occupied:
        raise RegistryError(
            "the directory is not empty", where=str(target), remedy="name an empty or a new directory"
        )
    return target


def _copy_database(side: EngineSide, path: Path) -> tuple[int, bytes]:
    """Copy all rows into a new SQLite database; returns the journal's size and root there."""
    if isinstance(side, SqliteSide):
        # SQLite's own online copy: exact, and others may write meanwhile.
        with side.reading.connect() as source, sqlite3.connect(path) as target:
            driver: Any = source.connection.driver_connection
            driver.backup(target)
        target.close()
    copy = SqliteSide(path.parent, name=path.name)
    try:
        if not isinstance(side, SqliteSide):
            with side.reading.connect() as source, copy.writing.begin() as new:
                _copy_rows(source, new)
        with copy.reading.connect() as connection:
            size = journal.size_of(connection)
            return size, journal.root_at(connection, size)
    finally:
        copy.close()


def _copy_rows(source: Connection, target: Connection) -> None:
    from registry.keeping.migrating import upgrade

    revision = stored_revision(source)
    assert revision is not None
    upgrade(target, revision)
    for table in kept_tables():
        columns = [
            row.name for row in target.execute(text(f"SELECT name FROM pragma_table_info('{table}')")).all()
        ]
        listed = ", ".join(f'"{name}"' for name in columns)
        insert = f'INSERT INTO "{table}" ({listed}) VALUES ({", ".join(":" + name for name in columns)})'
        order = ", ".join(str(place) for place in range(1, 3 if len(columns) > 1 else 2))
        rows = source.execution_options(yield_per=ROWS).execute(
            text(f'SELECT {listed} FROM "{table}" ORDER BY {order}')
        )
        for part in rows.mappings().partitions(ROWS):
            target.execute(text(insert), [_sqlite_row(dict(row)) for row in part])


def _sqlite_row(row: dict[str, Any]) -> dict[str, Any]:
    if isinstance(row.get("volts"), list):
        row["volts"] = pack(row["volts"])
    return row
