"""Which finding on each gate of a device is the present one."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, AnyRow, ask_among, spoken
from registry.questions.currency import Marks
from registry.questions.devices import Body
from registry.records.events import LOST_HEALTH
from registry.records.instants import format_instant

__all__ = ["Finding", "finding_rows", "findings_from", "lost_gates", "present"]


@dataclass(frozen=True)
class Finding:
    """One dated finding on one gate; ``above_v`` in V, ``at`` in microseconds."""

    digest: bytes
    gate: str
    health: str
    to_gate: str | None
    above_v: float | None
    at: int
    note: str | None
    person: str

    @property
    def words(self) -> str:
        """The finding in words: gate, health, time."""
        to_gate = f" to {self.to_gate}" if self.to_gate else ""
        above = f" above {self.above_v:g} V" if self.above_v is not None else ""
        return f"gate {self.gate} {self.health}{to_gate}{above} at {spoken(self.at)}"

    def to_json(self) -> dict[str, object]:
        """Gate, health, since when and by whom."""
        return {
            "gate": self.gate,
            "health": self.health,
            "to_gate": self.to_gate,
            "above_v": self.above_v,
            "since": format_instant(self.at),
            "by": self.person,
            "note": self.note,
        }


def finding_rows(connection: Connection, body: Body, as_of: int = ALWAYS) -> list[AnyRow]:
    """Stored findings on the device's gates, withdrawn ones too."""
    return ask_among(
        connection,
        "SELECT g.no, g.digest, g.gate, g.health, g.to_gate, g.above_v, g.at, g.note, r.person"
        " FROM gate_health g JOIN record r ON r.no = g.no WHERE g.device_no IN :nos AND g.at <= :as_of",
        body.nos,
        as_of=as_of,
    )


def findings_from(rows: Iterable[AnyRow], marks: Marks) -> tuple[Finding, ...]:
    """Findings that stand, oldest first (pure)."""
    kept = (
        Finding(
            bytes(row.digest),
            row.gate,
            row.health,
            row.to_gate,
            row.above_v,
            row.at,
            marks.text(row.no, "note", row.note),
            row.person,
        )
        for row in rows
        if marks.sound(row.no)
    )
    return tuple(sorted(kept, key=lambda finding: (finding.at, finding.digest)))


def present(found: tuple[Finding, ...]) -> dict[str, Finding]:
    """The latest finding on each gate, by gate name (pure)."""
    return {finding.gate: finding for finding in found}


def lost_gates(latest: Mapping[str, Finding]) -> dict[str, Finding]:
    """Gates that no longer do what a state asks of them, with the finding that says so.

    A gate shorted to another loses both, unless the other was found ok since.
    """
    lost: dict[str, Finding] = {}
    for finding in sorted(latest.values(), key=lambda f: (f.at, f.digest)):
        if finding.health not in LOST_HEALTH:
            continue
        lost[finding.gate] = finding
        other = finding.to_gate
        if other and (other not in latest or latest[other].at <= finding.at):
            lost.setdefault(other, finding)
    return lost
