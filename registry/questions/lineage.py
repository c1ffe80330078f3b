"""What made a record, up to files and code; and what hangs on it.

Follows every link column and every link row, whatever the kinds are, so that a kind of
record added later is followed without a change here.  ``after`` links are no lineage; a
parent state is followed only upwards and only from a state that was itself asked about.
"""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Collection, Iterable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection

from registry.keeping.naming import find_record
from registry.keeping.writing import NOT_TAINTING
from registry.questions.asking import ALWAYS, AnyRow, ask_among
from registry.questions.currency import amended, taints_of
from registry.questions.standings import taint_words
from registry.questions.wordings import words_for
from registry.records.kinds import Kind, content_value, kind_of
from registry.records.tables import KINDS

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["Edge", "Lineage", "Node", "lineage"]

# More than a page can show; a file in the middle of a thousand analyses is still whole.
MOST_NODES = 20_000
# A detail longer than this (a sheet of 3,000 gates) is left to the record itself.
LONGEST_DETAIL = 4_000
# Acts on a record are told beside it; they are neither made from it nor rest on it.
_ACTS = frozenset({"withdrawal", "amendment"})


@dataclass(frozen=True)
class Node:
    """One record in the lineage.

    Attributes:
        depth: links away from the asked record, by the shortest way.
        what: a few words; ``details``: its content, long members left out.
        amended: field -> present values where amended.
        withdrawn: what was withdrawn beneath it, in words; empty where it stands.
    """

    id: str
    kind: str
    depth: int
    what: str
    details: dict[str, Any] = field(hash=False)
    amended: dict[str, list[Any]] = field(hash=False)
    withdrawn: tuple[str, ...]

    def to_json(self) -> dict[str, Any]:
        """All members."""
        return {
            "id": self.id,
            "kind": self.kind,
            "depth": self.depth,
            "what": self.what,
            "details": self.details,
            "amended": self.amended,
            "withdrawn": list(self.withdrawn),
        }


@dataclass(frozen=True)
class Edge:
    """``record`` links to ``target`` under ``role``: it rests on it."""

    record: str
    role: str
    target: str

    def to_json(self) -> dict[str, str]:
        """All members."""
        return {"from": self.record, "role": self.role, "to": self.target}


@dataclass(frozen=True)
class Lineage:
    """The answer: nodes by depth, the asked record first; ``cut`` if there were too many."""

    id: str
    kind: str
    down: bool
    nodes: tuple[Node, ...]
    edges: tuple[Edge, ...]
    cut: bool

    def to_json(self) -> dict[str, Any]:
        """Nodes and edges; ``files`` lists the raw files among them by SHA-256."""
        files = [
            node.details["sha256"]
            for node in self.nodes
            if node.kind == "raw_file" and "sha256" in node.details
        ]
        return {
            "id": self.id,
            "kind": self.kind,
            "direction": "down" if self.down else "up",
            "nodes": [node.to_json() for node in self.nodes],
            "edges": [edge.to_json() for edge in self.edges],
            "files": files,
            "cut": self.cut,
        }


def lineage(reg: Registry, record: str, *, down: bool = False) -> Lineage:
    """Everything a record was made from, or (``down``) everything that hangs on it.

    Args:
        reg: an open registry.
        record: id of any record, or its prefix.
        down: follow the links backwards: what falls if this record is wrong.

    Raises:
        LookupFailed: no such record.
    """
    with reg.reading() as connection:
        found = find_record(connection, record)
        skipped = NOT_TAINTING if down or found.kind != "tuning" else NOT_TAINTING - {"parent"}
        walked = _Walk(connection, skipped)
        walked.start(found.no)
        cut = walked.down() if down else walked.up()
        return walked.answer(found.no, down=down, cut=cut)


class _Walk:
    """Breadth-first walk over the links, a few statements a level."""

    def __init__(self, connection: Connection, skipped: Collection[str]) -> None:
        self._connection = connection
        self._skipped = skipped
        self._depth: dict[int, int] = {}
        self._kinds: dict[int, tuple[str, str]] = {}
        self._rows: dict[int, AnyRow] = {}
        self._links: set[tuple[int, str, int]] = set()
        self._level = 0

    def start(self, no: int) -> None:
        """Begin at a record."""
        self._meet({no})

    def up(self) -> bool:
        """Follow links to what records rest on; True if cut short."""
        return self._go(self._targets)

    def down(self) -> bool:
        """Follow links backwards to what rests on records; True if cut short."""
        return self._go(self._dependents)

    def _go(self, step: Any) -> bool:
        frontier = set(self._depth)
        while frontier:
            reached = {no for no in step(frontier) if no not in self._depth}
            room = MOST_NODES - len(self._depth)
            self._level += 1
            frontier = self._meet(set(sorted(reached)[:room]))
            if len(reached) > room:
                return True
        return False

    def _meet(self, nos: set[int]) -> set[int]:
        """Load records not met before; those of kinds that are acts are passed by."""
        groups: dict[str, list[int]] = defaultdict(list)
        for row in ask_among(self._connection, "SELECT no, kind, digest FROM record WHERE no IN :nos", nos):
            if row.kind not in _ACTS or not self._level:
                self._kinds[row.no] = (row.kind, row.digest.hex())
                self._depth[row.no] = self._level
                groups[row.kind].append(row.no)
        for name, members in groups.items():
            columns = ", ".join(f'"{c.name}"' for c in kind_of(name).columns if c.form != "volts")
            sql = f'SELECT no, {columns} FROM "{name}" WHERE no IN :nos'
            self._rows |= {row.no: row for row in ask_among(self._connection, sql, members)}
        return {no for members in groups.values() for no in members}

    def _targets(self, frontier: Iterable[int]) -> set[int]:
        found: set[tuple[int, str, int]] = set()
        for no in frontier:
            row: dict[str, Any] = dict(self._rows[no]._mapping)
            for column in kind_of(self._kinds[no][0]).links:
                if row[column.name] is not None and column.role not in self._skipped:
                    found.add((no, column.role, row[column.name]))
        sql = "SELECT record_no, role, target_no FROM link WHERE record_no IN :nos"
        rows = ask_among(self._connection, sql, frontier)
        found |= {(row[0], row[1], row[2]) for row in rows if row.role not in self._skipped}
        self._links |= found
        return {target for _, _, target in found}

    def _dependents(self, frontier: Iterable[int]) -> set[int]:
        nos = set(frontier)
        kinds = {self._kinds[no][0] for no in nos}
        found: set[tuple[int, str, int]] = set()
        for kind in map(kind_of, KINDS):
            for column in kind.links if kind.name not in _ACTS else ():
                if column.role not in self._skipped and (column.target == "record" or column.target in kinds):
                    sql = f'SELECT no, "{column.name}" FROM "{kind.name}" WHERE "{column.name}" IN :nos'
                    found |= {(row[0], column.role, row[1]) for row in ask_among(self._connection, sql, nos)}
        sql = "SELECT record_no, role, target_no FROM link WHERE target_no IN :nos"
        rows = ask_among(self._connection, sql, nos)
        found |= {(row[0], row[1], row[2]) for row in rows if row.role not in self._skipped}
        self._links |= found
        return {record for record, _, _ in found}

    def answer(self, start: int, *, down: bool, cut: bool) -> Lineage:
        """Everything met, in an order that does not depend on the registry's keys."""
        taints = taints_of(self._connection, self._depth, ALWAYS)
        words = amended(self._connection, self._depth, ALWAYS)
        nodes = []
        for no, depth in self._depth.items():
            kind, digest = self._kinds[no]
            row: dict[str, Any] = dict(self._rows[no]._mapping)
            notes = tuple(
                taint_words(t, "it" if t.direct else "what it rests on") for t in taints.get(no, ())
            )
            changed = {name: list(values) for name, values in sorted(words.get(no, {}).items())}
            details = _details(kind_of(kind), row)
            nodes.append(Node(digest, kind, depth, words_for(kind, row), details, changed, notes))
        edges = (
            Edge(self._kinds[record][1], role, self._kinds[target][1])
            for record, role, target in self._links
            if record in self._kinds and target in self._kinds
        )
        return Lineage(
            self._kinds[start][1],
            self._kinds[start][0],
            down,
            tuple(sorted(nodes, key=lambda node: (node.depth, node.kind, node.id))),
            tuple(sorted(edges, key=lambda edge: (edge.record, edge.role, edge.target))),
            cut,
        )


def _details(kind: Kind, row: dict[str, Any]) -> dict[str, Any]:
    """Content and asides that are no links; long members are left out."""
    found: dict[str, Any] = {}
    for column in kind.columns:
        stored = row.get(column.name) if column.form != "volts" else None
        if stored is None or column.target is not None:
            continue
        if isinstance(stored, str) and len(stored) > LONGEST_DETAIL:
            continue
        found[column.name] = json.loads(stored) if column.form == "json" else content_value(column, stored)
    return found
