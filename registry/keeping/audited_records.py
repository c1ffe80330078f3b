"""Is every record still what was recorded?

Each row is read again from its table, brought into the canonical form and hashed; the result
must be its id in the table, in the spine and in its journal entry, and the journal entry must
also agree with what stands outside the id (guessed times, file names, who entered it and when).
"""

from __future__ import annotations

import json
from collections.abc import Generator, Mapping
from contextlib import closing
from itertools import groupby
from typing import Any

from sqlalchemy import Connection, RowMapping, text

from registry.keeping.findings import STREAMED, Course, octets
from registry.records.canonical import Json
from registry.records.digests import digest_of
from registry.records.instants import format_instant
from registry.records.kinds import Column, Kind, content_value, kind_of
from registry.records.tables import KINDS

__all__ = ["audit_records"]

ROLE_KINDS = {"chips": "chip", "devices": "device", "measurements": "measurement"}
"""Roles of many links that lead to one kind; ``after`` leads to the record's own kind, others to any."""

# What reading a row that holds anything at all may raise: bad JSON, a time beyond the
# calendar, a block of odd length, text that no longer is Unicode.
_UNREADABLE = (ValueError, TypeError, OverflowError, KeyError, AttributeError, RecursionError)


def audit_records(connection: Connection, course: Course) -> int:
    """Check every record; returns how many there are in the spine."""
    count = 0
    for name in KINDS:
        with course.part(connection, f"table {name}"):
            _audit_kind(connection, kind_of(name), course)
    with course.part(connection, "table record"):
        count = int(connection.execute(text("SELECT count(*) FROM record")).scalar_one())
        _audit_spine(connection, course)
    with course.part(connection, "table link"):
        _audit_roles(connection, course)
    return count


def _audit_kind(connection: Connection, kind: Kind, course: Course) -> None:
    rows = connection.execute(text(_query(kind)), execution_options=STREAMED)
    with closing(_many_links(connection, kind)) as many:
        waiting = next(many, None)
        for row in rows.mappings():
            no = row["c_no"]
            while waiting is not None and waiting[0] < no:
                waiting = next(many, None)  # of a record whose row is missing: the spine tells
            links = waiting[1] if waiting is not None and waiting[0] == no else []
            try:
                _audit_row(kind, row, links, course)
            except _UNREADABLE:
                course.find(f"a {kind.name} cannot be read", where=f"table {kind.name}, no {no}")
            course.step()


def _query(kind: Kind) -> str:
    """Rows of a kind with their spine, their journal entry and the targets of their links."""
    targets = [column for column in kind.columns if column.target]
    parts = ['x.no AS "c_no"', 'x.digest AS "c_digest"']
    parts += [f'x."{column.name}" AS "c_{column.name}"' for column in kind.columns]
    parts += ["r.kind AS r_kind", "r.digest AS r_digest", "r.entered AS r_entered", "r.person AS r_person"]
    parts += ["r.seq AS r_seq", "j.entry AS j_entry"]
    joins = ["LEFT JOIN record r ON r.no = x.no", "LEFT JOIN journal j ON j.seq = r.seq"]
    for place, column in enumerate(targets):
        parts += [f't{place}.digest AS "d_{column.name}"', f't{place}.kind AS "k_{column.name}"']
        joins.append(f'LEFT JOIN record t{place} ON t{place}.no = x."{column.name}"')
    return f'SELECT {", ".join(parts)} FROM "{kind.name}" x {" ".join(joins)} ORDER BY x.no'


def _many_links(connection: Connection, kind: Kind) -> Generator[tuple[int, list[Any]]]:
    """Links of the table ``link`` by record, in order of records."""
    with connection.execute(
        text(
            "SELECT l.record_no, l.role, l.target_no, t.digest, t.kind FROM link l "
            "JOIN record r ON r.no = l.record_no LEFT JOIN record t ON t.no = l.target_no "
            "WHERE r.kind = :kind ORDER BY l.record_no"
        ),
        {"kind": kind.name},
        execution_options=STREAMED,
    ) as rows:
        for no, group in groupby(rows, key=lambda row: row.record_no):
            yield int(no), list(group)


def _audit_row(kind: Kind, row: RowMapping, several: list[Any], course: Course) -> None:
    label = f"{kind.name} {octets(row['c_digest']).hex()[:10]}"
    where = f"table {kind.name}, no {row['c_no']}"
    if row["r_digest"] is None:
        course.find(f"{label} is not in the list of all records", where=where)
        return
    if row["r_kind"] != kind.name or octets(row["r_digest"]) != octets(row["c_digest"]):
        spine = f"{row['r_kind']} {octets(row['r_digest']).hex()[:10]}"
        course.find(f"{label} stands in the list of all records as {spine}", where=where)
    links = _links(kind, row, several, label, where, course)
    if links is None:
        return
    try:
        content = kind.content({column.name: row[f"c_{column.name}"] for column in kind.columns})
        sound = digest_of(kind.name, content, links) == octets(row["c_digest"])
    except _UNREADABLE:
        sound = False
    if not sound:
        course.find(f"{label} is not what was recorded: its content no longer gives its id", where=where)
    _audit_entry(kind, row, label, course)


def _links(
    kind: Kind, row: RowMapping, several: list[Any], label: str, where: str, course: Course
) -> dict[str, str | list[str]] | None:
    """The links of a row by role; None if one of them leads nowhere."""
    sound = True
    links: dict[str, str | list[str]] = {role: [] for role in kind.many}
    for column in kind.columns:
        target = row[f"c_{column.name}"]
        if column.target is None or target is None:
            continue
        digest, found = row[f"d_{column.name}"], row[f"k_{column.name}"]
        sound &= _led_right(label, where, course, column.role, target, digest, found, column.target)
        if digest is not None and not column.aside:
            links[column.role] = octets(digest).hex()
    for _, role, target, digest, found in several:
        expected = kind.name if role == "after" else ROLE_KINDS.get(role, "record")
        sound &= _led_right(label, where, course, role, target, digest, found, expected)
        if digest is not None and role in kind.many:
            listed = links[role]
            assert isinstance(listed, list)
            listed.append(octets(digest).hex())
    return links if sound else None


def _led_right(
    label: str,
    where: str,
    course: Course,
    role: str,
    target: int,
    digest: bytes | None,
    found: str | None,
    expected: str,
) -> bool:
    if digest is None:
        course.find(f"{label} rests on a record that is missing ({role}, no {target})", where=where)
    elif expected not in ("record", found):
        course.find(f"{label} names a {found} where a {expected} belongs ({role}, no {target})", where=where)
    return digest is not None


def _audit_entry(kind: Kind, row: RowMapping, label: str, course: Course) -> None:
    where = f"journal, entry {row['r_seq']}"
    if row["j_entry"] is None:
        course.find(f"the journal has no entry of {label}", where=where)
        return
    try:
        entry = json.loads(row["j_entry"])
        expected = {
            "act": "record",
            "kind": kind.name,
            "digest": octets(row["c_digest"]).hex(),
            "entered": format_instant(row["r_entered"]),
            "by": row["r_person"],
            "aside": _aside(kind, row),
        }
        wrong = [name for name, value in expected.items() if entry.get(name, {}) != value]
        if entry.get("kind") == kind.name and "aside" in wrong:
            wrong = [name for name in wrong if name != "aside"] + _wrong_asides(entry, expected["aside"])
    except _UNREADABLE:
        wrong = ["what cannot be read"]
    if wrong:
        named = ", ".join(wrong)
        course.find(f"{label} and its journal entry disagree on: {named}", where=where)


def _aside(kind: Kind, row: RowMapping) -> dict[str, Json]:
    """What stands outside the id, as the writer puts it into the entry."""
    return {
        column.name: _aside_value(column, row)
        for column in kind.asides
        if row[f"c_{column.name}"] is not None
    }


def _aside_value(column: Column, row: RowMapping) -> Json:
    if column.target is None:
        return content_value(column, row[f"c_{column.name}"])
    digest = row[f"d_{column.name}"]
    return None if digest is None else octets(digest).hex()


def _wrong_asides(entry: Mapping[str, Any], expected: Any) -> list[str]:
    noted = entry.get("aside", {})
    return [name for name in sorted({*noted, *expected}) if noted.get(name) != expected.get(name)]


def _audit_spine(connection: Connection, course: Course) -> None:
    """Records that are listed but have no row, or are of a kind that does not exist."""
    strange = connection.execute(text("SELECT DISTINCT kind FROM record")).scalars()
    for kind in sorted(set(strange) - set(KINDS)):
        course.find(f"there are records of the unknown kind {kind!r}", where="table record")
    for name in KINDS:
        rows = connection.execute(
            text(
                f'SELECT r.no, r.digest FROM record r LEFT JOIN "{name}" x ON x.no = r.no '
                "WHERE r.kind = :kind AND x.no IS NULL ORDER BY r.no"
            ),
            {"kind": name},
            execution_options=STREAMED,
        )
        for no, digest in rows:
            course.find(
                f"{name} {octets(digest).hex()[:10]} is gone from its table", where=f"table {name}, no {no}"
            )


def _audit_roles(connection: Connection, course: Course) -> None:
    """Links of a record that does not exist, or in a role that its kind does not have."""
    rows = connection.execute(
        text(
            "SELECT r.kind, l.role, min(l.record_no) FROM link l LEFT JOIN record r ON r.no = l.record_no "
            "GROUP BY r.kind, l.role"
        )
    )
    for kind, role, no in rows:
        if kind is None:
            course.find(f"a link {role!r} belongs to no record", where=f"table link, record_no {no}")
        elif kind in KINDS and role not in kind_of(kind).many:
            course.find(
                f"a {kind} has a link {role!r}, which it cannot have", where=f"table link, record_no {no}"
            )
