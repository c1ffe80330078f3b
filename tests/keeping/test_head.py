"""The head file survives torn writes, never goes back, and finds what the database lost."""

from __future__ import annotations

from hashlib import sha256
from pathlib import Path

import pytest

from registry.errors import DamageError
from registry.keeping.head import Head, check, read, slots, write


def head(size: int) -> Head:
    return Head(size, sha256(str(size).encode()).digest())


def root_at(size: int) -> bytes:
    return head(size).root


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "head"


def test_what_was_noted_is_read(path: Path) -> None:
    for size in (1, 2, 7, 10**12):
        assert write(path, head(size))
        assert read(path) == head(size)


def test_the_two_slots_alternate(path: Path) -> None:
    for size in (1, 2, 3):
        write(path, head(size))
    assert slots(path) == (head(3), head(2))


def test_no_file_is_no_witness(path: Path) -> None:
    assert read(path) is None
    check(read(path), 5, root_at, where="here")


def test_a_later_note_of_an_earlier_commit_changes_nothing(path: Path) -> None:
    write(path, head(9))
    assert not write(path, head(8))
    assert read(path) == head(9)


def test_any_damage_to_the_newest_slot_leaves_the_older(path: Path) -> None:
    write(path, head(1))
    write(path, head(2))
    whole = path.read_bytes()
    middle = len(whole) // 2
    for place in range(middle, len(whole)):
        path.write_bytes(whole[:place] + bytes([whole[place] ^ 1]) + whole[place + 1 :])
        assert read(path) == head(1)
        path.write_bytes(whole[:place])
        assert read(path) == head(1)


def test_a_damaged_slot_is_written_over_next(path: Path) -> None:
    write(path, head(1))
    write(path, head(2))
    path.write_bytes(b"x" * 40 + path.read_bytes()[40:])
    write(path, head(3))
    assert slots(path) == (head(3), head(2))


def test_a_file_of_noise_is_no_witness(path: Path) -> None:
    path.write_bytes(bytes(range(256)))
    assert read(path) is None
    assert write(path, head(4))
    assert read(path) == head(4)


def test_a_disk_that_refuses_the_note_does_not_undo_the_commit(tmp_path: Path) -> None:
    assert not write(tmp_path / "no folder" / "head", head(1))


def test_a_lagging_witness_is_in_order() -> None:
    check(head(3), 3, root_at, where="here")
    check(head(3), 8, root_at, where="here")


def test_missing_entries_are_counted() -> None:
    with pytest.raises(DamageError, match="4 acknowledged entries are missing") as caught:
        check(head(12), 8, root_at, where="lab registry")
    assert caught.value.where == "lab registry"
    assert "backup" in caught.value.remedy


def test_a_journal_of_other_content_is_found() -> None:
    with pytest.raises(DamageError, match="first 3 entries"):
        check(Head(3, bytes(32)), 8, root_at, where="here")
