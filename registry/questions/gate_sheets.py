"""Which description of a device's gates and sites is in force, and in what order gates stand."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, ask_among
from registry.questions.currency import current_heads
from registry.questions.devices import Body

__all__ = ["Sheet", "sheet_in_force", "sheets"]


@dataclass(frozen=True)
class Sheet:
    """One gate sheet as recorded; ``stored_...`` are its members as JSON text."""

    no: int
    digest: bytes
    at: int
    stored_gates: str = field(repr=False)
    stored_sites: str = field(repr=False)
    stored_pairs: str = field(repr=False)

    @cached_property
    def gates(self) -> tuple[Mapping[str, Any], ...]:
        """Gates as kept in the record (see ``records.tables.GateSheet``)."""
        return tuple(json.loads(self.stored_gates))

    @cached_property
    def sites(self) -> tuple[Mapping[str, Any], ...]:
        """Sites as kept in the record."""
        return tuple(json.loads(self.stored_sites))

    @cached_property
    def pairs(self) -> tuple[Mapping[str, Any], ...]:
        """Pair limits as kept in the record, volts of gate_a minus gate_b."""
        return tuple(json.loads(self.stored_pairs))

    @cached_property
    def order(self) -> tuple[str, ...]:
        """Gate names in the order of every volts block taken with this sheet."""
        return tuple(gate["gate"] for gate in self.gates)


def sheets(connection: Connection, nos: Iterable[int]) -> dict[int, Sheet]:
    """Gate sheets by key."""
    sql = "SELECT no, digest, at, gates, sites, pairs FROM gate_sheet WHERE no IN :nos"
    return {row.no: Sheet(*row) for row in ask_among(connection, sql, nos)}


def sheet_in_force(connection: Connection, body: Body, as_of: int = ALWAYS) -> tuple[Sheet | None, bool]:
    """The current sheet of a device, and whether several disagree.

    Of several that did not see each other the latest counts (by digest if at one time);
    the caller shows the conflict.
    """
    rows = ask_among(
        connection,
        "SELECT no FROM gate_sheet WHERE device_no IN :nos AND at <= :as_of",
        body.nos,
        as_of=as_of,
    )
    current = current_heads(connection, (row.no for row in rows), as_of)
    if not current:
        return None, False
    found = sorted(sheets(connection, current).values(), key=lambda sheet: (sheet.at, sheet.digest))
    kinds = {(s.stored_gates, s.stored_sites, s.stored_pairs) for s in found}
    return found[-1], len(kinds) > 1
