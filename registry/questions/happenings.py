"""Which dated events touch a device, withdrawn ones left out."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import cached_property

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, AnyRow, ask_among, from_json, spoken
from registry.questions.currency import Marks, marks_of
from registry.questions.devices import Body
from registry.records.events import EVENTS, Effect, effect_of, ends_cooldown
from registry.records.instants import format_instant

__all__ = ["Happening", "event_rows", "events_from", "happenings"]


@dataclass(frozen=True)
class Happening:
    """One event as it stands now.

    Attributes:
        at, until: microseconds; ``until`` None for a moment.
        gate, site: what it touched, None for the whole device.
        volts, details: as given with it.
    """

    no: int
    digest: bytes
    cooldown_no: int
    event: str
    at: int
    until: int | None = None
    kelvin: float | None = None
    gate: str | None = None
    site: str | None = None
    volts: Mapping[str, float] = field(default_factory=dict)
    details: Mapping[str, object] = field(default_factory=dict)
    note: str | None = None

    @cached_property
    def effect(self) -> Effect:
        """What it does to the states before it, its temperature considered."""
        return effect_of(self.event, self.kelvin)

    @property
    def warms_to_room(self) -> bool:
        """Whether it closes its cooldown."""
        return ends_cooldown(self.event, self.kelvin)

    @property
    def stresses_one_gate(self) -> bool:
        """Whether only the history of one gate is cut by it."""
        return self.event == "gate-stress" and self.gate is not None

    @property
    def loses_volts(self) -> bool:
        """Whether the present volts are unknown after it."""
        return self.event in EVENTS and EVENTS[self.event].loses_volts

    @property
    def asks_health(self) -> bool:
        """Whether gates should be checked after it."""
        return self.event in EVENTS and EVENTS[self.event].asks_health

    @property
    def words(self) -> str:
        """The event in words: kind, what it touched, time."""
        kelvin = "" if self.kelvin is None else f" to {self.kelvin:g} K"
        touched = "".join(f" of {name}" for name in (self.gate, self.site) if name)
        return f"{self.event}{kelvin}{touched} at {spoken(self.at)}"

    def to_json(self) -> dict[str, object]:
        """Id, kind, effect and time; what else is known."""
        values: dict[str, object] = {
            "id": self.digest.hex(),
            "event": self.event,
            "effect": self.effect,
            "at": format_instant(self.at),
            "until": None if self.until is None else format_instant(self.until),
            "kelvin": self.kelvin,
            "gate": self.gate,
            "site": self.site,
            "note": self.note,
        }
        return values


def event_rows(connection: Connection, body: Body, as_of: int = ALWAYS) -> list[AnyRow]:
    """Stored events of the device's cooldowns that touch it, withdrawn ones too."""
    rows = ask_among(
        connection,
        "SELECT no, digest, cooldown_no, device_no, event, at, until, kelvin, gate, site, volts,"
        " details, note FROM event WHERE cooldown_no IN :nos AND at <= :as_of",
        (stay.no for stay in body.stays),
        as_of=as_of,
    )
    return [row for row in rows if row.device_no is None or row.device_no in body.nos]


def events_from(rows: Iterable[AnyRow], marks: Marks) -> tuple[Happening, ...]:
    """Events that stand, oldest first (pure)."""
    kept = [
        Happening(
            row.no,
            bytes(row.digest),
            row.cooldown_no,
            row.event,
            row.at,
            row.until,
            row.kelvin,
            row.gate,
            row.site,
            from_json(row.volts, {}),
            from_json(row.details, {}),
            marks.text(row.no, "note", row.note),
        )
        for row in rows
        if marks.sound(row.no)
    ]
    return tuple(sorted(kept, key=lambda event: (event.at, event.digest)))


def happenings(connection: Connection, body: Body, as_of: int = ALWAYS) -> tuple[Happening, ...]:
    """All events of the device's cooldowns that touch it, oldest first."""
    rows = event_rows(connection, body, as_of)
    return events_from(rows, marks_of(connection, (row.no for row in rows), as_of))
