"""Which records are one physical device: its chips, itself, its stays in cryostats.

Two chip records joined by a same-as record are one chip, and devices of one name on
them are one device.
"""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass

from sqlalchemy import Connection

from registry.keeping.naming import find_device
from registry.questions.asking import ALWAYS, AnyRow, ask, ask_among
from registry.questions.currency import Marks, marks_of, untainted

__all__ = ["Body", "Stay", "body_of", "find_body"]


@dataclass(frozen=True)
class Stay:
    """One cooldown of the device, open or not; ``at`` in microseconds."""

    no: int
    digest: bytes
    label: str
    cryostat: str
    board: str | None
    at: int


@dataclass(frozen=True)
class Body:
    """A physical device.

    Attributes:
        no: the device record that was asked for; ``nos``: all that are the same one.
        name: CHIP/NAME as people say it; ``hexes``: digests of ``nos``.
        chips: keys of its chip records.
        stays: its cooldowns, oldest first, withdrawn ones left out.
    """

    no: int
    name: str
    nos: tuple[int, ...]
    hexes: frozenset[str]
    chips: tuple[int, ...]
    stays: tuple[Stay, ...]

    def stay(self, cooldown_no: int) -> Stay | None:
        """The stay with this key, None if it is withdrawn or of another chip."""
        return next((stay for stay in self.stays if stay.no == cooldown_no), None)


def find_body(connection: Connection, device: str, as_of: int = ALWAYS) -> Body:
    """The device that a typed name or prefix means.

    Raises:
        LookupFailed: none, or more than one.
    """
    return body_of(connection, find_device(connection, device).no, as_of)


def body_of(connection: Connection, device_no: int, as_of: int = ALWAYS) -> Body:
    """The physical device behind one device record, as known at ``as_of``."""
    own = ask(
        connection,
        "SELECT d.no, d.digest, d.name, d.chip_no, c.label FROM device d"
        " JOIN chip c ON c.no = d.chip_no WHERE d.no = :no",
        no=device_no,
    )[0]
    chips = _same_chips(connection, own.chip_no, as_of)
    same = [own]
    if len(chips) > 1:
        rows = ask_among(connection, "SELECT no, digest, name FROM device WHERE chip_no IN :nos", chips)
        same = sorted((row for row in rows if row.name == own.name), key=lambda row: bytes(row.digest))
    cooldowns = _cooldown_rows(connection, chips, as_of)
    marks = marks_of(connection, [device_no, own.chip_no, *cooldowns], as_of)
    chip, name = marks.text(own.chip_no, "label", own.label), marks.text(device_no, "name", own.name)
    return Body(
        device_no,
        f"{chip}/{name}",
        tuple(row.no for row in same),
        frozenset(row.digest.hex() for row in same),
        chips,
        _stays(cooldowns, marks),
    )


def _same_chips(connection: Connection, chip_no: int, as_of: int) -> tuple[int, ...]:
    said = ask(
        connection, f"SELECT s.no FROM same_as s WHERE s.at <= :as_of AND {untainted('s.no')}", as_of=as_of
    )
    pairs: dict[int, set[int]] = defaultdict(set)
    sql = "SELECT record_no, target_no FROM link WHERE record_no IN :nos AND role = 'chips'"
    for row in ask_among(connection, sql, (row.no for row in said)):
        pairs[row.record_no].add(row.target_no)
    chips = {chip_no}
    grown = True
    while grown:
        joined = chips.union(*(pair for pair in pairs.values() if pair & chips))
        grown, chips = joined != chips, joined
    return tuple(sorted(chips))


def _cooldown_rows(connection: Connection, chips: tuple[int, ...], as_of: int) -> dict[int, AnyRow]:
    rows = ask_among(
        connection,
        "SELECT c.no, c.digest, c.label, c.cryostat, c.board, c.at FROM link l"
        " JOIN cooldown c ON c.no = l.record_no"
        " WHERE l.target_no IN :nos AND l.role = 'chips' AND c.at <= :as_of",
        chips,
        as_of=as_of,
    )
    return {row.no: row for row in rows}


def _stays(rows: dict[int, AnyRow], marks: Marks) -> tuple[Stay, ...]:
    stays = (
        Stay(
            row.no,
            bytes(row.digest),
            marks.text(row.no, "label", row.label) or row.label,
            marks.text(row.no, "cryostat", row.cryostat) or row.cryostat,
            marks.text(row.no, "board", row.board),
            row.at,
        )
        for row in rows.values()
        if marks.sound(row.no)
    )
    return tuple(sorted(stays, key=lambda stay: (stay.at, stay.digest)))
