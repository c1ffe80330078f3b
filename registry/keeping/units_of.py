"""In which unit a quantity is kept: the controlled list and what the laboratory added."""

from __future__ import annotations

import difflib

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.naming import NOT_WITHDRAWN
from registry.records.quantities import QUANTITIES

__all__ = ["quantity_unit"]


def quantity_unit(connection: Connection, name: str) -> str:
    """The unit of a quantity.

    Raises:
        InputError: it is in neither list; names the nearest.
    """
    if name in QUANTITIES:
        return QUANTITIES[name].unit
    rows = connection.execute(
        text(f"SELECT name, unit FROM quantity q WHERE {NOT_WITHDRAWN.format(no='q.no')}")
    ).all()
    added = {row.name: str(row.unit) for row in rows}
    if name in added:
        return added[name]
    near = difflib.get_close_matches(name, [*QUANTITIES, *added], n=3)
    raise InputError(
        f"the quantity {name!r} is unknown",
        where="quantity",
        remedy=(f"nearest: {', '.join(near)}; " if near else "")
        + "'millikeep quantities' lists them, 'millikeep quantities add' adds one",
    )
