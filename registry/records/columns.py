"""Which column types the tables use, and how each engine stores them.

SQLite tables are STRICT, so every type must compile to INTEGER, REAL, TEXT or BLOB
there; PostgreSQL takes BIGINT, DOUBLE PRECISION, TEXT, BYTEA and double precision[].
The classes also tell ``records.kinds`` how a value enters the canonical form.
"""

from __future__ import annotations

from typing import Any

from sqlalchemy import BigInteger, Double, LargeBinary
from sqlalchemy import Text as SqlText
from sqlalchemy.ext.compiler import compiles

__all__ = ["Digest32", "Instant", "JsonText", "Key", "Real", "Text", "Volts"]


class Text(SqlText):
    """Unicode text, NFC."""


class JsonText(SqlText):
    """Canonical JSON text; enters the canonical form as the value it holds."""


class Key(BigInteger):
    """Small integer key for joins, counted by the program (never by a sequence)."""


class Instant(BigInteger):
    """Microseconds since 1970-01-01T00:00:00Z; RFC 3339 text in the canonical form."""


class Real(Double[float]):
    """IEEE double."""


class Digest32(LargeBinary):
    """32 bytes of SHA-256 (or a run of such)."""


class Volts(LargeBinary):
    """float64 values in gate-sheet order: big-endian block on SQLite, array on PostgreSQL."""


@compiles(Key, "sqlite")
@compiles(Instant, "sqlite")
def _integer(element: Any, compiler: Any, **options: Any) -> str:
    return "INTEGER"


@compiles(Real, "sqlite")
def _real(element: Any, compiler: Any, **options: Any) -> str:
    return "REAL"


@compiles(Volts, "postgresql")
def _array(element: Any, compiler: Any, **options: Any) -> str:
    return "DOUBLE PRECISION[]"
