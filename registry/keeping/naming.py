"""Which record is meant by what a person typed, and how a record is called in return.

SQL text only (the quick questions use it).  Candidates are always listed: a person who is
told that a name is ambiguous must not have to search for what it could have meant.
"""

from __future__ import annotations

import json
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Row, text

from registry.errors import LookupFailed

__all__ = [
    "Found",
    "amended",
    "device_name",
    "find_chip",
    "find_cooldown",
    "find_device",
    "find_record",
    "find_tuning",
    "is_word",
    "open_cooldown",
    "short",
    "withdrawn",
]

SHORTEST_TYPED = 6
SHORTEST_SHOWN = 10
MOST_CANDIDATES = 8

# In force: targeted by no withdrawal that is itself in force (see keeping.changing).
NOT_WITHDRAWN = """NOT EXISTS (SELECT 1 FROM tainted t WHERE t.record_no = {no}
  AND NOT EXISTS (SELECT 1 FROM tainted u WHERE u.record_no = t.withdrawal_no))"""


@dataclass(frozen=True)
class Found:
    """A record that was meant."""

    no: int
    kind: str
    digest: bytes

    @property
    def hex(self) -> str:
        """The full id."""
        return self.digest.hex()


def find_record(connection: Connection, typed: str, kinds: tuple[str, ...] | None = None) -> Found:
    """The record whose id begins with ``typed``.

    Args:
        connection: open for reading.
        typed: at least 6 hex digits.
        kinds: allowed kinds; None means any.

    Raises:
        LookupFailed: no such record, several (they are listed), or one of another kind.
    """
    prefix = typed.strip().lower()
    if not re.fullmatch(rf"[0-9a-f]{{{SHORTEST_TYPED},64}}", prefix):
        raise LookupFailed(
            f"{typed!r} is no record id",
            where=_kinds_text(kinds),
            remedy=f"give at least {SHORTEST_TYPED} hex digits of the id ('millikeep find TEXT' shows ids)",
        )
    low = bytes.fromhex(prefix.ljust(64, "0"))
    high = bytes.fromhex(prefix.ljust(64, "f"))
    rows = connection.execute(
        text(
            "SELECT no, kind, digest FROM record WHERE digest BETWEEN :low AND :high "
            "ORDER BY digest LIMIT :most"
        ),
        {"low": low, "high": high, "most": 200},
    ).all()
    found = [Found(row.no, row.kind, bytes(row.digest)) for row in rows]
    wanted = [record for record in found if kinds is None or record.kind in kinds]
    if len(wanted) == 1:
        return wanted[0]
    if not wanted and found:
        raise LookupFailed(
            f"{typed!r} is a {found[0].kind}, not a {_kinds_text(kinds)}",
            where=_kinds_text(kinds),
            remedy="give the id of the right kind of record",
        )
    _refuse(typed, [f"{record.hex[:16]} ({record.kind})" for record in wanted], _kinds_text(kinds))
    raise AssertionError("unreachable")


def find_chip(connection: Connection, typed: str) -> Found:
    """The chip with this label (also an older one) or id.

    Raises:
        LookupFailed: none or several.
    """
    rows = connection.execute(
        text(
            f"""SELECT r.no, r.kind, r.digest, c.lot, c.wafer, c.die FROM chip c JOIN record r ON r.no = c.no
            WHERE {NOT_WITHDRAWN.format(no="c.no")} AND (c.label = :label OR EXISTS (
              SELECT 1 FROM amendment a WHERE a.target_no = c.no AND a.field = 'label' AND a.value = :json))
            ORDER BY c.no"""
        ),
        {"label": typed, "json": _json(typed)},
    ).all()
    rows = _without_twins(connection, rows)
    if len(rows) == 1:
        return Found(rows[0].no, rows[0].kind, bytes(rows[0].digest))
    if not rows and _looks_like_id(typed):
        return find_record(connection, typed, ("chip",))
    _refuse(
        typed,
        [f"{bytes(r.digest).hex()[:10]} (lot {r.lot}, wafer {r.wafer}, die {r.die})" for r in rows],
        "chip",
    )
    raise AssertionError("unreachable")


def find_device(connection: Connection, typed: str) -> Found:
    """The device written CHIP/NAME, by id, or by its bare name where only one has it.

    Raises:
        LookupFailed: none or several.
    """
    chip_text, slash, name = typed.rpartition("/")
    values: dict[str, object] = {"name": name, "json": _json(name)}
    chip = ""
    if slash:
        values["chip"] = find_chip(connection, chip_text).no
        chip = "AND d.chip_no = :chip"
    rows = connection.execute(
        text(
            f"""SELECT r.no, r.kind, r.digest FROM device d JOIN record r ON r.no = d.no
            WHERE {NOT_WITHDRAWN.format(no="d.no")} {chip} AND (d.name = :name OR EXISTS (
              SELECT 1 FROM amendment a WHERE a.target_no = d.no AND a.field = 'name' AND a.value = :json))
            ORDER BY d.no"""
        ),
        values,
    ).all()
    if len(rows) == 1:
        return Found(rows[0].no, rows[0].kind, bytes(rows[0].digest))
    if not rows and not slash and _looks_like_id(typed):
        return find_record(connection, typed, ("device",))
    candidates = [device_name(connection, row.no) for row in rows] or _all_devices(connection)
    _refuse(typed, candidates, "device", several=len(rows) > 1)
    raise AssertionError("unreachable")


def find_cooldown(connection: Connection, typed: str, device: Found | None = None) -> Found:
    """The cooldown with this label or id; with ``device``, only those its chip was in.

    Raises:
        LookupFailed: none or several.
    """
    values: dict[str, object] = {"label": typed, "json": _json(typed)}
    chip = ""
    if device is not None:
        values["device"] = device.no
        chip = """AND EXISTS (SELECT 1 FROM link l JOIN device d ON d.chip_no = l.target_no
                  WHERE l.record_no = c.no AND l.role = 'chips' AND d.no = :device)"""
    rows = connection.execute(
        text(
            f"""SELECT r.no, r.kind, r.digest, c.label FROM cooldown c JOIN record r ON r.no = c.no
            WHERE {NOT_WITHDRAWN.format(no="c.no")} {chip} AND (c.label = :label OR EXISTS (
              SELECT 1 FROM amendment a WHERE a.target_no = c.no AND a.field = 'label' AND a.value = :json))
            ORDER BY c.at, c.no"""
        ),
        values,
    ).all()
    if len(rows) == 1:
        return Found(rows[0].no, rows[0].kind, bytes(rows[0].digest))
    if not rows and _looks_like_id(typed):
        return find_record(connection, typed, ("cooldown",))
    candidates = [f"{bytes(row.digest).hex()[:10]} ({row.label})" for row in rows]
    if not rows:
        candidates = list(
            connection.execute(text("SELECT label FROM cooldown ORDER BY at DESC, no")).scalars()
        )
    _refuse(typed, candidates, "cooldown", several=len(rows) > 1)
    raise AssertionError("unreachable")


_WORDS = {"latest": 0, "previous": 1}


def find_tuning(connection: Connection, typed: str, device: Found | None = None) -> Found:
    """The tuning state meant: an id, ``latest``, ``previous``, or CHIP/DEVICE:latest.

    Withdrawn states are never the latest.

    Raises:
        LookupFailed: none, several, or a word without knowing whose states are meant.
    """
    before, colon, word = typed.rpartition(":")
    if colon and word in _WORDS:
        device = find_device(connection, before)
    elif typed in _WORDS:
        word = typed
        device = device or _only_device_with_states(connection, typed)
    else:
        return find_record(connection, typed, ("tuning",))
    rows = connection.execute(
        text(
            f"""SELECT r.no, r.kind, r.digest FROM tuning s JOIN record r ON r.no = s.no
            WHERE s.device_no = :device AND {NOT_WITHDRAWN.format(no="s.no")}
            ORDER BY s.moment DESC, s.no DESC LIMIT 2"""
        ),
        {"device": device.no},
    ).all()
    if len(rows) <= _WORDS[word]:
        raise LookupFailed(
            f"there is no {word} tuning state of {device_name(connection, device.no)}",
            where="tuning",
            remedy="record one with 'millikeep tuning record'",
        )
    row = rows[_WORDS[word]]
    return Found(row.no, row.kind, bytes(row.digest))


def is_word(typed: str) -> bool:
    """Whether a state is meant by ``latest`` or ``previous``, alone or as CHIP/DEVICE:latest."""
    return typed.rpartition(":")[2] in _WORDS


def open_cooldown(connection: Connection, chip_no: int, at: int) -> Found | None:
    """The cooldown that the chip is in at a moment, or None between two."""
    from registry.records.events import ends_cooldown

    row = connection.execute(
        text(
            f"""SELECT r.no, r.kind, r.digest FROM cooldown c JOIN record r ON r.no = c.no
            JOIN link l ON l.record_no = c.no AND l.role = 'chips' AND l.target_no = :chip
            WHERE c.at <= :at AND {NOT_WITHDRAWN.format(no="c.no")} ORDER BY c.at DESC, c.no DESC LIMIT 1"""
        ),
        {"chip": chip_no, "at": at},
    ).first()
    if row is None:
        return None
    warm = connection.execute(
        text(
            f"""SELECT event, kelvin FROM event e WHERE e.cooldown_no = :cooldown AND e.event = 'warm-up'
            AND e.at <= :at AND {NOT_WITHDRAWN.format(no="e.no")}"""
        ),
        {"cooldown": row.no, "at": at},
    ).all()
    if any(ends_cooldown(event.event, event.kelvin) for event in warm):
        return None
    return Found(row.no, row.kind, bytes(row.digest))


def short(connection: Connection, digest: bytes) -> str:
    """The shortest prefix of at least 10 hex digits that no other record shares."""
    digest = bytes(digest)
    neighbours = connection.execute(
        text(
            """SELECT digest FROM (SELECT digest FROM record WHERE digest < :d ORDER BY digest DESC LIMIT 1) a
            UNION ALL
            SELECT digest FROM (SELECT digest FROM record WHERE digest > :d ORDER BY digest LIMIT 1) b"""
        ),
        {"d": digest},
    ).scalars()
    mine = digest.hex()
    shared = max((_common(mine, bytes(other).hex()) for other in neighbours), default=0)
    return mine[: max(SHORTEST_SHOWN, shared + 1)]


def device_name(connection: Connection, device_no: int) -> str:
    """CHIP/NAME as it is called now."""
    row = connection.execute(
        text(
            "SELECT d.name, d.chip_no, c.label FROM device d JOIN chip c ON c.no = d.chip_no WHERE d.no = :no"
        ),
        {"no": device_no},
    ).one()
    chip = amended(connection, row.chip_no, "label") or row.label
    name = amended(connection, device_no, "name") or row.name
    return f"{chip}/{name}"


def amended(connection: Connection, no: int, field: str) -> str | None:
    """The amended value of a text field, ``A | B`` where two amendments did not see each other."""
    values = connection.execute(
        text(
            f"""SELECT a.value FROM amendment a WHERE a.target_no = :no AND a.field = :field
            AND {NOT_WITHDRAWN.format(no="a.no")} AND NOT EXISTS (
              SELECT 1 FROM link l WHERE l.target_no = a.no AND l.role = 'after'
              AND {NOT_WITHDRAWN.format(no="l.record_no")})"""
        ),
        {"no": no, "field": field},
    ).scalars()
    found = sorted({str(json.loads(value)) for value in values})
    return " | ".join(found) if found else None


def withdrawn(connection: Connection, no: int) -> bool:
    """Whether the record is withdrawn or hangs on a withdrawn one."""
    row = connection.execute(
        text(f"SELECT 1 FROM record r WHERE r.no = :no AND {NOT_WITHDRAWN.format(no='r.no')}"), {"no": no}
    ).first()
    return row is None


def _without_twins(connection: Connection, rows: Sequence[Row[Any]]) -> list[Row[Any]]:
    """Of chips said to be one (same-as), only the first recorded."""
    kept: list[Row[Any]] = []
    for row in rows:
        twins = set(
            connection.execute(
                text(
                    f"""SELECT b.target_no FROM link a JOIN link b ON b.record_no = a.record_no
                    AND b.role = 'chips' JOIN same_as s ON s.no = a.record_no
                    WHERE a.role = 'chips' AND a.target_no = :no
                    AND {NOT_WITHDRAWN.format(no="s.no")}"""
                ),
                {"no": row.no},
            ).scalars()
        )
        if not any(other.no in twins for other in kept):
            kept.append(row)
    return kept


def _only_device_with_states(connection: Connection, word: str) -> Found:
    rows = connection.execute(
        text(
            "SELECT r.no, r.kind, r.digest FROM record r "
            "WHERE r.no IN (SELECT DISTINCT device_no FROM tuning)"
        )
    ).all()
    if len(rows) == 1:
        return Found(rows[0].no, rows[0].kind, bytes(rows[0].digest))
    names = sorted(device_name(connection, row.no) for row in rows)
    raise LookupFailed(
        f"{word!r} could be a state of {', '.join(names[:MOST_CANDIDATES]) or 'no device yet'}",
        where="tuning",
        remedy=f"say whose: {names[0] if names else 'CHIP/DEVICE'}:{word}",
    )


def _all_devices(connection: Connection) -> list[str]:
    nos = connection.execute(text("SELECT no FROM device ORDER BY no LIMIT 50")).scalars()
    return sorted(device_name(connection, no) for no in nos)


def _refuse(typed: str, candidates: Sequence[str], kind: str, *, several: bool | None = None) -> None:
    if several is None:
        several = len(candidates) > 1
    listed = ", ".join(candidates[:MOST_CANDIDATES])
    if len(candidates) > MOST_CANDIDATES:
        listed += f" and {len(candidates) - MOST_CANDIDATES} more"
    if several:
        raise LookupFailed(
            f"{typed!r} could be {listed}", where=kind, remedy="give more of the id, or the full name"
        )
    raise LookupFailed(
        f"there is no {kind} {typed!r}",
        where=kind,
        remedy=f"known: {listed}"
        if listed
        else "'millikeep find TEXT' searches labels, purposes, notes and ids",
    )


def _looks_like_id(typed: str) -> bool:
    return re.fullmatch(rf"[0-9a-fA-F]{{{SHORTEST_TYPED},64}}", typed) is not None


def _kinds_text(kinds: tuple[str, ...] | None) -> str:
    return " or ".join(kinds) if kinds else "record"


def _common(a: str, b: str) -> int:
    return next((i for i, (x, y) in enumerate(zip(a, b, strict=True)) if x != y), len(a))


def _json(value: str) -> str:
    from registry.records.canonical import canonical_text

    return canonical_text(value)
