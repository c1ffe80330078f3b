"""What of each kind of record is content, link or aside, derived from its table.

The tables are the one description; this module reads it and turns a stored row back
into the canonical form (for auditing) and a form into a row (for keeping).
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from registry.records.canonical import Json, canonical_text
from registry.records.columns import Instant, JsonText, Key, Real, Volts
from registry.records.instants import format_instant
from registry.records.tables import KINDS
from registry.records.values import normal_float, normal_int, normal_json, normal_text
from registry.records.volts import block_sha256, pack

__all__ = ["Column", "Kind", "kind_of"]


@dataclass(frozen=True)
class Column:
    """One column beyond ``no`` and ``digest``.

    Attributes:
        name: of the column (``device_no``).
        form: text, json, instant, real, integer or volts.
        target: table a link points to, None for a column that is no link.
    """

    name: str
    form: str
    target: str | None
    nullable: bool
    aside: bool

    @property
    def role(self) -> str:
        """Name under which a link enters the digest."""
        return self.name.removesuffix("_no")


@dataclass(frozen=True)
class Kind:
    """A kind of record: its columns by what they are for."""

    name: str
    columns: tuple[Column, ...]
    many: tuple[str, ...]

    @property
    def links(self) -> tuple[Column, ...]:
        """Links inside the digest."""
        return tuple(c for c in self.columns if c.target and not c.aside)

    @property
    def contents(self) -> tuple[Column, ...]:
        """Columns inside the digest that are no links."""
        return tuple(c for c in self.columns if not c.target and not c.aside)

    @property
    def asides(self) -> tuple[Column, ...]:
        """Columns that the journal entry vouches for."""
        return tuple(c for c in self.columns if c.aside)

    def content(self, row: Mapping[str, Any]) -> dict[str, Json]:
        """The content of a stored row as it enters the digest."""
        return {c.name: content_value(c, row[c.name]) for c in self.contents if row[c.name] is not None}


def content_value(column: Column, stored: Any) -> Json:
    """A stored value as it enters the canonical form."""
    if column.form == "instant":
        return format_instant(stored)
    if column.form == "json":
        loaded: Json = json.loads(stored, parse_int=_json_int)
        return loaded
    if column.form == "volts":
        return {"sha256": block_sha256(stored)}
    if column.form == "real":
        return float(stored)
    value: Json = stored
    return value


def stored_value(column: Column, value: Any, where: str) -> Any:
    """What to store for a value as given: normal, or an ``InputError`` that names it."""
    if value is None:
        if not column.nullable:
            raise TypeError(f"{where} must be given")
        return None
    match column.form:
        case "text":
            return normal_text(value, where)
        case "json":
            return canonical_text(normal_json(value, where))
        case "real":
            return normal_float(value, where)
        case "volts":
            return pack(value)
        case _:
            return normal_int(value, where)


def _json_int(text: str) -> int | float:
    number = int(text)
    # Canonical text writes 1e17 without exponent; read it back as the double it was.
    return number if abs(number) < 2**53 else float(text)


@cache
def kind_of(name: str) -> Kind:
    """The kind called ``name`` (a table name).

    Raises:
        KeyError: no such kind.
    """
    model = KINDS[name]
    columns = []
    for column in model.__table__.columns:  # type: ignore[attr-defined]  # set by SQLModel
        if column.name in {"no", "digest"}:
            continue
        target = next((key.column.table.name for key in column.foreign_keys), None)
        columns.append(
            Column(column.name, _form(column.type), target, bool(column.nullable), column.name in model.ASIDE)
        )
    return Kind(name, tuple(columns), model.LINKS)


def _form(kind: object) -> str:
    forms = ((JsonText, "json"), (Instant, "instant"), (Key, "integer"), (Real, "real"), (Volts, "volts"))
    return next((form for cls, form in forms if isinstance(kind, cls)), "text")
