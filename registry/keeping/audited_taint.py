"""Does the table ``tainted`` name exactly what hangs on withdrawn records?

It decides what the questions leave out, and no digest covers it; so it is computed again.  A
record only rests on records with a smaller number, so one pass in the order of numbers, over
all tables at once, finds everything.
"""

from __future__ import annotations

import heapq
from collections import defaultdict
from collections.abc import Iterator

from sqlalchemy import Connection, text

from registry.keeping.findings import STREAMED, Course
from registry.keeping.writing import NOT_TAINTING
from registry.records.kinds import kind_of
from registry.records.tables import KINDS

__all__ = ["audit_taint"]

_REMEDY = (
    "`millikeep last-good` and its like may leave out too much or too little: keep a copy of the "
    "registry as it is, then restore the newest backup"
)


def audit_taint(connection: Connection, course: Course) -> None:
    """Compare the stored table with what the withdrawals and links give.

    Memory: one set for each record that hangs on a withdrawn one.
    """
    with course.part(connection, "table tainted"):
        expected = _expected(connection)
        rows = connection.execute(
            text("SELECT record_no, withdrawal_no FROM tainted ORDER BY record_no"),
            execution_options=STREAMED,
        )
        for no, withdrawal in rows:
            if withdrawal in expected.get(no, ()):
                expected[no].remove(withdrawal)
            else:
                _find(course, no, withdrawal, "is marked as resting on what was withdrawn, and does not")
        for no, missing in sorted(expected.items()):
            for withdrawal in sorted(missing):
                _find(course, no, withdrawal, "rests on what was withdrawn, and is not marked so")


def _find(course: Course, no: int, withdrawal: int, what: str) -> None:
    course.find(f"record {no} {what} (withdrawal {withdrawal})", where="table tainted", remedy=_REMEDY)


def _expected(connection: Connection) -> dict[int, set[int]]:
    """Record -> withdrawals it hangs on."""
    tainted: dict[int, set[int]] = defaultdict(set)
    for no, target in connection.execute(text("SELECT no, target_no FROM withdrawal")):
        tainted[target].add(no)
    if tainted:
        for no, target in heapq.merge(*_links(connection)):
            if target in tainted:
                tainted[no] |= tainted[target]
    return dict(tainted)


def _links(connection: Connection) -> list[Iterator[tuple[int, int]]]:
    """(record, what it rests on) of each table, in the order of records."""
    roles = ", ".join(f"'{role}'" for role in sorted(NOT_TAINTING))
    queries = [
        f"SELECT record_no, target_no FROM link WHERE role NOT IN ({roles}) ORDER BY record_no, target_no"
    ]
    for kind in map(kind_of, KINDS):
        if kind.name != "withdrawal":
            queries += [
                f'SELECT no, "{column.name}" FROM "{kind.name}" WHERE "{column.name}" IS NOT NULL ORDER BY no'
                for column in kind.links
                if column.role not in NOT_TAINTING
            ]
    return [_pairs(connection, query) for query in queries]


def _pairs(connection: Connection, query: str) -> Iterator[tuple[int, int]]:
    for no, target in connection.execute(text(query), execution_options=STREAMED):
        yield int(no), int(target)
