"""How a tuning state (a gate voltage set with its context) enters the registry."""

from __future__ import annotations

import difflib
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.cooldowns import cooldown_at
from registry.keeping.handle import Registry
from registry.keeping.limits import limit_violations
from registry.keeping.naming import Found, device_name, find_device, find_tuning
from registry.keeping.sheets_in_force import Sheet, gates_of, sheet_of
from registry.keeping.wirings import DeviceWiring, wiring_of
from registry.keeping.writing import Kept, Writer, refuse_future
from registry.records.units import to_si
from registry.records.values import normal_float
from registry.records.volts import unpack
from registry.samples import Level

__all__ = ["keep_tuning", "record_tuning", "revisit_tuning"]

MOST_VIOLATIONS_TOLD = 12
# The last word of a setting's name says what it is a number of; other names are free.
SETTING_UNITS = {"bias": "V", "field": "T", "temperature": "K", "frequency": "Hz"}


def record_tuning(
    registry: Registry,
    device: str,
    volts: Mapping[str, float],
    *,
    cooldown: str | None = None,
    level: Level = "gate",
    parent: str | None = None,
    purpose: str | None = None,
    sites: Sequence[str] = (),
    occupation: Mapping[str, int] | None = None,
    settings: Mapping[str, tuple[float, str]] | None = None,
    at: int | None = None,
    planned: bool = False,
) -> Kept:
    """Record a tuning state.

    Args:
        registry: open for writing.
        device: CHIP/NAME.
        volts: gate -> V; at the source level also line -> V.  Gates left out are kept as
            not recorded.
        cooldown: label; None means the one open at ``at``.
        level: where the volts were read, at the gates or at the sources.
        parent: state from which this one was made.
        purpose: free word; sites: those it is for; occupation: site -> carriers.
        settings: name -> (value, unit).
        at: microseconds UTC; None means now.
        planned: nobody has set these volts yet, so crossed limits are refused; observed
            ones are recorded with a note, because they happened.

    Returns:
        The record; its notes name every limit crossed.

    Raises:
        InputError: unknown gates, lines or sites, no number, a time outside the cooldown
            or in the future, crossed limits where planned.
    """
    with registry.writing() as writer:
        found = find_device(writer.connection, device)
        origin = _parent(writer.connection, parent, found) if parent is not None else None
        return keep_tuning(
            writer,
            found,
            volts,
            cooldown=cooldown,
            level=level,
            parent=origin,
            purpose=purpose,
            sites=sites,
            occupation=occupation,
            settings=settings,
            at=at,
            planned=planned,
        )


def keep_tuning(
    writer: Writer,
    device: Found,
    volts: Mapping[str, float],
    *,
    cooldown: str | None = None,
    level: Level = "gate",
    parent: Found | None = None,
    purpose: str | None = None,
    sites: Sequence[str] = (),
    occupation: Mapping[str, int] | None = None,
    settings: Mapping[str, tuple[float, str]] | None = None,
    at: int | None = None,
    guessed_at: int | None = None,
    raw_file: int | None = None,
    planned: bool = False,
) -> Kept:
    """``record_tuning`` inside a transaction.

    Args (beyond those):
        guessed_at: moment to sort by where the true time is not known; it stays outside
            the identity of the state.
        raw_file: key of the file that told the volts.
    """
    connection = writer.connection
    name = device_name(connection, device.no)
    moment = at if at is not None else guessed_at if guessed_at is not None else writer.entered
    refuse_future(moment, writer.entered, name)
    span = cooldown_at(connection, device, cooldown, moment)
    sheet = gates_of(connection, device.no)
    wiring = wiring_of(connection, device.no, span.no, moment)
    by_gate = _by_gate(volts, sheet, wiring, level, name)
    notes = _limit_notes(by_gate, sheet, wiring, level, name, planned=planned)
    _check_sites(sheet, [*sites, *(occupation or {})], name)
    kept = writer.keep(
        "tuning",
        links={
            "device": device.no,
            "cooldown": span.no,
            "gate_sheet": sheet.no,
            "parent": parent.no if parent is not None else None,
            "raw_file": raw_file,
        },
        level=level,
        volts=[by_gate.get(gate, math.nan) for gate in sheet.names],
        settings=_settings(settings or {}) or None,
        occupation=_occupation(occupation or {}) or None,
        purpose=purpose,
        sites=sorted(set(sites)) or None,
        at=at if at is not None or guessed_at is not None else moment,
        moment=moment,
    )
    return replace(kept, notes=notes)


def revisit_tuning(registry: Registry, tuning: str, *, at: int | None = None) -> Kept:
    """Record that the volts of a state were set again at a later time.

    The new state has the old one as parent, and its volts, settings, occupation, purpose
    and sites.

    Raises:
        InputError: the moment is not after the old state, lies outside every cooldown, or
            a gate of the old state is no longer on the gate sheet.
    """
    with registry.writing() as writer:
        connection = writer.connection
        old = find_tuning(connection, tuning)
        row = connection.execute(text("SELECT * FROM tuning WHERE no = :no"), {"no": old.no}).mappings().one()
        moment = writer.entered if at is None else at
        if moment == row["moment"] and row["parent_no"] is not None:
            # `latest` is this very revisit when it is recorded a second time.
            return Kept(old.no, old.digest, new=False)
        if moment <= row["moment"]:
            raise InputError(
                "a revisit comes after the state it revisits", where=tuning, remedy="give a later --at"
            )
        device = _found(connection, row["device_no"])
        names = sheet_of(connection, row["gate_sheet_no"]).names
        volts = {
            gate: value
            for gate, value in zip(names, unpack(row["volts"]), strict=True)
            if not math.isnan(value)
        }
        settings = json.loads(row["settings"] or "{}")
        return keep_tuning(
            writer,
            device,
            volts,
            level=row["level"],
            parent=old,
            purpose=row["purpose"],
            sites=json.loads(row["sites"] or "[]"),
            occupation=json.loads(row["occupation"] or "{}"),
            settings={name: (item["value"], item["unit"]) for name, item in settings.items()},
            at=moment,
        )


def _parent(connection: Connection, typed: str, device: Found) -> Found:
    """The parent state; one of the same device."""
    found = find_tuning(connection, typed, device)
    owner = connection.execute(
        text("SELECT device_no FROM tuning WHERE no = :no"), {"no": found.no}
    ).scalar_one()
    if owner != device.no:
        raise InputError(
            f"the parent {typed!r} is a state of {device_name(connection, owner)}",
            where=device_name(connection, device.no),
            remedy="name a state of the same device",
        )
    return found


def _by_gate(
    volts: Mapping[str, float], sheet: Sheet, wiring: DeviceWiring, level: Level, device: str
) -> dict[str, float]:
    """Volts by gate at the observed level; names of lines are resolved at the source."""
    known = set(sheet.names)
    found: dict[str, float] = {}
    faults: list[str] = []
    for name, value in volts.items():
        try:
            number = normal_float(value, f"{device}, {name}")
        except InputError as error:
            faults.append(f"{name}: {error.what}")
            continue
        gates = wiring.by_line.get(name, ()) if level == "source" else ()
        if not gates and name in known:
            gates = (name,)
        if not gates:
            pool = [*sheet.names, *wiring.by_line] if level == "source" else list(sheet.names)
            near = difflib.get_close_matches(name, pool, n=3)
            faults.append(f"there is no gate {name!r}" + (f" (nearest: {', '.join(near)})" if near else ""))
        for gate in gates:
            if found.setdefault(gate, number) != number:
                faults.append(f"{gate} is given twice, as {found[gate]} V and {number} V")
    faults += _shared_line_faults(found, wiring) if level == "source" else []
    if not found and not faults:
        faults.append("no gate has a voltage")
    if faults:
        raise InputError(
            faults[0],
            where=f"volts of {device}",
            remedy="correct the volts or the gate sheet; nothing was recorded",
            faults=tuple(faults[1:]),
        )
    return found


def _shared_line_faults(found: Mapping[str, float], wiring: DeviceWiring) -> list[str]:
    faults = []
    for line, gates in wiring.by_line.items():
        values = {found[gate] for gate in gates if gate in found and wiring.by_gate[gate].line == line}
        if len(values) > 1:
            faults.append(
                f"line {line} cannot be at {' and '.join(f'{v} V' for v in sorted(values))} at once"
            )
    return faults


def _limit_notes(
    by_gate: Mapping[str, float],
    sheet: Sheet,
    wiring: DeviceWiring,
    level: Level,
    device: str,
    *,
    planned: bool,
) -> tuple[str, ...]:
    """What limits the volts cross, in words; refused where the volts are only planned."""
    if level == "gate":
        at_gates: dict[str, float] = dict(by_gate)
    else:
        pairs = ((gate, wiring.at_gate(gate, value)) for gate, value in by_gate.items())
        at_gates = {gate: value for gate, value in pairs if value is not None}
    crossed = limit_violations(at_gates, sheet.gates, sheet.pairs)
    if crossed and planned:
        raise InputError(
            crossed[0],
            where=f"planned volts of {device}",
            remedy="stay inside the limits of the gate sheet; nothing was recorded",
            faults=tuple(crossed[1:MOST_VIOLATIONS_TOLD]),
        )
    notes = [f"recorded, but {sentence}" for sentence in crossed[:MOST_VIOLATIONS_TOLD]]
    if len(crossed) > MOST_VIOLATIONS_TOLD:
        notes.append(f"and {len(crossed) - MOST_VIOLATIONS_TOLD} more limits are crossed")
    if level == "source" and len(at_gates) < len(by_gate):
        lacking = sorted(set(by_gate) - set(at_gates))
        notes.append(f"volts at the gate are unknown without a line to {', '.join(lacking[:8])}")
    return tuple(notes)


def _check_sites(sheet: Sheet, sites: Sequence[str], device: str) -> None:
    for site in sites:
        sheet.require_site(site, device)


def _settings(settings: Mapping[str, tuple[float, str]]) -> dict[str, Any]:
    kept = {}
    for name, (value, unit) in settings.items():
        where = f"setting {name}"
        numbers, si_unit = to_si([normal_float(value, where)], unit, where=where)
        expected = SETTING_UNITS.get(name.rpartition("_")[2], si_unit)
        if si_unit != expected:
            raise InputError(f"the unit {unit!r} does not fit", where=where, remedy=f"give it in {expected}")
        kept[name] = {"value": float(numbers[0]), "unit": si_unit}
    return kept


def _occupation(occupation: Mapping[str, int]) -> dict[str, int]:
    for site, count in occupation.items():
        if isinstance(count, bool) or not isinstance(count, int) or count < 0:
            raise InputError(
                f"{count!r} is no number of carriers",
                where=f"occupation of {site}",
                remedy="give a whole number from 0 up",
            )
    return dict(occupation)


def _found(connection: Connection, no: int) -> Found:
    row = connection.execute(text("SELECT no, kind, digest FROM record WHERE no = :no"), {"no": no}).one()
    return Found(row.no, row.kind, bytes(row.digest))
