"""How a registry directory's SQLite database is opened, locked and closed."""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Callable
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path
from typing import Any

from filelock import FileLock, Timeout
from sqlalchemy import Connection, Engine, create_engine, event
from sqlalchemy.pool import QueuePool

from registry.errors import RegistryError
from registry.keeping.mounts import network_filesystem

__all__ = ["DATABASE_NAME", "SqliteSide"]

DATABASE_NAME = "millikeep.db"
# Long enough for a bulk writer's batch on a slow disk, short enough to be told.
LOCK_SECONDS = 60.0
TELL_AFTER_SECONDS = 2.0


class _Turn(AbstractContextManager[object]):
    """A file lock taken before BEGIN IMMEDIATE, so that people get a turn beside bulk writers.

    Attributes:
        waiting: called once where another program keeps us waiting, so that a person can
            be told.
    """

    def __init__(self, path: Path) -> None:
        self._lock = FileLock(path)
        self._path = path
        self.waiting: Callable[[], None] | None = None

    def __enter__(self) -> object:
        try:
            at_first = min(TELL_AFTER_SECONDS, LOCK_SECONDS)
            try:
                self._lock.acquire(timeout=at_first)
            except Timeout:
                if self.waiting is not None:
                    self.waiting()
                self._lock.acquire(timeout=LOCK_SECONDS - at_first)
        except Timeout as error:
            raise RegistryError(
                f"another program has been writing for {LOCK_SECONDS:.0f} s",
                where=str(self._path.parent),
                remedy="wait for it or stop it, then try again; nothing was recorded",
            ) from error
        return self

    def __exit__(self, *exception: object) -> None:
        self._lock.release()


class SqliteSide:
    """One SQLite database in a registry directory."""

    name = "sqlite"

    def __init__(self, directory: Path, *, read_only: bool = False, name: str = DATABASE_NAME) -> None:
        self.where = str(directory)
        self.path = directory / name
        kind = network_filesystem(directory)
        if kind is not None:
            raise RegistryError(
                f"the directory lies on a network file system ({kind}), where SQLite's locks do not hold",
                where=str(directory),
                remedy="put the registry on a local disk, or use PostgreSQL for a registry that many share",
            )
        # A directory that cannot be written cannot hold the shared-memory file of WAL mode.
        # Elsewhere that way of opening would not see what others have just committed.
        self._immutable = not os.access(directory, os.W_OK)
        self.frozen = read_only or self._immutable
        self._turn = nullcontext() if self.frozen else _Turn(directory / "lock")
        self.reading = self._engine(query_only=True)
        self.writing = self._engine(query_only=False)

    def _engine(self, *, query_only: bool) -> Engine:
        suffix = "?mode=ro&immutable=1" if self._immutable else "?mode=rw" if self.frozen else "?mode=rwc"
        uri = self.path.absolute().as_uri() + suffix

        def connect() -> sqlite3.Connection:
            return sqlite3.connect(
                uri, uri=True, isolation_level=None, timeout=LOCK_SECONDS, check_same_thread=False
            )

        engine = create_engine("sqlite://", creator=connect, poolclass=QueuePool, pool_size=4)

        @event.listens_for(engine, "connect")
        def prepare(connection: Any, _: object) -> None:
            if not self.frozen:
                connection.execute("PRAGMA journal_mode=WAL")
                # Per connection: an acknowledged record must survive power loss.
                connection.execute("PRAGMA synchronous=FULL")
            connection.execute("PRAGMA foreign_keys=ON")
            connection.execute(f"PRAGMA query_only={'ON' if query_only or self.frozen else 'OFF'}")

        @event.listens_for(engine, "begin")
        def begin(connection: Connection) -> None:
            connection.exec_driver_sql("BEGIN" if query_only else "BEGIN IMMEDIATE")

        return engine

    def turn(self) -> AbstractContextManager[object]:
        """Wait for this process's turn to write."""
        return self._turn

    def tell_when_waiting(self, told: Callable[[], None]) -> None:
        """Call ``told`` where another program's writing keeps this one waiting."""
        if isinstance(self._turn, _Turn):
            self._turn.waiting = told

    def claim(self, connection: Connection) -> None:
        """Nothing more to do: BEGIN IMMEDIATE has excluded other writers."""

    def volts_parameter(self, block: bytes) -> object:
        """The block itself."""
        return block

    def close(self) -> None:
        """Fold the write-ahead log into the database and close all connections."""
        if not self.frozen and self.path.exists():
            try:
                with sqlite3.connect(self.path, timeout=0.2) as connection:
                    connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
                connection.close()
            except (sqlite3.Error, UnicodeDecodeError):
                pass  # another process still reads; the last one to close folds it
        self.reading.dispose()
        self.writing.dispose()
