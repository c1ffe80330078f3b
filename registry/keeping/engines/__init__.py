"""What differs between SQLite and PostgreSQL, one module each; nobody else compares names."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import AbstractContextManager
from typing import Protocol

from sqlalchemy import Connection, Engine

__all__ = ["EngineSide"]


class EngineSide(Protocol):
    """One database as the rest of the program sees it.

    Attributes:
        name: ``sqlite`` or ``postgresql``, for display and for migrations.
        where: location without password.
        reading: engine whose transactions see one snapshot and cannot write.
        frozen: opened for reading only, or on a medium that cannot be written.
        writing: engine whose transactions are the only writer from their first statement.
    """

    name: str
    where: str
    frozen: bool
    reading: Engine
    writing: Engine

    def turn(self) -> AbstractContextManager[object]:
        """Wait for this process's turn to write, fairly; held around a transaction."""
        ...

    def tell_when_waiting(self, told: Callable[[], None]) -> None:
        """Call ``told`` where another program's writing keeps this one waiting."""
        ...

    def claim(self, connection: Connection) -> None:
        """First statement of a write transaction: exclude all other writers."""
        ...

    def volts_parameter(self, block: bytes) -> object:
        """What to bind for a volts column."""
        ...

    def close(self) -> None:
        """Give back all connections and leave the files in their tidiest form."""
        ...
