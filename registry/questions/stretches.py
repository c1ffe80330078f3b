"""Which cold stretches a device had: from what event to what event, in which cooldown.

A stretch begins with its cooldown, after every event that resets or partly resets the
device, and at base after a warming; it ends where the next such event, or the cooldown,
ends it.  A jump does not end a stretch.  An event that stresses one gate cuts the history
of that gate alone.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, spoken
from registry.questions.devices import Body, Stay
from registry.questions.happenings import Happening, happenings
from registry.records.instants import format_instant

__all__ = ["History", "Stretch", "cooldown_end", "cut", "history_of"]


@dataclass(frozen=True)
class Stretch:
    """One cold stretch.

    Attributes:
        number: counted from 1 over the device's life.
        begins, ends: microseconds; ``ends`` None while it lasts.  A moment belongs to the
            stretch when begins <= moment < ends.
        opened_by: the event it began with, None for the cooldown's begin.
        closed_by: the event that ended it; None while it lasts, or where the next
            cooldown's begin ended it.
        partial: it began with a partial reset of the stretch before it.
    """

    number: int
    stay: Stay
    begins: int
    ends: int | None = None
    opened_by: Happening | None = None
    closed_by: Happening | None = None
    partial: bool = False

    def holds(self, moment: int) -> bool:
        """Whether the moment lies in it."""
        return self.begins <= moment and (self.ends is None or moment < self.ends)

    @property
    def opening(self) -> str:
        """What it began with, in words."""
        if self.opened_by is None:
            return f"begin of cooldown {self.stay.label} at {spoken(self.stay.at)}"
        return self.opened_by.words

    def to_json(self) -> dict[str, object]:
        """Number, cooldown, begin, end and what opened and closed it."""
        return {
            "number": self.number,
            "cooldown": self.stay.label,
            "begins": format_instant(self.begins),
            "ends": None if self.ends is None else format_instant(self.ends),
            "opened_by": self.opening,
            "closed_by": None if self.closed_by is None else self.closed_by.words,
            "reset": "partial" if self.partial else "full",
        }


@dataclass(frozen=True)
class History:
    """Thermal life of a device: its events and stretches, oldest first."""

    body: Body
    events: tuple[Happening, ...]
    stretches: tuple[Stretch, ...]

    def stretch_at(self, moment: int) -> Stretch | None:
        """The stretch a moment lies in, None where the device was warm."""
        place = bisect_right(self.stretches, moment, key=lambda stretch: stretch.begins) - 1
        if place < 0 or not self.stretches[place].holds(moment):
            return None
        return self.stretches[place]

    def of_gate(self, gate: str) -> tuple[Stretch, ...]:
        """Stretches as one gate knows them: stress on it cuts them further."""
        return cut(self.body.stays, self.events, gate=gate)


def history_of(connection: Connection, body: Body, as_of: int = ALWAYS) -> History:
    """Load the events of a device and cut its life into stretches."""
    events = happenings(connection, body, as_of)
    return History(body, events, cut(body.stays, events))


def cooldown_end(
    stay: Stay, stays: Sequence[Stay], events: Iterable[Happening]
) -> tuple[int | None, Happening | None]:
    """When a cooldown ended and by which event (None: the next begin closed it)."""
    ends: list[tuple[int, Happening | None]] = [
        (event.at, event) for event in events if event.cooldown_no == stay.no and event.warms_to_room
    ]
    ends += [(later.at, None) for later in stays if (later.at, later.digest) > (stay.at, stay.digest)]
    if not ends:
        return None, None
    return min(ends, key=lambda end: (end[0], end[1] is None))


def cut(
    stays: Sequence[Stay], events: Sequence[Happening], *, gate: str | None = None
) -> tuple[Stretch, ...]:
    """Cold stretches of all stays, oldest first (pure).

    Args:
        stays: the device's cooldowns, oldest first.
        events: those that touch the device, oldest first.
        gate: also cut at stress on this gate.
    """
    found: list[Stretch] = []
    for stay in stays:
        end, ender = cooldown_end(stay, stays, events)
        inside = [
            event
            for event in events
            if event.cooldown_no == stay.no
            and event.at >= stay.at
            and (end is None or event.at < end)
            and (not event.stresses_one_gate or event.gate == gate)
        ]
        found.extend(_cut_stay(stay, inside, end, ender))
    return tuple(replace(stretch, number=number) for number, stretch in enumerate(found, 1))


def _cut_stay(
    stay: Stay, events: Sequence[Happening], end: int | None, ender: Happening | None
) -> Iterable[Stretch]:
    """Stretches of one stay; a stretch that would hold no moment is left out."""
    done: list[Stretch] = []
    current: Stretch | None = Stretch(0, stay, stay.at)
    warmed_fully = True

    def close(at: int, by: Happening | None) -> None:
        if current is not None and current.begins < at:
            done.append(replace(current, ends=at, closed_by=by))

    for event in events:
        if event.effect == "begins" and current is None:
            current = Stretch(0, stay, event.at, opened_by=event, partial=not warmed_fully)
        if event.effect not in ("resets", "partly-resets"):
            continue
        full = event.effect == "resets"
        close(event.at, event)
        # Two resets with nothing cold between them are as strong as the stronger one.
        empty = current is None or current.begins >= event.at
        warmed_fully = full or (empty and warmed_fully)
        stays_warm = event.event == "warm-up" and event.until is None
        cold_again = event.at if event.until is None else event.until
        current = None if stays_warm else Stretch(0, stay, cold_again, None, event, None, not warmed_fully)
    if end is None:
        return [*done, current] if current is not None else done
    close(end, ender)
    return done
