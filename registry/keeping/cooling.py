"""How cooldowns, what happens in them, and their wiring enter the registry."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.cooldowns import refuse_outside, span_of
from registry.keeping.currency import heads, wiring_in_force
from registry.keeping.handle import Registry
from registry.keeping.naming import (
    Found,
    amended,
    device_name,
    find_chip,
    find_cooldown,
    find_device,
    open_cooldown,
)
from registry.keeping.sheets_in_force import gates_of
from registry.keeping.wirings import devices_in, lines_content
from registry.keeping.writing import Kept, LinkTarget, Writer, refuse_future
from registry.records.descriptions import Line, check_name
from registry.records.events import EVENTS
from registry.records.values import normal_float

__all__ = ["begin_cooldown", "mark_event", "revise_wiring"]


def begin_cooldown(
    registry: Registry,
    label: str,
    *,
    cryostat: str,
    chips: Sequence[str],
    wiring: Sequence[Line] | None = None,
    board: str | None = None,
    at: int | None = None,
) -> Kept:
    """Record the beginning of a cooldown; a chip's earlier open cooldown ends with it.

    Raises:
        InputError: no chip, a time in the future, a label that the chip has used, or
            lines to unknown gates.
    """
    if not chips:
        raise InputError(
            "a cooldown needs a chip", where=label, remedy="give --chip CHIP for each chip in it"
        )
    with registry.writing() as writer:
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, label)
        found = [find_chip(writer.connection, chip) for chip in chips]
        notes = _closed(writer.connection, found, moment)
        kept = writer.keep(
            "cooldown",
            links={"chips": [chip.no for chip in found]},
            label=check_name(label, "cooldown label"),
            cryostat=cryostat,
            board=board,
            at=moment,
        )
        if kept.new:
            _refuse_used_label(writer.connection, kept, label, found)
        if wiring:
            _keep_wiring(writer, kept.no, wiring, since=None, after=[], why=None, at=moment, where=label)
        return replace(kept, notes=notes) if kept.new else kept


def mark_event(
    registry: Registry,
    cooldown: str,
    event: str,
    *,
    at: int | None = None,
    until: int | None = None,
    kelvin: float | None = None,
    device: str | None = None,
    gate: str | None = None,
    site: str | None = None,
    volts: Mapping[str, float] | None = None,
    details: Mapping[str, Any] | None = None,
    note: str | None = None,
) -> Kept:
    """Record a dated thing that happened in a cooldown (``millikeep events`` lists the kinds).

    Raises:
        InputError: unknown kind, something missing that the kind needs, unknown device,
            gate or site, a time before the cooldown or in the future.
    """
    kind = EVENTS.get(event)
    if kind is None:
        raise InputError(
            f"the event {event!r} is unknown", where=cooldown, remedy=f"write {', '.join(EVENTS)}"
        )
    given = {"kelvin": kelvin, "gate": gate, "site": site, "volts": volts, "note": note}
    missing = [name for name in kind.needs if given[name] in (None, "", {})]
    if missing:
        raise InputError(
            f"{event} needs {' and '.join(missing)}", where=cooldown, remedy=f"give --{missing[0]} with it"
        )
    with registry.writing() as writer:
        connection = writer.connection
        found = find_cooldown(connection, cooldown)
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, cooldown)
        refuse_outside(span_of(connection, found.no), moment)
        if until is not None:
            refuse_future(until, writer.entered, "--until")
        if until is not None and until < moment:
            raise InputError("it ends before it begins", where=event, remedy="give --until after --at")
        if kelvin is not None and normal_float(kelvin, "kelvin") < 0:
            raise InputError(
                f"{kelvin} K is below zero", where=event, remedy="give the temperature in kelvin"
            )
        target = _event_device(connection, found, device, gate, site, volts)
        return writer.keep(
            "event",
            links={"cooldown": found.no, "device": target.no if target else None},
            event=event,
            at=moment,
            until=until,
            kelvin=kelvin,
            gate=gate,
            site=site,
            volts=volts,
            details=details,
            note=note,
        )


def revise_wiring(
    registry: Registry,
    cooldown: str,
    lines: Sequence[Line],
    *,
    since: int | None = None,
    correct: bool = False,
    why: str,
    at: int | None = None,
) -> Kept:
    """Record another wiring of a cooldown.

    Args:
        registry: open for writing.
        cooldown: label or id; lines: the whole wiring, not only what changed.
        since: it is in force from this moment (a rewiring); correct: the wiring in force
            at ``since`` (or from the beginning) was written down wrongly and is replaced.
        why: reason; at: time of the act.

    Raises:
        InputError: neither or (for a rewiring) no ``since``; times outside the cooldown.
    """
    if since is None and not correct:
        raise InputError(
            "is it a new wiring or a correction?",
            where=cooldown,
            remedy="give --since TIME for a rewiring, or --correct for a slip of the pen",
        )
    with registry.writing() as writer:
        connection = writer.connection
        found = find_cooldown(connection, cooldown)
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, cooldown)
        if since is not None:
            refuse_future(since, writer.entered, "--since")
            refuse_outside(span_of(connection, found.no), since)
        after: list[int] = []
        if correct:
            after, since = _corrected(connection, found, since)
        return _keep_wiring(
            writer, found.no, lines, since=since, after=after, why=why, at=moment, where=cooldown
        )


# --- helpers ---------------------------------------------------------------------------


def _refuse_used_label(connection: Connection, kept: Kept, label: str, chips: Sequence[Found]) -> None:
    for chip in chips:
        rows = connection.execute(
            text(
                """SELECT 1 FROM cooldown c JOIN link l ON l.record_no = c.no
                WHERE l.role = 'chips' AND l.target_no = :chip AND c.no <> :no AND c.label = :label"""
            ),
            {"chip": chip.no, "no": kept.no, "label": label},
        ).all()
        if rows:
            raise InputError(
                f"the chip has been in a cooldown {label!r} before",
                where="cooldown begin",
                remedy="choose another label; nothing was recorded",
            )


def _closed(connection: Connection, chips: Sequence[Found], at: int) -> tuple[str, ...]:
    """Sentences about cooldowns that this beginning closes."""
    notes = []
    for chip in chips:
        found = open_cooldown(connection, chip.no, at)
        if found is None:
            continue
        row = connection.execute(
            text("SELECT label, at FROM cooldown WHERE no = :no"), {"no": found.no}
        ).one()
        if row.at < at:
            label = connection.execute(
                text("SELECT label FROM chip WHERE no = :no"), {"no": chip.no}
            ).scalar_one()
            name = amended(connection, chip.no, "label") or label
            notes.append(f"cooldown {row.label} was still open; for {name} it ends with this beginning")
    return tuple(notes)


def _event_device(
    connection: Connection,
    cooldown: Found,
    device: str | None,
    gate: str | None,
    site: str | None,
    volts: Mapping[str, float] | None,
) -> Found | None:
    """The device that an event concerns; gates and sites must be its."""
    inside = devices_in(connection, cooldown.no)
    named = [name for name in (gate, *(volts or {})) if name is not None]
    if device is not None:
        target = find_device(connection, device)
        if target.no not in [other.no for other in inside]:
            raise InputError(
                f"{device} is not in this cooldown",
                where="--device",
                remedy="in it: " + ", ".join(device_name(connection, other.no) for other in inside),
            )
    elif named or site:
        if len(inside) != 1:
            raise InputError(
                "which device's gate or site is it?",
                where="--device",
                remedy="say --device: " + ", ".join(device_name(connection, other.no) for other in inside),
            )
        target = inside[0]
    else:
        return None
    sheet = gates_of(connection, target.no)
    for name in named:
        sheet.require_gate(name, device_name(connection, target.no))
    if site is not None:
        sheet.require_site(site, device_name(connection, target.no))
    return target


def _corrected(connection: Connection, cooldown: Found, since: int | None) -> tuple[list[int], int | None]:
    """The wirings that a correction replaces, and the ``since`` it keeps."""
    present = wiring_in_force(connection, cooldown.no, 2**62 if since is None else since)
    if present is None:
        return [], since
    kept_since = connection.execute(
        text("SELECT since FROM wiring WHERE no = :no"), {"no": present}
    ).scalar_one()
    same = "x.since IS NULL" if kept_since is None else "x.since = :since"
    values = {"cooldown": cooldown.no} | ({} if kept_since is None else {"since": kept_since})
    return heads(connection, "wiring", f"x.cooldown_no = :cooldown AND {same}", values), kept_since


def _keep_wiring(
    writer: Writer,
    cooldown_no: int,
    lines: Sequence[Line],
    *,
    since: int | None,
    after: Sequence[int],
    why: str | None,
    at: int,
    where: str,
) -> Kept:
    content, devices = lines_content(
        writer.connection, devices_in(writer.connection, cooldown_no), lines, where
    )
    links: dict[str, LinkTarget] = {"cooldown": cooldown_no, "devices": devices}
    again = writer.same_act("wiring", links, at=at, lines=content, since=since, why=why)
    if again is not None:
        return again
    return writer.keep(
        "wiring", links=links | {"after": list(after)}, lines=content, since=since, why=why, at=at
    )
