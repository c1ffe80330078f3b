"""How questions are put to the database: SQL text, bound values, slices of key lists.

Nothing here knows a table.  All SQL of the questions runs on both engines unchanged and
sorts by integers or digests only, so that no collation can change an answer.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable
from functools import lru_cache
from typing import Any

from sqlalchemy import Connection, Row

from registry.records.instants import format_instant

__all__ = ["ALWAYS", "AnyRow", "ask", "ask_among", "from_json", "spoken"]

AnyRow = Row[*tuple[Any, ...]]

# Later than any instant on record (year 9999 is 2.5e17 microseconds): "as of" unasked.
ALWAYS = 2**62

# Keys in one statement: far below the 32,766 variables SQLite takes in one statement.
SLICE = 1024

_NAME = re.compile(r":([a-z_0-9]+)")


@lru_cache(maxsize=512)
def _for_driver(sql: str, paramstyle: str, keys: int) -> str:
    """The statement in the driver's own spelling, with places for ``keys`` keys.

    Handing it to the driver as it is spares SQLAlchemy's compilation, which would cost
    more than these small look-ups themselves.
    """
    if keys:
        sql = sql.replace("IN :nos", f"IN ({', '.join(f':no_{index}' for index in range(keys))})")
    return _NAME.sub(r"%(\1)s", sql.replace("%", "%%")) if paramstyle == "pyformat" else sql


def ask(connection: Connection, sql: str, **values: Any) -> list[AnyRow]:
    """All rows of one statement with ``:name`` places for ``values``."""
    statement = _for_driver(sql, connection.dialect.paramstyle, 0)
    return list(connection.exec_driver_sql(statement, values).all())


def ask_among(connection: Connection, sql: str, nos: Iterable[int], **values: Any) -> list[AnyRow]:
    """All rows of a statement with ``IN :nos``, asked in slices; in the order of slices."""
    keys = sorted(set(nos))
    found: list[AnyRow] = []
    for start in range(0, len(keys), SLICE):
        part = keys[start : start + SLICE]
        # Few different lengths, so that drivers meet statements they have prepared before;
        # the last key repeated fills the rest.
        length = 1 << (len(part) - 1).bit_length()
        part += part[-1:] * (length - len(part))
        statement = _for_driver(sql, connection.dialect.paramstyle, length)
        bound = {f"no_{index}": no for index, no in enumerate(part)}
        found.extend(connection.exec_driver_sql(statement, values | bound).all())
    return found


def spoken(microseconds: int) -> str:
    """A moment inside a sentence: RFC 3339 in UTC, to the second where nothing is lost."""
    return format_instant(microseconds).replace(".000000Z", "Z")


def from_json(stored: str | None, otherwise: Any) -> Any:
    """The value of a JSON column, or ``otherwise`` where it is NULL."""
    return otherwise if stored is None else json.loads(stored)
