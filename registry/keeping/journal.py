"""How is the append-only list of all acts kept, and what is its root?

``journal(seq, entry, leaf)`` holds every act as one line of canonical JSON with its leaf hash;
``tile(level, pos, hashes)`` holds runs of 256 tree hashes, written once when complete, so that
a root or a proof at any size reads a few hundred hashes and not all of them.  A tile of level 0
holds the leaf hashes of 256 entries, one of level 1 the roots of 256 tiles of level 0, and so
on; behind its 256 hashes stands the root over them (8,224 bytes in all), which spares the
level above from computing it again.

SQL text only, the same on both engines.  Deletes and changes nothing; transactions and locks
are the caller's.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from sqlalchemy import Connection, text

from registry.errors import DamageError
from registry.keeping.merkle import (
    Frontier,
    NodeSource,
    complete_root,
    consistency_proof,
    inclusion_proof,
    leaf_hash,
)

__all__ = [
    "HASH_BYTES",
    "TILE_BYTES",
    "TILE_WIDTH",
    "Appended",
    "append",
    "entry",
    "frontier",
    "leaf",
    "prove_consistency",
    "prove_inclusion",
    "root_at",
    "size_of",
    "tile_bytes",
]

TILE_HEIGHT = 8
"""Levels of the tree that one tile spans: 256 hashes keep a row near two database pages."""
TILE_WIDTH = 1 << TILE_HEIGHT
HASH_BYTES = 32
TILE_BYTES = (TILE_WIDTH + 1) * HASH_BYTES

_SIZE = text("SELECT max(seq) FROM journal")
_LEAF = text("SELECT leaf FROM journal WHERE seq = :seq")
_ENTRY = text("SELECT entry FROM journal WHERE seq = :seq")
_LEAVES = text("SELECT leaf FROM journal WHERE seq >= :low AND seq < :high ORDER BY seq")
_TILE = text("SELECT hashes FROM tile WHERE level = :level AND pos = :pos")
_ROOTS = text(
    f"SELECT substr(hashes, {TILE_WIDTH * HASH_BYTES + 1}, {HASH_BYTES}) FROM tile "
    "WHERE level = :level AND pos >= :low AND pos < :high ORDER BY pos"
)
_INSERT_ENTRY = text("INSERT INTO journal (seq, entry, leaf) VALUES (:seq, :entry, :leaf)")
_INSERT_TILE = text("INSERT INTO tile (level, pos, hashes) VALUES (:level, :pos, :hashes)")


@dataclass(frozen=True, slots=True)
class Appended:
    """Where entries went.

    Args:
        first_seq: number of the first of them.
        size: entries in the journal now.
        root: root over all of them.
        frontier: to be handed to the next ``append``, once the transaction has committed.
    """

    first_seq: int
    size: int
    root: bytes
    frontier: Frontier


def size_of(connection: Connection) -> int:
    """Number of entries (they are counted from 0 without gaps)."""
    last = connection.execute(_SIZE).scalar()
    return 0 if last is None else int(last) + 1


def append(connection: Connection, cached: Frontier | None, entries: Sequence[str]) -> Appended:
    """Append entries, which are canonical JSON texts, and the tiles that they complete.

    Args:
        connection: inside the write transaction, holding the write lock.
        cached: the ``frontier`` of the last committed append; taken if it fits the journal's
            size, else computed anew, so that another process may have written in between.
        entries: at least one text.

    Raises:
        ValueError: no entry was given.
        DamageError: the journal has a gap.
    """
    if not entries:
        raise ValueError("an append without entries")
    first = size_of(connection)
    edge = cached if cached is not None and cached.size == first else frontier(connection)
    leaves = [leaf_hash(written.encode()) for written in entries]
    connection.execute(
        _INSERT_ENTRY,
        [
            {"seq": first + place, "entry": written, "leaf": leaf_digest}
            for place, (written, leaf_digest) in enumerate(zip(entries, leaves, strict=True))
        ],
    )
    edge = edge.extended(leaves)
    _write_tiles(connection, first, edge.size)
    return Appended(first, edge.size, edge.root(), edge)


def leaf(connection: Connection, seq: int) -> bytes:
    """Leaf hash of one entry.

    Raises:
        DamageError: there is no such entry.
    """
    found = connection.execute(_LEAF, {"seq": seq}).scalar()
    digest = _octets(found)
    if len(digest) != HASH_BYTES:
        raise _gap(f"entry {seq}")
    return digest


def entry(connection: Connection, seq: int) -> str:
    """Canonical JSON text of one entry.

    Raises:
        DamageError: there is no such entry.
    """
    found = connection.execute(_ENTRY, {"seq": seq}).scalar()
    if found is None:
        raise _gap(f"entry {seq}")
    return str(found)


def frontier(connection: Connection, size: int | None = None) -> Frontier:
    """Frontier of the first ``size`` entries (None: all), from the tiles; reads O(256 log n).

    Raises:
        ValueError: there are fewer entries.
        DamageError: entries or tiles are missing.
    """
    present = size_of(connection)
    wanted = present if size is None else size
    if not 0 <= wanted <= present:
        raise ValueError(f"the journal holds {present} entries, not {wanted}")
    return Frontier.at(wanted, _nodes(connection, present))


def root_at(connection: Connection, size: int) -> bytes:
    """Root over the first ``size`` entries.

    Raises:
        ValueError: there are fewer entries.
        DamageError: entries or tiles are missing.
    """
    return frontier(connection, size).root()


def prove_inclusion(connection: Connection, seq: int, size: int) -> tuple[bytes, ...]:
    """Path from the leaf of entry ``seq`` to the root at ``size`` (``merkle.verify_inclusion``).

    Raises:
        ValueError: not ``0 <= seq < size <= entries``.
        DamageError: entries or tiles are missing.
    """
    return inclusion_proof(seq, size, _nodes(connection, _checked(connection, size)))


def prove_consistency(connection: Connection, old_size: int, new_size: int) -> tuple[bytes, ...]:
    """Proof that the journal at ``old_size`` is the beginning of the one at ``new_size``.

    Raises:
        ValueError: not ``0 < old_size <= new_size <= entries``.
        DamageError: entries or tiles are missing.
    """
    return consistency_proof(old_size, new_size, _nodes(connection, _checked(connection, new_size)))


def tile_bytes(hashes: Sequence[bytes]) -> bytes:
    """What a tile row holds for its 256 hashes: these, then the root over them."""
    return b"".join(hashes) + complete_root(hashes)


def _checked(connection: Connection, size: int) -> int:
    present = size_of(connection)
    if size > present:
        raise ValueError(f"the journal holds {present} entries, not {size}")
    return present


def _nodes(connection: Connection, present: int) -> NodeSource:
    """Source of complete subtrees over the tiles, each read at most once."""
    runs: dict[tuple[int, int], list[bytes]] = {}

    def node(level: int, index: int) -> bytes:
        tile_level, height = divmod(level, TILE_HEIGHT)
        first = index << height
        pos, offset = divmod(first, TILE_WIDTH)
        key = tile_level, pos
        if key not in runs:
            runs[key] = _run(connection, tile_level, pos, present)
        hashes = runs[key][offset : offset + (1 << height)]
        if len(hashes) != 1 << height:
            raise _gap(f"a hash of level {level} beside entry {index << level}")
        return complete_root(hashes)

    return node


def _run(connection: Connection, level: int, pos: int, present: int) -> list[bytes]:
    """The hashes of tile (level, pos), also of one that is not complete yet."""
    low = pos * TILE_WIDTH
    high = min(low + TILE_WIDTH, present >> TILE_HEIGHT * level)
    if high - low == TILE_WIDTH:
        stored = _octets(connection.execute(_TILE, {"level": level, "pos": pos}).scalar())
        if len(stored) != TILE_BYTES:
            raise _gap(f"tile {pos} of level {level}")
        return _cut(stored)[:TILE_WIDTH]
    return _members(connection, level, low, high)


def _members(connection: Connection, level: int, low: int, high: int) -> list[bytes]:
    """Hashes ``low`` to ``high - 1`` of a tile level, from what stands below it."""
    if level == 0:
        rows = connection.execute(_LEAVES, {"low": low, "high": high})
    else:
        rows = connection.execute(_ROOTS, {"level": level - 1, "low": low, "high": high})
    hashes = [_octets(row[0]) for row in rows]
    if len(hashes) != high - low or any(len(each) != HASH_BYTES for each in hashes):
        raise _gap(f"hashes {low} to {high - 1} of level {level * TILE_HEIGHT}")
    return hashes


def _write_tiles(connection: Connection, old_size: int, new_size: int) -> None:
    """Insert the tiles that became complete between two sizes, lower levels first."""
    level = 0
    while (after := new_size >> TILE_HEIGHT * (level + 1)) > 0:
        before = old_size >> TILE_HEIGHT * (level + 1)
        rows = []
        for pos in range(before, after):
            hashes = _members(connection, level, pos * TILE_WIDTH, (pos + 1) * TILE_WIDTH)
            rows.append({"level": level, "pos": pos, "hashes": tile_bytes(hashes)})
        if rows:
            connection.execute(_INSERT_TILE, rows)
        level += 1


def _cut(run: bytes) -> list[bytes]:
    return [run[place : place + HASH_BYTES] for place in range(0, len(run), HASH_BYTES)]


def _octets(stored: object) -> bytes:
    """Bytes as stored; none where a damaged page gives something else or nothing."""
    return bytes(stored) if isinstance(stored, bytes | memoryview) else b""


def _gap(what: str) -> DamageError:
    return DamageError(
        f"the journal is incomplete: {what} is missing",
        where="journal",
        remedy="run `millikeep audit` for the extent, then restore the newest backup",
    )
