"""What a tuning state is when asked for: its volts at the gate and at the source, its words.

Volts are kept as they were observed; the other level is derived here through the wiring
in force at the state's moment, so that a corrected wiring corrects every answer.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, AnyRow, ask_among, from_json
from registry.questions.currency import Marks, amended
from registry.questions.gate_sheets import Sheet, sheets
from registry.questions.wirings import Wiring, Wirings
from registry.records.instants import format_instant
from registry.records.volts import unpack

__all__ = ["State", "load_states", "volts_at_gate", "volts_at_source", "wiring_of"]

_SQL = (
    "SELECT no, digest, device_no, cooldown_no, gate_sheet_no, parent_no, raw_file_no, level, volts,"
    " settings, occupation, purpose, sites, at, moment FROM tuning WHERE no IN :nos"
)


@dataclass(frozen=True)
class State:
    """One tuning state as recorded, amended words included.

    Attributes:
        sheet: the gate sheet its volts were taken with.
        stored: the volts block as the engine gave it.
        settings: name -> {value, unit}; occupation: site -> number of charges.
        at: microseconds, None where the time was only guessed; ``moment`` always.
    """

    no: int
    digest: bytes
    device_no: int
    cooldown_no: int
    parent_no: int | None
    raw_file_no: int | None
    sheet: Sheet
    level: str
    stored: Any = field(compare=False, repr=False)
    settings: Mapping[str, Any] = field(compare=False)
    occupation: Mapping[str, int] = field(compare=False)
    purpose: str | None
    sites: tuple[str, ...]
    at: int | None
    moment: int

    @cached_property
    def observed(self) -> Mapping[str, float]:
        """Gate -> volts at ``level`` (gate or source); gates not recorded are absent."""
        volts = zip(self.sheet.order, unpack(self.stored), strict=True)
        return {gate: value for gate, value in volts if not math.isnan(value)}

    @property
    def hex(self) -> str:
        """The full digest."""
        return self.digest.hex()

    @property
    def order(self) -> tuple[int, bytes]:
        """Sorts states by time, those of one moment by digest."""
        return self.moment, self.digest

    @property
    def time(self) -> str:
        """Its moment as RFC 3339 text."""
        return format_instant(self.moment)


def load_states(connection: Connection, nos: Iterable[int], as_of: int = ALWAYS) -> dict[int, State]:
    """States by key, with the sheets they were taken with."""
    rows = ask_among(connection, _SQL, nos)
    known = sheets(connection, {row.gate_sheet_no for row in rows})
    marks = Marks({}, amended(connection, (row.no for row in rows), as_of))
    return {row.no: _state(row, known[row.gate_sheet_no], marks) for row in rows}


def _state(row: AnyRow, sheet: Sheet, marks: Marks) -> State:
    return State(
        row.no,
        bytes(row.digest),
        row.device_no,
        row.cooldown_no,
        row.parent_no,
        row.raw_file_no,
        sheet,
        row.level,
        row.volts,
        from_json(row.settings, {}),
        from_json(row.occupation, {}),
        marks.text(row.no, "purpose", row.purpose),
        tuple(from_json(row.sites, ())),
        row.at,
        row.moment,
    )


def volts_at_gate(state: State, wiring: Wiring | None) -> dict[str, float]:
    """Volts at the gate by gate; gates whose line is not on record are absent."""
    if state.level == "gate":
        return dict(state.observed)
    lines = {} if wiring is None else wiring.gates
    return {gate: lines[gate].at_gate(value) for gate, value in state.observed.items() if gate in lines}


def volts_at_source(state: State, wiring: Wiring | None) -> dict[str, float]:
    """Volts on the source's panel by gate, before quantisation; as ``volts_at_gate``."""
    if state.level == "source":
        return dict(state.observed)
    lines = {} if wiring is None else wiring.gates
    return {gate: lines[gate].at_source(value) for gate, value in state.observed.items() if gate in lines}


def wiring_of(state: State, known: Wirings) -> Wiring | None:
    """The wiring in force when the state was taken."""
    return known.at(state.cooldown_no, state.moment)
