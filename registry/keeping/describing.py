"""How chips, devices, their gates' health and a laboratory's own quantities enter the registry."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import Any

from sqlalchemy import text

from registry.errors import InputError
from registry.keeping.changing import amend_on
from registry.keeping.currency import gate_sheet_in_force, heads
from registry.keeping.handle import Registry
from registry.keeping.naming import (
    Found,
    amended,
    find_chip,
    find_device,
)
from registry.keeping.sheets_in_force import gates_of, sheet_content
from registry.keeping.writing import Kept, Writer, refuse_future
from registry.records.descriptions import Gate, PairLimit, Site, check_name
from registry.records.quantities import QUANTITIES, VALID_UNTIL

__all__ = [
    "HEALTH",
    "add_chip",
    "add_device",
    "add_quantity",
    "mark_gate",
    "revise_device",
]

SNAKE_CASE = re.compile(r"[a-z][a-z0-9]*(_[a-z0-9]+)*")
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
    if not SNAKE_CASE.fullmatch(name):
        raise InputError(
            f"{name!r} is not written as quantities are",
            where="quantities add",
            remedy="use small letters, digits and single underscores, as in valley_splitting",
        )
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
