"""How a registry is made, opened and checked before anything else is done with it."""

from __future__ import annotations

import os
import re
import secrets
from pathlib import Path

from sqlalchemy import Connection, text
from sqlalchemy.exc import DBAPIError

from registry.errors import DamageError, InputError, RegistryError
from registry.keeping import head as head_file
from registry.keeping import journal
from registry.keeping.engines import EngineSide
from registry.keeping.filestore import FileStore
from registry.keeping.handle import SCHEMA_REVISION, Registry, translated
from registry.keeping.places import (
    FILES_ENVIRONMENT,
    FILES_NAME,
    HEAD_NAME,
    Place,
    default_files,
    person_name,
    place_of,
)
from registry.records.canonical import Json, canonical_text
from registry.records.instants import format_instant, now_us

__all__ = [
    "check_version",
    "create",
    "file_store",
    "open_registry",
    "opening_entry",
    "side_of",
    "stored_revision",
]

FORMAT = 1


def open_registry(
    where: str | os.PathLike[str] | None = None, *, person: str | None = None, read_only: bool = False
) -> Registry:
    """Open a registry.

    Args:
        where: directory or PostgreSQL URL; None means MILLIKEEP_REGISTRY, else the
            user's own directory, which is made on first use.
        person: name for the journal; None means MILLIKEEP_AS, else the login name.
        read_only: refuse to write.

    Raises:
        RegistryError: not there, of an older or newer version, or out of reach.
        DamageError: acknowledged entries are missing from the journal.
    """
    place = place_of(where)
    if place.is_default and not (_folder(place) / "millikeep.db").exists() and not read_only:
        return create(None, person=person)
    side = side_of(place, read_only=read_only)
    try:
        with translated(side.where):
            seen = head_file.read(_folder(place) / HEAD_NAME) if place.directory else None
            with side.reading.connect() as connection:
                check_version(connection, side.where)
                head_file.check(
                    seen,
                    journal.size_of(connection),
                    lambda size: journal.root_at(connection, size),
                    where=side.where,
                )
                files = file_store(place, connection)
    except BaseException:
        side.close()
        raise
    return _assembled(side, files, place, person)


def create(
    where: str | os.PathLike[str] | None = None,
    *,
    files: str | os.PathLike[str] | None = None,
    person: str | None = None,
) -> Registry:
    """Make an empty registry and open it.

    Args:
        where: as in ``open_registry``.
        files: directory of the file store; None means inside the registry's directory,
            or the user's own directory for PostgreSQL.

    Raises:
        RegistryError: there is a registry already, or the place cannot be written.
    """
    from registry.keeping.migrating import upgrade

    place = place_of(where)
    if place.directory is not None:
        _make_directory(place.directory, files)
    side = side_of(place, making=True)
    try:
        with translated(side.where), side.turn(), side.writing.begin() as connection:
            side.claim(connection)
            if stored_revision(connection) is not None:
                raise RegistryError(
                    "there is a registry already",
                    where=side.where,
                    remedy="open it, or name another place; nothing was changed",
                )
            upgrade(connection)
            registry_id = secrets.token_hex(32)
            entry: dict[str, Json] = {
                "act": "opening",
                "registry": registry_id,
                "format": FORMAT,
                "entered": format_instant(now_us()),
                "by": person_name(person),
            }
            if place.url is not None:
                entry["files"] = str(Path(files).absolute()) if files else str(default_files(registry_id))
            appended = journal.append(connection, None, [canonical_text(entry)])
        if place.directory is not None:
            head_file.write(place.directory / HEAD_NAME, head_file.Head(appended.size, appended.root))
        with side.reading.connect() as connection:
            store = file_store(place, connection)
        store.root.parent.mkdir(parents=True, exist_ok=True)
    except BaseException:
        side.close()
        raise
    return _assembled(side, store, place, person)


def opening_entry(connection: Connection) -> dict[str, object]:
    """The journal's first entry: which registry this is.

    Raises:
        DamageError: it is not there.
    """
    import json

    entry = connection.execute(text("SELECT entry FROM journal WHERE seq = 0")).scalar_one_or_none()
    if entry is None:
        raise DamageError(
            "the journal has no opening entry",
            where="journal",
            remedy="restore the newest backup; this database was not made by 'millikeep create'",
        )
    opening: dict[str, object] = json.loads(entry)
    return opening


def stored_revision(connection: Connection) -> str | None:
    """The schema version of the database, None where there is no registry."""
    from sqlalchemy import inspect

    if not inspect(connection).has_table("alembic_version"):
        return None
    found = connection.execute(text("SELECT version_num FROM alembic_version")).scalar_one_or_none()
    return None if found is None else str(found)


def check_version(connection: Connection, where: str) -> None:
    """Refuse a registry that this program must not read as it is.

    Raises:
        RegistryError: none there, older (names ``millikeep migrate``), or newer.
    """
    try:
        found = connection.execute(text("SELECT version_num FROM alembic_version")).scalar_one_or_none()
    except DBAPIError as error:
        if "no such table" not in str(error.orig) and "does not exist" not in str(error.orig):
            raise
        connection.rollback()
        found = None
    if found == SCHEMA_REVISION:
        return
    if found is None:
        raise RegistryError(
            "there is a database, but no registry in it",
            where=where,
            remedy="make one with 'millikeep create', or name the right place with --registry",
        )
    if re.fullmatch(r"\d+", str(found)) and int(found) < int(SCHEMA_REVISION):
        raise RegistryError(
            f"the registry has schema version {found}, this program uses {SCHEMA_REVISION}",
            where=where,
            remedy="run 'millikeep migrate' (it makes a backup first)",
        )
    raise RegistryError(
        f"the registry has schema version {found}, which is newer than this program ({SCHEMA_REVISION})",
        where=where,
        remedy="install a newer millikeep; an older one could misread it",
    )


def side_of(place: Place, *, read_only: bool = False, making: bool = False) -> EngineSide:
    """The database at a place.

    Raises:
        RegistryError: there is none (unless it is to be made), or SQLite cannot work there.
    """
    if place.url is not None:
        from registry.keeping.engines.postgres import PostgresSide

        return PostgresSide(place.url, read_only=read_only)
    from registry.keeping.engines.sqlite import DATABASE_NAME, SqliteSide

    directory = _folder(place)
    if not making and not (directory / DATABASE_NAME).exists():
        raise RegistryError(
            "there is no registry here",
            where=str(directory),
            remedy=f"make one with 'millikeep create {directory}', or name the right place with --registry",
        )
    return SqliteSide(directory, read_only=read_only)


def _folder(place: Place) -> Path:
    assert place.directory is not None
    return place.directory


def _make_directory(directory: Path, files: object) -> None:
    from registry.keeping.engines.sqlite import DATABASE_NAME

    if files is not None:
        raise InputError(
            "--files is for a PostgreSQL registry",
            where="create",
            remedy="leave it out: a registry directory keeps its files inside",
        )
    if (directory / DATABASE_NAME).exists():
        return
    try:
        directory.mkdir(parents=True, exist_ok=True)
        others = [entry.name for entry in directory.iterdir()]
    except OSError as error:
        raise RegistryError(
            f"the directory cannot be made: {error.strerror}",
            where=str(directory),
            remedy="name a place that you may write to",
        ) from error
    if others:
        raise RegistryError(
            f"the directory is not empty (it holds {sorted(others)[0]!r})",
            where=str(directory),
            remedy="name an empty or a new directory",
        )


def file_store(place: Place, connection: Connection) -> FileStore:
    """The file store that belongs to a registry: inside its directory, or as noted at its making."""
    if place.directory is not None:
        return FileStore(place.directory / FILES_NAME)
    named = os.environ.get(FILES_ENVIRONMENT) or str(opening_entry(connection).get("files", ""))
    return FileStore(Path(named))


def _assembled(side: EngineSide, files: FileStore, place: Place, person: str | None) -> Registry:
    head_path = place.directory / HEAD_NAME if place.directory is not None else None
    return Registry(side, files, person=person_name(person), head_path=head_path)
