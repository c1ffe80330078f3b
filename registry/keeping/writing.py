"""The one write path: digest, insert and journal in one transaction.

``Registry.writing`` makes a ``Writer``; the functions of the other modules hand it
content and links.  Nothing else in the program inserts a row.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import chain
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, bindparam, text

from registry.errors import InputError
from registry.keeping import head, journal
from registry.keeping.naming import withdrawn
from registry.records.canonical import Json, canonical_text
from registry.records.digests import digest_of
from registry.records.instants import format_instant, now_us
from registry.records.kinds import Kind, content_value, kind_of, stored_value
from registry.records.tables import KINDS

if TYPE_CHECKING:
    from registry.keeping.handle import Registry
    from registry.keeping.merkle import Frontier

__all__ = ["NOT_TAINTING", "Kept", "LinkTarget", "Writer", "refuse_future"]

# Roles along which a withdrawal does not spread: what a record saw or began from is not
# what it rests on.
NOT_TAINTING = frozenset({"after", "parent"})
# Bound parameters of one IN list; SQLite's default limit is far above.
CHUNK = 500

# The end of the year 9999, beyond which a time has no RFC 3339 form.
LAST_INSTANT = 253_402_300_800_000_000

LinkTarget = int | Sequence[int] | None


@dataclass(frozen=True)
class Kept:
    """A record that is in the registry now.

    Attributes:
        no: its key there; digest: its identity everywhere; new: False if it already was.
        notes: what the person should know about it, in plain sentences.
    """

    no: int
    digest: bytes
    new: bool
    notes: tuple[str, ...] = ()

    @property
    def hex(self) -> str:
        """The full id."""
        return self.digest.hex()


class Writer:
    """One write transaction."""

    def __init__(self, registry: Registry, connection: Connection) -> None:
        self.registry = registry
        self.entered = now_us()
        self._connection = connection
        self._rows: dict[str, list[dict[str, Any]]] = {}
        self._spine: list[dict[str, Any]] = []
        self._links: list[dict[str, Any]] = []
        self._tainted: list[dict[str, int]] = []
        self._entries: list[str] = []
        self._known: dict[bytes, int] = {}
        self._digests: dict[int, str] = {}
        self._next_no = (
            int(connection.execute(text("SELECT coalesce(max(no), 0) FROM record")).scalar_one()) + 1
        )
        self._next_seq = journal.size_of(connection)
        self._taints = connection.execute(text("SELECT 1 FROM tainted LIMIT 1")).first() is not None
        self._appended: journal.Appended | None = None

    @property
    def connection(self) -> Connection:
        """The connection, with everything kept so far visible on it."""
        self._write_rows()
        return self._connection

    def keep(
        self,
        kind: str,
        /,
        *,
        links: Mapping[str, LinkTarget] | None = None,
        beside: Mapping[str, Json] | None = None,
        **values: Any,
    ) -> Kept:
        """Keep one record; the same content and links again give the same record.

        Args:
            kind: table name.
            links: role -> ``no`` of the linked record, or several.
            beside: bookkeeping for the journal entry only (library versions).
            values: content and aside columns as given by the caller, not yet normal.

        Raises:
            InputError: a value that cannot be kept; nothing is recorded.
        """
        shape = kind_of(kind)
        linked = {role: target for role, target in (links or {}).items() if target is not None}
        row = {column.name: None for column in shape.columns}
        for column in shape.columns:
            if column.target is None:
                row[column.name] = stored_value(
                    column, values.pop(column.name, None), f"{kind}, {column.name}"
                )
            elif column.role in linked:
                row[column.name] = linked[column.role]  # type: ignore[assignment]
            elif not column.nullable:
                raise TypeError(f"a {kind} needs a link {column.role!r}")
        if values:
            raise TypeError(f"a {kind} has no {', '.join(values)}")
        digest = self._digest(shape, row, linked)
        found = self._find(digest)
        if found is not None:
            return Kept(found, digest, new=False, notes=self._withdrawn_note(found))
        return self._add(shape, row, linked, digest, beside)

    def same_act(self, kind: str, /, links: Mapping[str, LinkTarget], **values: Any) -> Kept | None:
        """The record of this very act, if it is there: equal in all but the heads it saw.

        A change record holds in ``after`` what it saw.  Kept a second time it would see
        itself and be another record, so the same act is looked for before it is kept.

        Args:
            kind: table name; links: as for ``keep``, without ``after``.
            values: content; ``at`` is part of it.
        """
        shape = kind_of(kind)
        wanted = {
            column.name: stored_value(column, values.get(column.name), f"{kind}, {column.name}")
            if column.target is None
            else links.get(column.role)
            for column in (*shape.links, *shape.contents)
        }
        sure = [name for name, value in wanted.items() if value is not None and name.endswith("_no")] + ["at"]
        rows = self.connection.execute(
            text(f'SELECT * FROM "{kind}" WHERE ' + " AND ".join(f'"{name}" = :{name}' for name in sure)),
            {name: wanted[name] for name in sure},
        ).mappings()
        for row in rows.all():
            if all(row[name] == value for name, value in wanted.items()) and self._same_many(
                shape, row["no"], links
            ):
                return Kept(row["no"], bytes(row["digest"]), new=False)
        return None

    def _same_many(self, shape: Kind, no: int, links: Mapping[str, LinkTarget]) -> bool:
        stored = self.connection.execute(
            text("SELECT role, target_no FROM link WHERE record_no = :no AND role <> 'after'"),
            {"no": no},
        )
        wanted = {(role, no) for role in shape.many if role != "after" for no in _several(links.get(role))}
        return {(link.role, link.target_no) for link in stored} == wanted

    def digest_hex(self, no: int) -> str:
        """Full id of the record ``no``."""
        known = self._digests.get(no)
        if known is None:
            stored = self._connection.execute(
                text("SELECT digest FROM record WHERE no = :no"), {"no": no}
            ).scalar_one()
            known = self._digests[no] = bytes(stored).hex()
        return known

    def taint(self, withdrawal: int, target: int) -> None:
        """Mark ``target`` and all that hangs on it as resting on a withdrawn record."""
        reached = {target}
        frontier = [target]
        while frontier:
            frontier = [no for no in self._resting_on(frontier) if no not in reached]
            reached.update(frontier)
        self._tainted += [{"record_no": no, "withdrawal_no": withdrawal} for no in sorted(reached)]
        self._taints = True

    @contextmanager
    def part(self) -> Iterator[None]:
        """A part of the transaction that leaves nothing behind if it fails, while the rest stays."""
        self._write_rows()
        next_no, entries, taints = self._next_no, len(self._entries), self._taints
        try:
            with self._connection.begin_nested():
                yield
                self._write_rows()
        except BaseException:
            self._rows, self._spine, self._links, self._tainted = {}, [], [], []
            del self._entries[entries:]
            self._known = {digest: no for digest, no in self._known.items() if no < next_no}
            self._digests = {no: digest for no, digest in self._digests.items() if no < next_no}
            self._next_no, self._taints = next_no, taints
            raise

    def flush(self) -> None:
        """Insert what is pending and append it to the journal."""
        self._write_rows()
        if self._entries:
            entries, self._entries = self._entries, []
            self._appended = journal.append(self._connection, self._frontier(), entries)
            self._next_seq = self._appended.size

    def committed(self) -> None:
        """Tell the witness file how far the journal reaches, once that is durable."""
        if self._appended is None:
            return
        self.registry.frontier = self._appended.frontier
        if self.registry.head_path is not None:
            head.write(self.registry.head_path, head.Head(self._appended.size, self._appended.root))

    def _frontier(self) -> Frontier | None:
        return self._appended.frontier if self._appended is not None else self.registry.frontier

    # --- keeping one record --------------------------------------------------------

    def _digest(self, shape: Kind, row: Mapping[str, Any], linked: Mapping[str, LinkTarget]) -> bytes:
        links: dict[str, str | list[str]] = {}
        for column in shape.links:
            if row[column.name] is not None:
                links[column.role] = self.digest_hex(row[column.name])
        for role in shape.many:
            links[role] = [self.digest_hex(no) for no in _several(linked.get(role))]
        unknown = set(linked) - {column.role for column in shape.columns if column.target} - set(shape.many)
        if unknown:
            raise TypeError(f"a {shape.name} has no link {', '.join(sorted(unknown))}")
        return digest_of(shape.name, shape.content(row), links)

    def _withdrawn_note(self, no: int) -> tuple[str, ...]:
        if not self._taints or not withdrawn(self.connection, no):
            return ()
        return ("it is on record and withdrawn; to restore it, withdraw its withdrawal",)

    def _find(self, digest: bytes) -> int | None:
        if digest in self._known:
            return self._known[digest]
        return self._connection.execute(
            text("SELECT no FROM record WHERE digest = :digest"), {"digest": digest}
        ).scalar_one_or_none()

    def _add(
        self,
        shape: Kind,
        row: dict[str, Any],
        linked: Mapping[str, LinkTarget],
        digest: bytes,
        beside: Mapping[str, Json] | None,
    ) -> Kept:
        no = self._next_no
        self._next_no += 1
        self._known[digest] = no
        self._digests[no] = digest.hex()
        self._spine.append(
            {
                "no": no,
                "kind": shape.name,
                "digest": digest,
                "seq": self._next_seq + len(self._entries),
                "entered": self.entered,
                "person": self.registry.person,
            }
        )
        several = [
            (role, target) for role in shape.many for target in sorted(set(_several(linked.get(role))))
        ]
        self._links += [{"record_no": no, "role": role, "target_no": target} for role, target in several]
        self._entries.append(self._entry(shape, row, digest, beside))
        stored = {"no": no, "digest": digest, **row}
        if "volts" in row and shape.name == "tuning":
            stored["volts"] = self.registry.side.volts_parameter(row["volts"])
        self._rows.setdefault(shape.name, []).append(stored)
        if self._taints:
            # Last: it looks at the connection, which writes what is pending, the row too.
            self._inherit_taint(no, shape, row, several)
        return Kept(no, digest, new=True)

    def _entry(
        self, shape: Kind, row: Mapping[str, Any], digest: bytes, beside: Mapping[str, Json] | None
    ) -> str:
        aside: dict[str, Json] = {}
        for column in shape.asides:
            if row[column.name] is not None:
                value = row[column.name]
                aside[column.name] = self.digest_hex(value) if column.target else content_value(column, value)
        entry: dict[str, Json] = {
            "act": "record",
            "kind": shape.name,
            "digest": digest.hex(),
            "entered": format_instant(self.entered),
            "by": self.registry.person,
        }
        if aside:
            entry["aside"] = aside
        if beside:
            entry["beside"] = dict(beside)
        return canonical_text(entry)

    def _inherit_taint(
        self, no: int, shape: Kind, row: Mapping[str, Any], several: Iterable[tuple[str, int]]
    ) -> None:
        if shape.name == "withdrawal":
            return
        targets = [row[c.name] for c in shape.links if c.role not in NOT_TAINTING and row[c.name] is not None]
        targets += [target for role, target in several if role not in NOT_TAINTING]
        found = {line["withdrawal_no"] for line in self._tainted if line["record_no"] in set(targets)}
        found |= set(self._numbers("SELECT withdrawal_no FROM tainted WHERE record_no IN :nos", targets))
        self._tainted += [{"record_no": no, "withdrawal_no": withdrawal} for withdrawal in sorted(found)]

    # --- rows ----------------------------------------------------------------------

    def _write_rows(self) -> None:
        if self._spine:
            self._insert("record", self._spine)
            for kind in KINDS:
                if kind in self._rows:
                    self._insert(kind, self._rows.pop(kind))
            self._insert("link", self._links)
            self._spine, self._links = [], []
        if self._tainted:
            self._insert("tainted", self._tainted)
            self._tainted = []

    def _insert(self, table: str, rows: list[dict[str, Any]]) -> None:
        if rows:
            names = list(rows[0])
            columns = ", ".join(f'"{name}"' for name in names)
            values = ", ".join(f":{name}" for name in names)
            self._connection.execute(text(f'INSERT INTO "{table}" ({columns}) VALUES ({values})'), rows)

    def _resting_on(self, targets: list[int]) -> set[int]:
        found: set[int] = set()
        for kind in map(kind_of, KINDS):
            if kind.name == "withdrawal":
                continue
            for column in kind.links:
                if column.role not in NOT_TAINTING:
                    sql = f'SELECT no FROM "{kind.name}" WHERE "{column.name}" IN :nos'
                    found.update(self._numbers(sql, targets))
        roles = ", ".join(f"'{role}'" for role in sorted(NOT_TAINTING))
        sql = f"SELECT record_no FROM link WHERE role NOT IN ({roles}) AND target_no IN :nos"
        found.update(self._numbers(sql, targets))
        return found

    def _numbers(self, sql: str, nos: Sequence[int]) -> Iterable[int]:
        statement = text(sql).bindparams(bindparam("nos", expanding=True))
        chunks = (list(nos[i : i + CHUNK]) for i in range(0, len(nos), CHUNK))
        return chain.from_iterable(
            self.connection.execute(statement, {"nos": chunk}).scalars() for chunk in chunks
        )


def _several(target: LinkTarget) -> Sequence[int]:
    if target is None:
        return ()
    return (target,) if isinstance(target, int) else target


def refuse_future(at: int, now: int, where: str) -> None:
    """Refuse a time of act later than the clock.

    Raises:
        InputError: more than five minutes ahead (clocks of two computers differ).
    """
    if at > now + 5 * 60 * 1_000_000:
        moment = format_instant(at) if at < LAST_INSTANT else f"{at} microseconds"
        raise InputError(
            f"{moment} lies in the future (this computer's clock says {format_instant(now)})",
            where=where,
            remedy="check the time, its offset, and the computer's clock",
        )
