"""When a cooldown began and ended, and in which one a moment lies."""

from __future__ import annotations

from dataclasses import dataclass

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.naming import NOT_WITHDRAWN, Found, find_cooldown, open_cooldown
from registry.records.events import ends_cooldown
from registry.records.instants import format_instant

__all__ = ["CooldownSpan", "cooldown_at", "refuse_outside", "span_of"]


@dataclass(frozen=True)
class CooldownSpan:
    """A cooldown's life.

    Attributes:
        began, ended: microseconds UTC; ``ended`` None while it is open.
        ended_by: in words (``warm-up``, ``cooldown C7 began``), None while open.
    """

    no: int
    label: str
    began: int
    ended: int | None
    ended_by: str | None


def span_of(connection: Connection, cooldown_no: int, chip_no: int | None = None) -> CooldownSpan:
    """The life of a cooldown: to its warm-up to room temperature or its chip's next one.

    Args:
        connection: open for reading.
        cooldown_no: its key.
        chip_no: the chip it is asked for; None asks for the cooldown as a whole, which
            lasts until the last of its chips has gone on to another.
    """
    row = connection.execute(text("SELECT label, at FROM cooldown WHERE no = :no"), {"no": cooldown_no}).one()
    warm = connection.execute(
        text(
            f"""SELECT at, kelvin FROM event e WHERE cooldown_no = :no AND event = 'warm-up'
            AND {NOT_WITHDRAWN.format(no="e.no")} ORDER BY at, no"""
        ),
        {"no": cooldown_no},
    ).all()
    ends = [(event.at, "warm-up") for event in warm if ends_cooldown("warm-up", event.kelvin)]
    chips = [chip_no] if chip_no is not None else _chips_of(connection, cooldown_no)
    left = [_next_of(connection, chip, row.at) for chip in chips]
    gone = [following for following in left if following is not None]
    if gone and len(gone) == len(left):
        ends.append(max(gone))
    ended, ended_by = min(ends, default=(None, None))
    return CooldownSpan(cooldown_no, row.label, row.at, ended, ended_by)


def _chips_of(connection: Connection, cooldown_no: int) -> list[int]:
    return list(
        connection.execute(
            text("SELECT target_no FROM link WHERE record_no = :no AND role = 'chips'"), {"no": cooldown_no}
        ).scalars()
    )


def _next_of(connection: Connection, chip_no: int, after: int) -> tuple[int, str] | None:
    """When the chip's next cooldown began, in words too; None if there is none."""
    row = connection.execute(
        text(
            f"""SELECT c.at, c.label FROM cooldown c JOIN link l ON l.record_no = c.no AND l.role = 'chips'
            WHERE c.at > :after AND {NOT_WITHDRAWN.format(no="c.no")} AND l.target_no = :chip
            ORDER BY c.at, c.no LIMIT 1"""
        ),
        {"chip": chip_no, "after": after},
    ).first()
    return None if row is None else (row.at, f"cooldown {row.label} began")


def cooldown_at(connection: Connection, device: Found, typed: str | None, at: int) -> CooldownSpan:
    """The cooldown named, or the one that the device's chip is in at the moment.

    Raises:
        InputError: none is open then, or the moment lies outside the one named.
    """
    chip = connection.execute(
        text("SELECT chip_no FROM device WHERE no = :no"), {"no": device.no}
    ).scalar_one()
    if typed is None:
        found = open_cooldown(connection, chip, at)
        if found is None:
            raise InputError(
                f"no cooldown of the chip is open at {format_instant(at)}",
                where="cooldown",
                remedy="name one with --cooldown, or begin one with 'millikeep cooldown begin'",
            )
    else:
        found = find_cooldown(connection, typed, device)
    span = span_of(connection, found.no, chip)
    refuse_outside(span, at)
    return span


def refuse_outside(span: CooldownSpan, at: int) -> None:
    """Refuse a moment before a cooldown began or after it ended.

    Raises:
        InputError: with both times, and what ended it.
    """
    if at < span.began:
        raise InputError(
            f"{format_instant(at)} lies before cooldown {span.label} began ({format_instant(span.began)})",
            where="time",
            remedy="check the time and the cooldown; nothing was recorded",
        )
    if span.ended is not None and at > span.ended:
        raise InputError(
            f"{format_instant(at)} lies after the end of cooldown {span.label} "
            f"({format_instant(span.ended)}, {span.ended_by})",
            where="time",
            remedy="check the time and the cooldown; nothing was recorded",
        )
