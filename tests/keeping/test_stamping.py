"""A stamp fits on a line, is read back from a person's hand, and no single slip goes unnoticed."""

from __future__ import annotations

import contextlib
import string
from hashlib import sha256

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sqlalchemy import text

from registry.errors import DamageError, InputError
from registry.keeping import head
from registry.keeping.handle import Registry
from registry.keeping.journal import root_at
from registry.keeping.opening import opening_entry
from registry.keeping.stamping import Stamp, parse_stamp, stamp
from registry.records.instants import format_instant, parse_instant

ONE = Stamp(
    registry_id="3f9a01c2" + "0" * 56,
    size=1234,
    root=sha256(b"root").digest(),
    time=parse_instant("2026-03-02T14:30:00.5Z"),
)
LINE = "millikeep 3f9a01c2/1234/2026-03-02T14:30:00Z/"

stamps = st.builds(
    Stamp,
    registry_id=st.binary(min_size=32, max_size=32).map(bytes.hex),
    size=st.integers(1, 10**9),
    root=st.binary(min_size=32, max_size=32),
    time=st.integers(0, 4 * 10**15),
)


def add_chip(registry: Registry, label: str) -> None:
    with registry.writing() as writer:
        writer.keep("chip", label=label)


def test_a_line_shows_registry_size_time_root_and_check() -> None:
    line = ONE.line()
    assert line.startswith(LINE)
    root, check = line.removeprefix(LINE).split("/")
    assert [len(group) for group in root.split()] == [4] * 8
    assert len(check) == 4


@given(stamps)
def test_a_line_is_read_back_and_is_at_most_a_hundred_characters(made: Stamp) -> None:
    read = parse_stamp(made.line())
    assert read.line() == made.line()
    assert (read.registry_id, read.size) == (made.registry_id[:8], made.size)
    assert read.root == made.root[:20]
    assert read.time == made.time // 1_000_000 * 1_000_000
    assert len(made.line()) <= 100


@given(stamps, st.data())
def test_any_single_wrong_character_is_refused_or_means_the_same(made: Stamp, data: st.DataObject) -> None:
    line = made.line()
    place = data.draw(st.integers(0, len(line) - 1))
    other = data.draw(st.sampled_from([letter for letter in string.printable if letter != line[place]]))
    read = line
    with contextlib.suppress(InputError):
        read = parse_stamp(line[:place] + other + line[place + 1 :]).line()
    assert read == line


def test_every_single_wrong_character_of_one_line_is_refused_or_means_the_same() -> None:
    line = ONE.line()
    read_the_same = 0
    for place in range(len(line)):
        for other in string.digits + string.ascii_letters + "/ -:":
            with contextlib.suppress(InputError):
                assert parse_stamp(line[:place] + other + line[place + 1 :]).line() == line
                read_the_same += 1
    # Itself, its other case, and the digits that base 32 does not have: a few in each place.
    assert read_the_same <= 3 * len(line)


@given(stamps, st.data())
def test_two_swapped_characters_are_refused(made: Stamp, data: st.DataObject) -> None:
    line = made.line().upper()
    start = len("millikeep ")
    first, second = data.draw(st.tuples(*[st.integers(start, len(line) - 1)] * 2))
    letters = list(line)
    letters[first], letters[second] = letters[second], letters[first]
    swapped = "".join(letters)
    if swapped.replace(" ", "") != line.replace(" ", "") and letters[first] != " " != letters[second]:
        with pytest.raises(InputError):
            parse_stamp(swapped)


@pytest.mark.parametrize(
    "typed",
    [
        ONE.line().upper(),
        ONE.line().lower(),
        ONE.line().replace(" ", ""),
        ONE.line().replace("/", " / "),
        "  " + ONE.line().removeprefix("millikeep ") + "\n",
        ONE.line().replace("/", "\n/\n"),
    ],
)
def test_spaces_case_and_the_first_word_do_not_matter(typed: str) -> None:
    assert parse_stamp(typed).line() == ONE.line()


def test_digits_that_the_root_cannot_hold_are_read_as_the_letters_they_look_like() -> None:
    made = Stamp(ONE.registry_id, 7, bytes.fromhex("70" * 32), ONE.time)
    typed = made.line().split("/")
    assert "O" in typed[3]
    typed[3] = typed[3].replace("O", "0")
    assert parse_stamp("/".join(typed)).root == made.root[:20]


@pytest.mark.parametrize(
    ("typed", "words"),
    [
        ("", "five parts"),
        ("millikeep", "five parts"),
        (ONE.line().replace("/", " "), "five parts"),
        (ONE.line().replace("1234", ""), "its size cannot be ''"),
        (ONE.line().replace("1234", "-12"), "its size"),
        (ONE.line().replace("3f9a01c2", "3f9a01"), "its registry"),
        (ONE.line().replace("2026-", "26-"), "its time"),
        (ONE.line()[:-5] + "2/" + ONE.line()[-4:], "its root"),
        (ONE.line()[:-4] + "AAAA", "check characters differ"),
        (ONE.line().replace("1234", "1243"), "check characters differ"),
    ],
)
def test_what_cannot_be_a_stamp_says_why(typed: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        parse_stamp(typed)


def test_a_stamp_holds_the_journal_as_it_is(registry_on: Registry) -> None:
    add_chip(registry_on, "K7")
    made = stamp(registry_on)
    with registry_on.reading() as connection:
        assert made.registry_id == opening_entry(connection)["registry"]
        assert made.root == root_at(connection, 2)
        entered = connection.execute(text("SELECT entered FROM record")).scalar_one()
    assert (made.size, made.time) == (2, entered)


def test_a_stamp_changes_only_when_something_is_recorded(registry_on: Registry) -> None:
    first = stamp(registry_on)
    assert stamp(registry_on) == first
    add_chip(registry_on, "K7")
    assert stamp(registry_on).line() != first.line()


def test_each_stamp_leaves_a_witness_in_the_file_store(registry_on: Registry) -> None:
    registry_on.files.put_bytes(b"the first file makes the folder")
    first = stamp(registry_on)
    add_chip(registry_on, "K7")
    second = stamp(registry_on)
    path = registry_on.files.root / "head"
    assert head.read(path) == head.Head(second.size, second.root)
    assert head.slots(path)[0] == head.Head(first.size, first.root)


def test_a_stamp_of_a_registry_without_files_leaves_its_witness_too(registry_on: Registry) -> None:
    made = stamp(registry_on)
    assert head.read(registry_on.files.root / "head") == head.Head(made.size, made.root)


def test_the_json_of_a_stamp_holds_the_whole_root() -> None:
    assert ONE.to_json() == {
        "registry": ONE.registry_id,
        "size": 1234,
        "root": ONE.root.hex(),
        "time": format_instant(ONE.time),
        "line": ONE.line(),
    }


def test_an_unreadable_last_entry_is_damage(registry_here: Registry) -> None:
    with registry_here.side.writing.begin() as connection:
        connection.execute(text('DROP TRIGGER "journal_no_update"'))
        connection.execute(text("UPDATE journal SET entry = '[]'"))
    with pytest.raises(DamageError, match="entry 0 of the journal cannot be read"):
        stamp(registry_here)
