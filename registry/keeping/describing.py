"""How chips, devices, cooldowns and what happens to them enter the registry."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.changing import amend_on
from registry.keeping.cooldowns import refuse_outside, span_of
from registry.keeping.currency import gate_sheet_in_force, heads, wiring_in_force
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
from registry.keeping.sheets_in_force import gates_of, sheet_content
from registry.keeping.wirings import devices_in, lines_content
from registry.keeping.writing import Kept, LinkTarget, Writer, refuse_future
from registry.records.descriptions import Gate, Line, PairLimit, Site, check_name
from registry.records.events import EVENTS
from registry.records.quantities import QUANTITIES, VALID_UNTIL
from registry.records.values import normal_float

__all__ = [
    "HEALTH",
    "add_chip",
    "add_device",
    "add_quantity",
    "begin_cooldown",
    "mark_event",
    "mark_gate",
    "revise_device",
    "revise_wiring",
]

HEALTH = ("ok", "leaky", "shorted", "floating", "grounded", "no-response")


def add_chip(
    registry: Registry,
    label: str,
    *,
    wafer: str | None = None,
    lot: str | None = None,
    die: str | None = None,
    material: str | None = None,
    note: str | None = None,
    at: int | None = None,
) -> Kept:
    """Record a chip.

    Wafer, lot, die and label are its identity; material and note can be amended later.

    Raises:
        InputError: the chip is there already with another material or note.
    """
    with registry.writing() as writer:
        kept = writer.keep("chip", label=check_name(label, "chip label"), wafer=wafer, lot=lot, die=die)
        for field, value in (("material", material), ("note", note)):
            _describe(writer, kept, field, value, at)
        return kept


def add_device(
    registry: Registry,
    device: str,
    *,
    gates: Sequence[Gate],
    sites: Sequence[Site] = (),
    pairs: Sequence[PairLimit] = (),
    family: str | None = None,
    at: int | None = None,
) -> Kept:
    """Record a device and its first gate sheet.

    Args:
        registry: open for writing.
        device: CHIP/NAME; the chip must be on record.
        gates: all electrodes, ohmic contacts too; their order is the order of volts.
        sites: dots, sensors and reservoirs; pairs: limits between two gates.
        family: devices of one family share what is learnt about their shifts.
        at: microseconds UTC; None means now.

    Raises:
        InputError: no such form of name, no gates, sites or pairs of unknown gates, or
            the device is there with another gate sheet (``revise_device`` changes it).
    """
    chip_text, slash, name = device.rpartition("/")
    if not slash:
        raise InputError(
            f"{device!r} does not say on which chip", where="device", remedy="write CHIP/NAME, as in K7/D1"
        )
    with registry.writing() as writer:
        chip = find_chip(writer.connection, chip_text)
        kept = writer.keep("device", links={"chip": chip.no}, name=check_name(name, "device name"))
        content = sheet_content(gates, sites, pairs, where=device)
        _describe(writer, kept, "family", family, at)
        if kept.new:
            moment = writer.entered if at is None else at
            refuse_future(moment, writer.entered, device)
            writer.keep("gate_sheet", links={"device": kept.no}, at=moment, **content)
        elif not _same_sheet(writer, kept.no, content):
            raise InputError(
                f"{device} is on record with another gate sheet",
                where="device add",
                remedy="change it with 'millikeep device revise'; nothing was changed",
            )
        return kept


def revise_device(
    registry: Registry,
    device: str,
    *,
    gates: Sequence[Gate] | None = None,
    sites: Sequence[Site] | None = None,
    pairs: Sequence[PairLimit] | None = None,
    why: str,
    at: int | None = None,
) -> Kept:
    """Record a new gate sheet of a device; what is not given stays as it is.

    Raises:
        InputError: nothing is given, or the sheet does not agree with itself.
    """
    with registry.writing() as writer:
        found = find_device(writer.connection, device)
        sheet = gates_of(writer.connection, found.no)
        if gates is None and sites is None and pairs is None:
            raise InputError("nothing to revise", where=device, remedy="give gates, sites or pairs")
        content = sheet_content(
            sheet.gates if gates is None else gates,
            sheet.sites if sites is None else sites,
            sheet.pairs if pairs is None else pairs,
            where=device,
        )
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, device)
        seen = heads(writer.connection, "gate_sheet", "x.device_no = :device", {"device": found.no})
        again = writer.same_act("gate_sheet", {"device": found.no}, at=moment, why=why, **content)
        if again is not None:
            return again
        return writer.keep(
            "gate_sheet", links={"device": found.no, "after": seen}, why=why, at=moment, **content
        )


def mark_gate(
    registry: Registry,
    device: str,
    gate: str,
    health: str,
    *,
    to_gate: str | None = None,
    above_v: float | None = None,
    at: int | None = None,
    note: str | None = None,
) -> Kept:
    """Record a finding on one gate: ok, leaky above a voltage, shorted to another gate ...

    Raises:
        InputError: unknown gate or finding, ``shorted`` without the other gate, ``leaky``
            without the voltage, a time in the future.
    """
    if health not in HEALTH:
        raise InputError(
            f"the finding {health!r} is unknown", where=gate, remedy=f"write {', '.join(HEALTH)}"
        )
    if (health == "shorted") != (to_gate is not None):
        raise InputError(
            "a short needs the other gate, and nothing else does",
            where=gate,
            remedy="give --to GATE with shorted, and only with shorted",
        )
    if (health == "leaky") != (above_v is not None):
        raise InputError(
            "a leak needs the voltage above which it begins, and nothing else does",
            where=gate,
            remedy="give --above V with leaky, and only with leaky",
        )
    with registry.writing() as writer:
        found = find_device(writer.connection, device)
        sheet = gates_of(writer.connection, found.no)
        for name in (gate, to_gate):
            if name is not None:
                sheet.require_gate(name, device)
        if to_gate == gate:
            raise InputError("a gate is not shorted to itself", where=gate, remedy="name the other gate")
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, gate)
        return writer.keep(
            "gate_health",
            links={"device": found.no},
            gate=gate,
            health=health,
            to_gate=to_gate,
            above_v=above_v,
            at=moment,
            note=note,
        )


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


def add_quantity(
    registry: Registry, name: str, *, unit: str, valid_until: str, meaning: str | None = None
) -> Kept:
    """Add a quantity to the controlled list of this registry.

    Raises:
        InputError: the name is taken with another unit, the unit is unknown, or
            ``valid_until`` is not one of jump, stretch, cooldown, device.
    """
    from registry.records.units import canonical

    name = check_name(name, "quantity name")
    if name in QUANTITIES:
        raise InputError(
            f"{name} is in the controlled list already", where="quantities add", remedy="choose another name"
        )
    if valid_until not in VALID_UNTIL:
        raise InputError(
            f"{valid_until!r} is unknown", where="--valid-until", remedy=f"write {', '.join(VALID_UNTIL)}"
        )
    _, _, si_unit = canonical(unit)
    with registry.writing() as writer:
        taken = writer.connection.execute(
            text("SELECT unit FROM quantity WHERE name = :name"), {"name": name}
        ).scalars()
        if any(other != si_unit for other in taken):
            raise InputError(
                f"{name} is on record with another unit", where="quantities add", remedy="choose another name"
            )
        return writer.keep("quantity", name=name, unit=si_unit, valid_until=valid_until, meaning=meaning)


# --- helpers ---------------------------------------------------------------------------


def _describe(writer: Writer, kept: Kept, field: str, value: str | None, at: int | None) -> None:
    """Give a descriptive field its first value, as an amendment outside the identity."""
    if value is None:
        return
    present = amended(writer.connection, kept.no, field)
    if present is None:
        amend_on(writer, Found(kept.no, "", kept.digest), field, value, why="first description", at=at)
    elif present != value:
        raise InputError(
            f"it is on record with {field} {present!r}",
            where=field,
            remedy=f"change it with 'millikeep amend {kept.hex[:10]} {field}=... --why ...'",
        )


def _same_sheet(writer: Writer, device_no: int, content: Mapping[str, Any]) -> bool:
    sheet = gate_sheet_in_force(writer.connection, device_no)
    row = writer.connection.execute(
        text("SELECT gates, sites, pairs FROM gate_sheet WHERE no = :no"), {"no": sheet}
    ).one()
    from registry.records.canonical import canonical_text
    from registry.records.values import normal_json

    return all(getattr(row, name) == canonical_text(normal_json(content[name], name)) for name in content)


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
    open_ones = [open_cooldown(connection, chip.no, at) for chip in chips]
    notes = []
    for no in sorted({found.no for found in open_ones if found is not None}):
        row = connection.execute(text("SELECT label, at FROM cooldown WHERE no = :no"), {"no": no}).one()
        if row.at < at:
            notes.append(f"cooldown {row.label} was still open; it ends with this beginning")
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
