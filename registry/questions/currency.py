"""Which records are current: not withdrawn, not tainted, not superseded.

A withdrawal is in force unless a withdrawal targets it.  A record is superseded when an
unwithdrawn record of its group names it in ``after``, directly or along a chain: a
withdrawn link in the middle of the chain does not bring the oldest back, because the
newest was still made in knowledge of it.

All helpers take ``as_of`` (microseconds): withdrawals acted later are not yet known.
"""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection

from registry.questions.asking import AnyRow, ask_among

__all__ = [
    "IN_FORCE",
    "Marks",
    "Taint",
    "after_of",
    "amended",
    "current_heads",
    "direct",
    "heads",
    "marks_of",
    "taints_of",
    "untainted",
]

# Condition on a withdrawal ``w``.  Scalar subqueries with LIMIT, no joins inside them:
# PostgreSQL plans these as index look-ups even before the tables are analysed, which it
# does with neither NOT EXISTS nor a join (minutes instead of seconds at 50,000 states).
IN_FORCE = (
    "w.at <= :as_of AND (SELECT v.no FROM withdrawal v"
    " WHERE v.target_no = w.no AND v.at <= :as_of LIMIT 1) IS NULL"
)


def untainted(key: str) -> str:
    """SQL condition (with ``:as_of``): nothing that the record ``key`` hangs on, nor itself, is withdrawn."""
    return (
        f"(SELECT x.record_no FROM tainted x WHERE x.record_no = {key}"
        f" AND (SELECT w.no FROM withdrawal w WHERE w.no = x.withdrawal_no AND {IN_FORCE} LIMIT 1)"
        " IS NOT NULL LIMIT 1) IS NULL"
    )


@dataclass(frozen=True)
class Taint:
    """One withdrawal in force that a record hangs on.

    Attributes:
        record_no: the record that hangs on it.
        target_no, target_kind, target: what was withdrawn (``target`` its hex digest).
        why, person, at: of the withdrawal.
    """

    record_no: int
    target_no: int
    target_kind: str
    target: str
    why: str
    person: str
    at: int

    @property
    def direct(self) -> bool:
        """Whether the record itself was withdrawn."""
        return self.record_no == self.target_no


def taints_of(connection: Connection, nos: Iterable[int], as_of: int) -> dict[int, tuple[Taint, ...]]:
    """Withdrawals in force that each record hangs on, oldest first; sound records are absent."""
    rows = ask_among(
        connection,
        "SELECT x.record_no, w.target_no, t.kind, t.digest, w.why, r.person, w.at, w.digest AS act"
        " FROM tainted x JOIN withdrawal w ON w.no = x.withdrawal_no"
        " JOIN record r ON r.no = w.no JOIN record t ON t.no = w.target_no"
        f" WHERE x.record_no IN :nos AND {IN_FORCE}",
        nos,
        as_of=as_of,
    )
    found: dict[int, list[Taint]] = defaultdict(list)
    for row in sorted(rows, key=lambda row: (row.at, bytes(row.act))):
        found[row.record_no].append(
            Taint(row.record_no, row.target_no, row.kind, row.digest.hex(), row.why, row.person, row.at)
        )
    return {no: tuple(taints) for no, taints in found.items()}


def after_of(connection: Connection, nos: Iterable[int]) -> dict[int, frozenset[int]]:
    """For each record the heads it saw (its ``after`` links)."""
    found: dict[int, set[int]] = defaultdict(set)
    for row in ask_among(
        connection,
        "SELECT record_no, target_no FROM link WHERE record_no IN :nos AND role = 'after'",
        nos,
    ):
        found[row.record_no].add(row.target_no)
    return {no: frozenset(targets) for no, targets in found.items()}


def direct(taints: Mapping[int, Iterable[Taint]]) -> set[int]:
    """Records that were withdrawn themselves."""
    return {no for no, found in taints.items() if any(taint.direct for taint in found)}


def heads(group: Iterable[int], after: Mapping[int, Collection[int]], withdrawn: Collection[int]) -> set[int]:
    """Records of one group that are neither withdrawn nor superseded (pure)."""
    members = set(group)
    superseded: set[int] = set()
    waiting = [seen for no in members - set(withdrawn) for seen in after.get(no, ())]
    while waiting:
        no = waiting.pop()
        if no not in superseded:
            superseded.add(no)
            waiting.extend(after.get(no, ()))
    return members - set(withdrawn) - superseded


def current_heads(connection: Connection, nos: Iterable[int], as_of: int) -> set[int]:
    """Current ones among the records of ONE group (all its records must be given)."""
    group = set(nos)
    taints = taints_of(connection, group, as_of)
    seen = after_of(connection, group) if len(group) > 1 else {}
    return heads(group, seen, direct(taints)) - set(taints)


def amended(connection: Connection, nos: Iterable[int], as_of: int) -> dict[int, dict[str, tuple[Any, ...]]]:
    """Current amended values: record -> field -> one value, or several that disagree.

    Values that disagree come sorted by their text, so that every copy of the registry
    shows them alike.
    """
    rows = ask_among(
        connection,
        "SELECT no, target_no, field, value FROM amendment WHERE target_no IN :nos AND at <= :as_of",
        nos,
        as_of=as_of,
    )
    if not rows:
        return {}
    groups: dict[tuple[int, str], list[AnyRow]] = defaultdict(list)
    for row in rows:
        groups[row.target_no, row.field].append(row)
    every = [row.no for row in rows]
    # An amendment hangs on nothing but what it amends; a withdrawn record keeps its words.
    withdrawn = direct(taints_of(connection, every, as_of))
    current = heads(every, after_of(connection, every), withdrawn)
    found: dict[int, dict[str, tuple[Any, ...]]] = defaultdict(dict)
    for (target, field), group in groups.items():
        values = sorted({row.value for row in group if row.no in current})
        if values:
            found[target][field] = tuple(json.loads(value) for value in values)
    return found


@dataclass(frozen=True)
class Marks:
    """What later acts say about some records.

    Attributes:
        taints: withdrawals in force that a record hangs on; sound records are absent.
        values: current amended values by record and field.
    """

    taints: Mapping[int, tuple[Taint, ...]]
    values: Mapping[int, Mapping[str, tuple[Any, ...]]]

    def sound(self, no: int) -> bool:
        """Whether nothing the record hangs on is withdrawn."""
        return no not in self.taints

    def text(self, no: int, field: str, recorded: str | None) -> str | None:
        """A text field as people see it: values that disagree stand as ``A | B``."""
        values = self.values.get(no, {}).get(field)
        return recorded if values is None else " | ".join(str(value) for value in values)


def marks_of(connection: Connection, nos: Iterable[int], as_of: int) -> Marks:
    """Withdrawals and amendments on records, in two statements."""
    wanted = set(nos)
    return Marks(taints_of(connection, wanted, as_of), amended(connection, wanted, as_of))
