"""When which chip was cold in the demo laboratory's year, and what happened to it.

Times are UTC.  A stretch ends at a reset; only the night power cut ends one inside a
cooldown.  Everything in here is made up.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Literal

__all__ = [
    "CODE_CHANGE",
    "EVENTS",
    "LEAK_SEEN",
    "REWIRED",
    "STAYS",
    "STRETCHES",
    "YEAR_END",
    "Event",
    "Health",
    "Stay",
    "Stretch",
    "gate_findings",
]


def _at(text: str) -> datetime:
    return datetime.fromisoformat(text).replace(tzinfo=UTC)


# From here on peaks are fitted by the program's own methods, before by an old script.
CODE_CHANGE = _at("2026-03-01 00:00")
# The plungers of brook-3/ferry get other dividers.
REWIRED = _at("2026-05-08 14:20")
# Gate P3 of brook-3/copse is found to leak.
LEAK_SEEN = _at("2026-07-14 10:30")
YEAR_END = _at("2026-09-30 18:00")


@dataclass(frozen=True)
class Stay:
    """One cooldown of one chip."""

    label: str
    chip: str
    cryostat: str
    board: str
    begin: datetime


@dataclass(frozen=True)
class Stretch:
    """A cold stretch, from base temperature to the next reset (None: still cold).

    ``tuned`` names the devices that were brought to their working point in it.
    """

    name: str
    cooldown: str
    chip: str
    reset: Literal["full", "partial"]
    base: datetime
    end: datetime | None
    tuned: tuple[str, ...]


@dataclass(frozen=True)
class Event:
    """A dated thing that happened; ``shift`` in V belongs to a charge jump."""

    cooldown: str
    kind: str
    at: datetime
    until: datetime | None = None
    kelvin: float | None = None
    device: str | None = None
    gate: str | None = None
    site: str | None = None
    shift: float | None = None
    note: str = ""


@dataclass(frozen=True)
class Health:
    """A dated finding on one gate."""

    device: str
    gate: str
    health: str
    at: datetime
    above_v: float | None = None
    note: str = ""


_COLD_BOX = "Oriole"
_DIPPER = "Bittern"

STAYS = (
    Stay("B1", "brook-3", _COLD_BOX, "board 12", _at("2025-10-06 09:00")),
    Stay("H1", "heath-7", _DIPPER, "board 5", _at("2025-11-17 08:30")),
    Stay("B2", "brook-3", _COLD_BOX, "board 12", _at("2025-12-01 09:15")),
    Stay("H2", "heath-7", _DIPPER, "board 5", _at("2026-01-26 08:40")),
    Stay("B3", "brook-3", _COLD_BOX, "board 12", _at("2026-02-16 09:00")),
    Stay("H3", "heath-7", _DIPPER, "board 5", _at("2026-03-30 08:30")),
    Stay("B4", "brook-3", _COLD_BOX, "board 14", _at("2026-04-20 09:30")),
    Stay("B5", "brook-3", _COLD_BOX, "board 14", _at("2026-06-29 09:10")),
    Stay("H4", "heath-7", _DIPPER, "board 5", _at("2026-08-10 08:30")),
    Stay("B6", "brook-3", _COLD_BOX, "board 14", _at("2026-08-31 09:00")),
)

_ALL_BROOK = ("ferry", "copse", "stile")


def _brook(name: str, base: str, end: str | None, *, reset: Literal["full", "partial"] = "full") -> Stretch:
    """One stretch of brook-3; the last one has only its simplest device tuned so far."""
    tuned = _ALL_BROOK if end is not None else ("stile",)
    return Stretch(name, name[:2], "brook-3", reset, _at(base), None if end is None else _at(end), tuned)


def _heath(name: str, base: str, end: str) -> Stretch:
    return Stretch(name, name, "heath-7", "full", _at(base), _at(end), ("kiln",))


STRETCHES = (
    _brook("B1", "2025-10-08 07:00", "2025-11-10 08:00"),
    _heath("H1", "2025-11-18 06:00", "2025-11-28 16:00"),
    _brook("B2a", "2025-12-03 07:30", "2025-12-20 02:40"),
    _brook("B2b", "2025-12-21 11:00", "2026-01-19 08:00", reset="partial"),
    _heath("H2", "2026-01-27 06:00", "2026-02-06 16:00"),
    _brook("B3", "2026-02-18 07:00", "2026-03-23 08:00"),
    _heath("H3", "2026-03-31 06:00", "2026-04-10 16:00"),
    _brook("B4", "2026-04-22 07:30", "2026-05-29 08:00"),
    _brook("B5", "2026-07-01 07:10", "2026-08-03 08:00"),
    _heath("H4", "2026-08-11 06:00", "2026-08-24 16:00"),
    _brook("B6", "2026-09-02 07:00", None),
)

_SPECIAL = (
    Event(
        "B2",
        "power-loss",
        _at("2025-12-20 02:40"),
        until=_at("2025-12-20 06:10"),
        kelvin=85.0,
        note="street power gone in the night",
    ),
    Event("H3", "charge-jump", _at("2026-04-05 03:12"), device="kiln", site="D1", shift=2.1e-3),
    Event("B4", "rewired", REWIRED, device="ferry", note="plunger lines moved to the 5:1 dividers"),
)


def _regular_events() -> list[Event]:
    events = []
    for stretch in STRETCHES:
        events.append(Event(stretch.cooldown, "base-reached", stretch.base))
        if stretch.end is not None and not any(e.at == stretch.end for e in _SPECIAL):
            events.append(Event(stretch.cooldown, "warm-up", stretch.end))
    return events


EVENTS = tuple(sorted([*_SPECIAL, *_regular_events()], key=lambda event: event.at))


def gate_findings() -> tuple[Health, ...]:
    """What was found about single gates in the year."""
    return (Health("copse", "P3", "leaky", LEAK_SEEN, above_v=1.30, note="gate current grows"),)
