"""The journal's roots and proofs come out of its tiles, on every size and on both engines."""

from __future__ import annotations

import random
from collections.abc import Iterator

import pytest
from sqlalchemy import Connection, create_engine, event, text

from registry.errors import DamageError
from registry.keeping import journal
from registry.keeping.merkle import Frontier, leaf_hash, root_of, verify_consistency, verify_inclusion

TABLES = (
    "CREATE TABLE journal (seq INTEGER PRIMARY KEY, entry TEXT NOT NULL, leaf BLOB NOT NULL) STRICT",
    "CREATE TABLE tile (level INTEGER, pos INTEGER, hashes BLOB NOT NULL, PRIMARY KEY (level, pos)) STRICT",
)


@pytest.fixture
def connection() -> Iterator[Connection]:
    """Only the two tables, in memory."""
    engine = create_engine("sqlite://")
    with engine.begin() as opened:
        for statement in TABLES:
            opened.execute(text(statement))
        yield opened
    engine.dispose()


def entries(low: int, high: int) -> list[str]:
    return [f'{{"act":"number {number}"}}' for number in range(low, high)]


def leaves(size: int) -> list[bytes]:
    return [leaf_hash(entry.encode()) for entry in entries(0, size)]


def filled(connection: Connection, size: int) -> Frontier:
    return journal.append(connection, None, entries(0, size)).frontier


def test_an_append_tells_where_the_entries_went_and_the_new_root(connection: Connection) -> None:
    first = journal.append(connection, None, entries(0, 1))
    then = journal.append(connection, first.frontier, entries(1, 5))
    assert (first.first_seq, first.size, then.first_seq, then.size) == (0, 1, 1, 5)
    assert then.root == root_of(leaves(5)) == journal.root_at(connection, 5)
    assert journal.leaf(connection, 4) == leaves(5)[4]


def test_steps_of_any_length_give_the_rows_and_tiles_of_one_append(connection: Connection) -> None:
    draw = random.Random(20)
    edge, size = Frontier(), 0
    while size < 1500:
        step = draw.choice((1, 2, 255, 256, 257, 300))
        added = journal.append(connection, draw.choice((edge, None)), entries(size, size + step))
        edge, size = added.frontier, added.size
        assert added.root == root_of(leaves(size))
    stepwise = connection.execute(text("SELECT level, pos, hashes FROM tile ORDER BY pos")).all()
    assert len(stepwise) == size // 256
    for _, pos, hashes in stepwise:
        assert hashes == journal.tile_bytes(leaves(size)[pos * 256 : pos * 256 + 256])


def test_a_cached_frontier_that_another_writer_has_passed_is_not_used(connection: Connection) -> None:
    stale = filled(connection, 3)
    journal.append(connection, stale, entries(3, 9))
    assert journal.append(connection, stale, entries(9, 10)).root == root_of(leaves(10))


def test_roots_at_every_older_size_are_known(connection: Connection) -> None:
    filled(connection, 700)
    for size in (0, 1, 2, 255, 256, 257, 511, 512, 513, 699, 700):
        assert journal.root_at(connection, size) == root_of(leaves(size))


def test_the_second_level_of_tiles_serves_roots_and_proofs(connection: Connection) -> None:
    size = 65_536 + 700
    root = filled(connection, size).root()
    assert connection.execute(text("SELECT count(*) FROM tile WHERE level = 1")).scalar() == 1
    assert journal.root_at(connection, size) == root
    for seq in (0, 255, 256, 40_000, 65_535, 65_536, size - 1):
        path = journal.prove_inclusion(connection, seq, size)
        assert verify_inclusion(journal.leaf(connection, seq), seq, size, path, root)
    for old in (1, 256, 300, 65_535, 65_536, 65_600):
        path = journal.prove_consistency(connection, old, size)
        assert verify_consistency(old, size, journal.root_at(connection, old), root, path)


def test_a_root_reads_rows_as_the_logarithm_grows(connection: Connection) -> None:
    seen: list[str] = []
    event.listen(
        connection,
        "before_cursor_execute",
        lambda _c, _u, statement, *_: seen.append(statement),
    )
    filled(connection, 300)
    few = len(seen)
    journal.root_at(connection, 300)
    small = len(seen) - few
    journal.append(connection, None, entries(300, 20_300))
    many = len(seen)
    journal.root_at(connection, 20_300)
    assert len(seen) - many <= small + 2


@pytest.mark.parametrize("size", [-1, 4])
def test_a_size_the_journal_has_not_reached_is_a_programmers_error(connection: Connection, size: int) -> None:
    filled(connection, 3)
    with pytest.raises(ValueError, match="the journal holds 3 entries"):
        journal.root_at(connection, size)


def test_proofs_beyond_the_journal_are_programmers_errors(connection: Connection) -> None:
    filled(connection, 3)
    with pytest.raises(ValueError, match="holds 3 entries, not 4"):
        journal.prove_inclusion(connection, 0, 4)
    with pytest.raises(ValueError, match="holds 3 entries, not 4"):
        journal.prove_consistency(connection, 1, 4)
    with pytest.raises(ValueError, match="without entries"):
        journal.append(connection, None, [])


@pytest.mark.parametrize(
    ("harm", "size", "missing"),
    [
        ("DELETE FROM journal WHERE seq = 298", 300, "hashes 256 to 299"),
        ("UPDATE journal SET leaf = x'00' WHERE seq = 299", 300, "hashes 256 to 299"),
        ("DELETE FROM tile WHERE pos = 0", 300, "hashes 0 to 0 of level 8"),
        ("DELETE FROM tile WHERE pos = 0", 255, "tile 0 of level 0"),
        ("UPDATE tile SET hashes = substr(hashes, 2)", 300, "hashes 0 to 0 of level 8"),
        ("UPDATE tile SET hashes = substr(hashes, 2)", 255, "tile 0 of level 0"),
    ],
)
def test_a_hole_in_the_journal_is_damage_and_no_root(
    connection: Connection, harm: str, size: int, missing: str
) -> None:
    filled(connection, 300)
    connection.execute(text(harm))
    with pytest.raises(DamageError, match=missing):
        journal.root_at(connection, size)


def test_an_entry_that_is_not_there_is_damage(connection: Connection) -> None:
    with pytest.raises(DamageError, match="entry 7 is missing"):
        journal.leaf(connection, 7)
