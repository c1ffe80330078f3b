"""To which tuning state a measured file belongs: named, told by the file, or the latest."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.cooldowns import span_of
from registry.keeping.naming import NOT_WITHDRAWN, Found, device_name, find_record, open_cooldown
from registry.keeping.sheets_in_force import gates_of, sheet_of
from registry.keeping.tunings import keep_tuning
from registry.keeping.wirings import wiring_of
from registry.keeping.writing import Writer
from registry.records.instants import format_instant
from registry.records.volts import unpack
from registry.samples import Samples

__all__ = ["Assignment", "assign"]


@dataclass(frozen=True)
class Assignment:
    """The state chosen.

    Attributes:
        tuning: the state; moment: its time in microseconds; notes: why this one.
    """

    tuning: Found
    moment: int
    notes: tuple[str, ...] = ()


def assign(
    writer: Writer,
    where: str,
    samples: Samples,
    tuning: str | None,
    *,
    at: int | None,
    guess: int,
    raw_file: int,
) -> Assignment:
    """The state a file was taken in.

    Args:
        writer: the open transaction; a state told by the file is recorded in it.
        where: the file's name, for messages.
        tuning: full id if the person named one.
        at: when the file was taken, None if only ``guess`` is known.
        raw_file: key of the file's record.

    Raises:
        InputError: no device, or several, could be meant; the file lies outside the
            state's cooldown; its volts are of unknown gates.
    """
    connection = writer.connection
    if tuning is not None:
        found = find_record(connection, tuning, ("tuning",))
        return _checked(connection, where, found, at, ())
    moment = at if at is not None else guess
    if samples.volts:
        return _told(writer, where, samples, at=at, moment=moment, raw_file=raw_file)
    found = _latest(connection, where, moment)
    return _checked(connection, where, found, at, ("taken in the latest state of the only device then cold",))


def _checked(
    connection: Connection, where: str, found: Found, at: int | None, notes: tuple[str, ...]
) -> Assignment:
    row = connection.execute(
        text(
            "SELECT s.cooldown_no, s.moment, d.chip_no FROM tuning s JOIN device d ON d.no = s.device_no"
            " WHERE s.no = :no"
        ),
        {"no": found.no},
    ).one()
    span = span_of(connection, row.cooldown_no, row.chip_no)
    if at is not None and (at < span.began or (span.ended is not None and at > span.ended)):
        raise InputError(
            f"it was taken at {format_instant(at)}, outside cooldown {span.label} of its state",
            where=where,
            remedy="name the right state with --tuning, or give the right time with --at",
        )
    if at is not None and at < row.moment:
        notes = (*notes, f"it was taken before its state was recorded ({format_instant(row.moment)})")
    return Assignment(found, row.moment, notes)


def _told(
    writer: Writer, where: str, samples: Samples, *, at: int | None, moment: int, raw_file: int
) -> Assignment:
    """The state that the file's own volts describe; the latest one if it is the same."""
    connection = writer.connection
    names = list(samples.volts)
    having = [
        device
        for device in _cold_devices(connection, moment)
        if _knows(connection, device, names, moment, samples)
    ]
    if len(having) != 1:
        listed = ", ".join(device_name(connection, device.no) for device in having)
        raise InputError(
            f"the file's volts ({', '.join(names[:4])} ...) could be of {listed}"
            if having
            else f"no cold device has the gates {', '.join(names[:6])} of the file's volts",
            where=where,
            remedy="name the state with --tuning, or begin the cooldown first",
        )
    device = having[0]
    same = _same_as_latest(connection, device, samples, moment)
    if same is not None:
        return same
    kept = keep_tuning(
        writer,
        device,
        samples.volts,
        level=samples.volts_level,
        settings=samples.settings,
        at=at,
        guessed_at=None if at is not None else moment,
        raw_file=raw_file,
    )
    return Assignment(
        Found(kept.no, "tuning", kept.digest), moment, ("its state was taken from the file", *kept.notes)
    )


def _same_as_latest(
    connection: Connection, device: Found, samples: Samples, moment: int
) -> Assignment | None:
    row = _latest_row(connection, device.no, moment)
    if row is None or row["level"] != samples.volts_level:
        return None
    if row["cooldown_no"] != _open_no(connection, device, moment):
        return None
    names = sheet_of(connection, row["gate_sheet_no"]).names
    wiring = wiring_of(connection, device.no, row["cooldown_no"], moment)
    told: dict[str, float] = {}
    for name, volts in samples.volts.items():
        told.update(dict.fromkeys(wiring.by_line.get(name, (name,)) if name not in names else (name,), volts))
    stored = dict(zip(names, unpack(row["volts"]), strict=True))
    settings = {
        name: (item["value"], item["unit"]) for name, item in json.loads(row["settings"] or "{}").items()
    }
    known = {name: value for name, value in stored.items() if not math.isnan(value)}
    if known != told or settings != {name: tuple(item) for name, item in samples.settings.items()}:
        return None
    found = Found(row["no"], "tuning", bytes(row["digest"]))
    return Assignment(found, row["moment"], ("the file's volts are those of the latest state",))


def _open_no(connection: Connection, device: Found, moment: int) -> int | None:
    chip = connection.execute(
        text("SELECT chip_no FROM device WHERE no = :no"), {"no": device.no}
    ).scalar_one()
    found = open_cooldown(connection, chip, moment)
    return None if found is None else found.no


def _knows(connection: Connection, device: Found, names: list[str], moment: int, samples: Samples) -> bool:
    """Whether all names are gates of the device, or lines to it where volts are at the source."""
    known = set(gates_of(connection, device.no).names)
    if samples.volts_level == "source":
        cooldown = _open_no(connection, device, moment)
        if cooldown is not None:
            known |= set(wiring_of(connection, device.no, cooldown, moment).by_line)
    return known.issuperset(names)


def _latest(connection: Connection, where: str, moment: int) -> Found:
    with_states = {
        device.no: row
        for device in _cold_devices(connection, moment)
        if (row := _latest_row(connection, device.no, moment)) is not None
    }
    if len(with_states) == 1:
        row = next(iter(with_states.values()))
        return Found(row["no"], "tuning", bytes(row["digest"]))
    names = ", ".join(device_name(connection, no) for no in with_states)
    raise InputError(
        f"it could belong to a state of {names}"
        if names
        else "no device that was cold then has a tuning state",
        where=where,
        remedy="name the state with --tuning (CHIP/DEVICE:latest works), or record one first",
    )


def _latest_row(connection: Connection, device_no: int, moment: int) -> dict[str, Any] | None:
    row = connection.execute(
        text(
            f"""SELECT * FROM tuning s WHERE device_no = :device AND moment <= :moment
            AND {NOT_WITHDRAWN.format(no="s.no")} ORDER BY moment DESC, no DESC LIMIT 1"""
        ),
        {"device": device_no, "moment": moment},
    ).mappings()
    found = row.first()
    return None if found is None else dict(found)


def _cold_devices(connection: Connection, moment: int) -> list[Found]:
    rows = connection.execute(
        text(
            f"""SELECT d.no, d.chip_no, r.digest FROM device d JOIN record r ON r.no = d.no
            WHERE {NOT_WITHDRAWN.format(no="d.no")} ORDER BY d.no"""
        )
    ).all()
    open_chips = {chip: open_cooldown(connection, chip, moment) for chip in {row.chip_no for row in rows}}
    return [Found(row.no, "device", bytes(row.digest)) for row in rows if open_chips[row.chip_no] is not None]
