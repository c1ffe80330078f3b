"""Is the journal whole, do its hashes agree, and does each entry have its record?

Every leaf, every tile and the root are computed again from the entries, and the root is
compared with each witness outside the database.
"""

from __future__ import annotations

import json
from collections.abc import Generator, Mapping, Sequence
from contextlib import closing
from typing import Any

from sqlalchemy import Connection, text

from registry.keeping.findings import RESTORE, STREAMED, Course, octets
from registry.keeping.head import Head
from registry.keeping.journal import TILE_HEIGHT, TILE_WIDTH, tile_bytes
from registry.keeping.merkle import Frontier, complete_root, leaf_hash

__all__ = ["JournalAudit"]

_REBUILD = (
    "the entries themselves are sound, only hashes kept for speed are not: restore the newest backup, "
    "as proofs of this journal cannot be made until then"
)


class JournalAudit:
    """One pass over the journal.

    Args:
        course: takes the findings.
        witnesses: name -> size and root that were noted outside the database.

    Attributes:
        frontier: of the entries read so far; after ``run`` of all of them.
    """

    def __init__(self, course: Course, witnesses: Mapping[str, Sequence[Head]]) -> None:
        self.frontier = Frontier()
        self._course = course
        self._noted = [(name, head) for name, heads in witnesses.items() for head in heads]
        self._sizes = {head.size for _, head in self._noted}
        self._roots: dict[int, bytes] = {}
        self._open: list[list[bytes]] = []  # hashes of the tiles under way, by tile level
        self._tiles = 0
        self._whole = True

    def run(self, connection: Connection) -> None:
        """Read the whole journal."""
        with self._course.part(connection, "table journal"), closing(self._records(connection)) as records:
            record = next(records, None)
            rows = connection.execute(
                text("SELECT seq, entry, leaf FROM journal ORDER BY seq"), execution_options=STREAMED
            )
            for seq, entry, leaf in rows:
                while record is not None and record[0] < seq:
                    record = next(records, None)
                self._entry(connection, seq, str(entry), octets(leaf), record)
                self._course.step()
        with self._course.part(connection, "table tile"):
            self._count_tiles(connection)
        self._compare_witnesses()

    @staticmethod
    def _records(connection: Connection) -> Generator[tuple[int, bytes]]:
        statement = text("SELECT seq, digest FROM record ORDER BY seq")
        with connection.execute(statement, execution_options=STREAMED) as rows:
            for seq, digest in rows:
                yield int(seq), octets(digest)

    def _entry(
        self, connection: Connection, seq: int, entry: str, leaf: bytes, record: tuple[int, bytes] | None
    ) -> None:
        where = f"journal, entry {seq}"
        expected = self.frontier.size
        if self._whole and seq != expected:
            gap = (
                f"entries {expected} to {seq - 1} are missing"
                if seq > expected
                else f"entry {seq} is strange"
            )
            self._course.find(f"the journal is not whole: {gap}", where=where)
            self._whole = False
        computed = leaf_hash(entry.encode("utf-8", "surrogatepass"))
        if computed != leaf:
            self._course.find("the entry is not the one that was written: its hash differs", where=where)
        self._audit_act(seq, entry, record, where)
        self.frontier = self.frontier.extended((computed,))
        if self.frontier.size in self._sizes:
            self._roots[self.frontier.size] = self.frontier.root()
        self._into_tile(connection, 0, computed)

    def _audit_act(self, seq: int, entry: str, record: tuple[int, bytes] | None, where: str) -> None:
        """The first entry opens the registry; an entry of a record has that record."""
        try:
            told: Any = json.loads(entry)
            act, digest = told["act"], told.get("digest")
        except (ValueError, TypeError, KeyError, AttributeError, RecursionError):
            self._course.find("the entry cannot be read", where=where)
            return
        if (seq == 0) != (act == "opening"):
            self._course.find("the journal does not begin with the opening of a registry", where=where)
        if act == "record":
            if record is None or record[0] != seq:
                name = f"{told.get('kind')} {str(digest)[:10]}"
                self._course.find(f"{name} was recorded here and is gone from the records", where=where)
            elif record[1].hex() != digest:
                self._course.find(f"the entry's record is another one ({record[1].hex()[:10]})", where=where)
        elif record is not None and record[0] == seq:
            self._course.find(
                f"record {record[1].hex()[:10]} points at an entry that is no record", where=where
            )

    def _into_tile(self, connection: Connection, level: int, node: bytes) -> None:
        """Add a hash to a tile level; compare the tile when it is full, and go up."""
        if level == len(self._open):
            self._open.append([])
        hashes = self._open[level]
        hashes.append(node)
        if len(hashes) < TILE_WIDTH:
            return
        self._open[level] = []
        pos = (self.frontier.size >> TILE_HEIGHT * (level + 1)) - 1
        if self._whole:  # after a gap every tile differs, which says nothing more
            stored = connection.execute(
                text("SELECT hashes FROM tile WHERE level = :level AND pos = :pos"),
                {"level": level, "pos": pos},
            ).scalar()
            if stored is None or octets(stored) != tile_bytes(hashes):
                state = "is missing" if stored is None else "does not agree with the entries"
                where = f"table tile, level {level}, pos {pos}"
                self._course.find(f"a block of kept hashes {state}", where=where, remedy=_REBUILD)
        self._tiles += 1
        self._into_tile(connection, level + 1, complete_root(hashes))

    def _count_tiles(self, connection: Connection) -> None:
        count = int(connection.execute(text("SELECT count(*) FROM tile")).scalar_one())
        if self._whole and count > self._tiles:
            what = f"there are {count - self._tiles} blocks of kept hashes too many"
            self._course.find(what, where="table tile", remedy=_REBUILD)

    def _compare_witnesses(self) -> None:
        size = self.frontier.size
        for name, head in self._noted:
            if head.size > size:
                self._course.find(
                    f"{head.size - size} acknowledged entries are missing from the end of the journal "
                    f"({head.size} were seen, {size} are there)",
                    where=name,
                )
            elif self._roots.get(head.size, head.root if head.size == 0 else None) != head.root:
                self._course.find(
                    f"the first {head.size} entries of the journal are not those that were acknowledged",
                    where=name,
                    remedy=RESTORE,
                )
