"""The open registry: what questions read through and what all writing goes through.

Light on purpose: importing this module loads SQLAlchemy Core but neither SQLModel nor
Alembic, so that the quick questions start quickly.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Self

from sqlalchemy import Connection
from sqlalchemy.exc import DBAPIError, OperationalError

from registry.errors import MillikeepError, RegistryError

if TYPE_CHECKING:
    from registry.keeping.engines import EngineSide
    from registry.keeping.filestore import FileStore
    from registry.keeping.merkle import Frontier
    from registry.keeping.writing import Writer

__all__ = ["SCHEMA_REVISION", "Registry", "translated"]

# The migration this program reads and writes; a test keeps it equal to the newest one.
SCHEMA_REVISION = "0001"


class Registry:
    """An open registry; close it, or use it as a context manager.

    Attributes:
        side: the database.
        files: the file store.
        person: whose name goes into the journal beside what is recorded.
        head_path: the witness file beside an SQLite database, else None.
        frontier: the journal's tree after this process's last commit, else None.
    """

    def __init__(self, side: EngineSide, files: FileStore, *, person: str, head_path: Path | None) -> None:
        self.side = side
        self.files = files
        self.person = person
        self.head_path = head_path
        self.frontier: Frontier | None = None
        # A writer belongs to its thread: another one reads what is committed and waits to write.
        self._mine = threading.local()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *exception: object) -> None:
        self.close()

    @property
    def where(self) -> str:
        """Location for messages, without a password."""
        return self.side.where

    @property
    def engine_name(self) -> str:
        """``sqlite`` or ``postgresql``."""
        return self.side.name

    def close(self) -> None:
        """Close all connections."""
        self.files.close()
        self.side.close()

    @property
    def _writer(self) -> Writer | None:
        writer: Writer | None = getattr(self._mine, "writer", None)
        return writer

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """A short read transaction on one snapshot.

        Inside ``writing`` it is the writer's own connection, so that what was just
        recorded is seen.
        """
        writer = self._writer
        if writer is not None:
            yield writer.connection
            return
        with translated(self.where), self.side.reading.connect() as connection:
            yield connection

    @contextmanager
    def writing(self) -> Iterator[Writer]:
        """The one way to write: a transaction that records all or nothing.

        An inner call joins the outer transaction; if it fails and the outer one goes on,
        nothing of the inner one stays.

        Raises:
            RegistryError: locked, read-only, or the disk is full; nothing was recorded.
        """
        if self._writer is not None:
            with self._writer.part():
                yield self._writer
            return
        from registry.keeping.writing import Writer

        with translated(self.where), self.side.turn():
            with self.side.writing.begin() as connection:
                self.side.claim(connection)
                writer = Writer(self, connection)
                self._mine.writer = writer
                try:
                    yield writer
                    writer.flush()
                finally:
                    self._mine.writer = None
            writer.committed()


_READ_ONLY = ("readonly", "read-only", "query_only", "permission denied")


@contextmanager
def translated(where: str) -> Iterator[None]:
    """Turn the database driver's errors into ones that say what to do."""
    try:
        yield
    except MillikeepError:
        raise
    except UnicodeDecodeError as error:
        # SQLite quotes damaged schema text in its own message, which its driver cannot decode.
        raise _explained("database disk image is malformed", where) from error
    except (OperationalError, DBAPIError) as error:
        raise _explained(str(error.orig), where) from error


def _explained(message: str, where: str) -> RegistryError:
    first = message.strip().splitlines()[0] if message.strip() else "the database gave no reason"
    lower = message.lower()
    if any(word in lower for word in _READ_ONLY):
        remedy = "open a registry that you may write to; nothing was recorded"
    elif "locked" in lower or "busy" in lower:
        remedy = "another program is writing; wait for it, then try again; nothing was recorded"
    elif "full" in lower or "no space" in lower:
        remedy = "free some disk space, then try again; nothing was recorded"
    elif "malformed" in lower or "not a database" in lower or "disk i/o" in lower:
        remedy = "the database file is damaged: keep a copy of it and restore the last backup"
    elif "records never change" in lower:
        remedy = "use amend, withdraw or a superseding record instead"
    elif "connect" in lower or "server" in lower:
        remedy = "check that the server runs and that address, name and password are right"
    else:
        remedy = "nothing was recorded; run 'millikeep audit', and report this message if it stays"
    return RegistryError(f"the database refused: {first}", where=where, remedy=remedy)
