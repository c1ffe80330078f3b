"""Which tuning states a device has, and what is known about one of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection

from registry.keeping.naming import find_tuning
from registry.questions.asking import ALWAYS, ask, ask_among, from_json
from registry.questions.currency import marks_of, taints_of
from registry.questions.devices import body_of, find_body
from registry.questions.freshness import Freshness, freshness
from registry.questions.parameters import Point, values_of_states
from registry.questions.standings import (
    Asked,
    Decision,
    Judged,
    Judgement,
    decide,
    load_judgements,
    taint_words,
)
from registry.questions.states import State, load_states, volts_at_gate, volts_at_source
from registry.questions.stretches import history_of
from registry.questions.surroundings import surroundings_of
from registry.questions.wirings import Wiring
from registry.records.instants import format_instant

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["GateVolts", "MeasurementRow", "TuningPage", "TuningRow", "list_tunings", "show_tuning"]


@dataclass(frozen=True)
class TuningRow:
    """One line of a list of states.

    Attributes:
        at: microseconds; ``time_guessed``: only the file's date was known.
        stretch: number of its cold stretch, None while warm.
        standing, by: what counts; None where there is no standing.
        reason: why it is not good, or what was withdrawn, in words.
        withdrawn: the state, or what it rests on, is withdrawn.
    """

    id: str
    at: int
    time_guessed: bool
    cooldown: str | None
    stretch: int | None
    purpose: str | None
    sites: tuple[str, ...]
    parent: str | None
    standing: str | None
    by: str | None
    reason: str | None
    withdrawn: bool

    def to_json(self) -> dict[str, Any]:
        """All members; the time as text."""
        return {
            "id": self.id,
            "at": format_instant(self.at),
            "time_guessed": self.time_guessed,
            "cooldown": self.cooldown,
            "stretch": self.stretch,
            "purpose": self.purpose,
            "sites": list(self.sites),
            "parent": self.parent,
            "standing": self.standing,
            "by": self.by,
            "reason": self.reason,
            "withdrawn": self.withdrawn,
        }


def list_tunings(reg: Registry, device: str) -> tuple[TuningRow, ...]:
    """All states of a device, newest first, withdrawn ones marked.

    Args:
        reg: an open registry.
        device: CHIP/NAME or id.

    Raises:
        LookupFailed: no such device.
    """
    with reg.reading() as connection:
        body = find_body(connection, device)
        history = history_of(connection, body)
        rows = ask_among(
            connection,
            "SELECT t.no, t.digest, t.cooldown_no, t.purpose, t.sites, t.at, t.moment, p.digest AS parent"
            " FROM tuning t LEFT JOIN tuning p ON p.no = t.parent_no WHERE t.device_no IN :nos",
            body.nos,
        )
        nos = [row.no for row in rows]
        marks = marks_of(connection, nos, ALWAYS)
        own = {
            row.no: Judged(
                row.no, marks.text(row.no, "purpose", row.purpose), tuple(from_json(row.sites, ()))
            )
            for row in rows
        }
        judgements, _ = load_judgements(connection, own.values())
    found = []
    for row in rows:
        gone = marks.taints.get(row.no, ())
        decision = decide(judgements.get(row.no, ()), own[row.no].purpose, Asked())
        stay, stretch = body.stay(row.cooldown_no), history.stretch_at(row.moment)
        found.append(
            TuningRow(
                row.digest.hex(),
                row.moment,
                row.at is None,
                stay.label if stay else None,
                stretch.number if stretch else None,
                own[row.no].purpose,
                own[row.no].sites,
                None if row.parent is None else row.parent.hex(),
                None if gone else decision.standing,
                decision.deciding.by if decision.deciding and not gone else None,
                taint_words(gone[-1], "it") if gone else decision.reason,
                bool(gone),
            )
        )
    return tuple(sorted(found, key=lambda row: (row.at, row.id), reverse=True))


@dataclass(frozen=True)
class GateVolts:
    """One gate of a state: volts at the gate and at its source, V; None where unknown."""

    gate: str
    role: str
    at_gate: float | None
    at_source: float | None
    line: str | None

    def to_json(self) -> dict[str, Any]:
        """All members."""
        return {
            "gate": self.gate,
            "role": self.role,
            "at_gate": self.at_gate,
            "at_source": self.at_source,
            "line": self.line,
        }


@dataclass(frozen=True)
class MeasurementRow:
    """One measurement taken in the state; ``sha256`` of its file."""

    id: str
    at: int
    kind: str | None
    file_name: str
    sha256: str
    withdrawn: bool

    def to_json(self) -> dict[str, Any]:
        """All members; the time as text."""
        return {
            "id": self.id,
            "at": format_instant(self.at),
            "kind": self.kind,
            "file_name": self.file_name,
            "file": self.sha256,
            "withdrawn": self.withdrawn,
        }


@dataclass(frozen=True)
class TuningPage:
    """All that is known about one state."""

    device: str
    state: State
    cooldown: str | None
    stretch: str | None
    parent: str | None
    gates: tuple[GateVolts, ...]
    decision: Decision
    judgements: tuple[Judgement, ...]
    freshness: Freshness
    parameters: tuple[Point, ...]
    measurements: tuple[MeasurementRow, ...]
    withdrawn: str | None

    def to_json(self) -> dict[str, Any]:
        """The page as one document; volts in V at both levels."""
        deciding = self.decision.deciding
        return {
            "id": self.state.hex,
            "device": self.device,
            "cooldown": self.cooldown,
            "stretch": self.stretch,
            "at": self.state.time,
            "time_guessed": self.state.at is None,
            "level": self.state.level,
            "parent": self.parent,
            "purpose": self.state.purpose,
            "sites": list(self.state.sites),
            "occupation": dict(self.state.occupation),
            "settings": dict(self.state.settings),
            "gates": [gate.to_json() for gate in self.gates],
            "standing": self.decision.standing,
            "by": deciding.by if deciding else None,
            "reason": self.decision.reason,
            "judgements": [judgement.to_json() for judgement in self.judgements],
            "freshness": str(self.freshness),
            "parameters": [point.to_json() for point in self.parameters],
            "measurements": [row.to_json() for row in self.measurements],
            "withdrawn": self.withdrawn,
        }


def show_tuning(reg: Registry, tuning: str) -> TuningPage:
    """One state with volts at gate and source, standing, freshness, values and files.

    Args:
        reg: an open registry.
        tuning: id, ``latest``, ``previous`` or CHIP/NAME:latest.

    Raises:
        LookupFailed: no such state.
    """
    with reg.reading() as connection:
        no = find_tuning(connection, tuning).no
        state = load_states(connection, (no,))[no]
        body = body_of(connection, state.device_no)
        around = surroundings_of(connection, body)
        found, gone = load_judgements(connection, (state,))
        judgements, taints = found.get(no, ()), gone.get(no, ())
        stay, stretch = body.stay(state.cooldown_no), around.history.stretch_at(state.moment)
        return TuningPage(
            body.name,
            state,
            stay.label if stay else None,
            stretch.opening if stretch else None,
            _parent(connection, state),
            _gates(state, around.wirings.at(state.cooldown_no, state.moment)),
            decide(judgements, state.purpose, Asked()),
            judgements,
            freshness(state, around),
            values_of_states(connection, around.history, (no,)).get(state.hex, ()),
            _measurements(connection, no),
            taint_words(taints[-1], "the state, or what it rests on,") if taints else None,
        )


def _parent(connection: Connection, state: State) -> str | None:
    if state.parent_no is None:
        return None
    digest: bytes = ask(connection, "SELECT digest FROM tuning WHERE no = :no", no=state.parent_no)[0].digest
    return digest.hex()


def _gates(state: State, wiring: Wiring | None) -> tuple[GateVolts, ...]:
    at_gate, at_source = volts_at_gate(state, wiring), volts_at_source(state, wiring)
    lines = {} if wiring is None else wiring.gates
    return tuple(
        GateVolts(
            gate["gate"],
            gate["role"],
            at_gate.get(gate["gate"]),
            at_source.get(gate["gate"]),
            lines[gate["gate"]].line if gate["gate"] in lines else None,
        )
        for gate in state.sheet.gates
    )


def _measurements(connection: Connection, tuning_no: int) -> tuple[MeasurementRow, ...]:
    rows = ask(
        connection,
        "SELECT m.no, m.digest, m.kind, m.moment, m.file_name, f.sha256 FROM measurement m"
        " JOIN raw_file f ON f.no = m.raw_file_no WHERE m.tuning_no = :no",
        no=tuning_no,
    )
    gone = taints_of(connection, (row.no for row in rows), ALWAYS)
    found = (
        MeasurementRow(row.digest.hex(), row.moment, row.kind, row.file_name, row.sha256, row.no in gone)
        for row in rows
    )
    return tuple(sorted(found, key=lambda row: (row.at, row.id)))
