"""Nothing is altered: a change is a record that says so and holds what it saw."""

from __future__ import annotations

from typing import Any

import pytest
from sqlalchemy import text

from registry.errors import InputError, LookupFailed
from registry.keeping.auditing import audit
from registry.keeping.changing import AMENDABLE, amend, attach, same_as, withdraw
from registry.keeping.cooling import mark_event
from registry.keeping.describing import add_chip
from registry.keeping.handle import Registry
from registry.keeping.judging import judge
from registry.keeping.naming import amended, find_chip, find_record, withdrawn
from registry.keeping.tunings import revisit_tuning
from registry.keeping.writing import Kept
from registry.records.instants import now_us
from registry.records.tables import KINDS


def is_withdrawn(registry: Registry, digest: str) -> bool:
    with registry.reading() as connection:
        return withdrawn(connection, find_record(connection, digest).no)


def after(registry: Registry, kept: Kept) -> list[int]:
    with registry.reading() as connection:
        sql = text("SELECT target_no FROM link WHERE record_no = :no AND role = 'after'")
        return list(connection.execute(sql, {"no": kept.no}).scalars())


def test_an_amended_field_has_its_last_value_whatever_was_said_between(registry_on: Registry) -> None:
    chip = add_chip(registry_on, "K7")
    for number, value in enumerate(["clean", "dusty", "clean"]):
        assert amend(registry_on, chip.hex, "note", value, why="looked", at=number).new
        with registry_on.reading() as connection:
            assert amended(connection, chip.no, "note") == value


def test_an_amendment_holds_the_one_it_saw(registry_on: Registry) -> None:
    chip = add_chip(registry_on, "K7")
    first = amend(registry_on, chip.hex, "note", "a", why="x", at=1)
    second = amend(registry_on, chip.hex, "note", "b", why="x", at=2)
    other = amend(registry_on, chip.hex, "material", "Si", why="x", at=3)
    assert (after(registry_on, first), after(registry_on, second)) == ([], [first.no])
    assert after(registry_on, other) == []


def unseen(registry: Registry, target: int, value: str, at: int) -> Kept:
    """An amendment from a computer that had seen none."""
    with registry.writing() as writer:
        return writer.keep(
            "amendment", links={"target": target, "after": []}, field="note", value=value, why="x", at=at
        )


def test_two_amendments_that_did_not_see_each_other_are_both_shown(registry_on: Registry) -> None:
    chip = add_chip(registry_on, "K7")
    unseen(registry_on, chip.no, "dusty", 2)
    unseen(registry_on, chip.no, "clean", 1)
    with registry_on.reading() as connection:
        assert amended(connection, chip.no, "note") == "clean | dusty"
    amend(registry_on, chip.hex, "note", "clean", why="looked again", at=3)
    with registry_on.reading() as connection:
        assert amended(connection, chip.no, "note") == "clean"


def test_two_amendments_to_one_value_are_no_conflict(registry_on: Registry) -> None:
    chip = add_chip(registry_on, "K7")
    unseen(registry_on, chip.no, "clean", 1)
    unseen(registry_on, chip.no, "clean", 2)
    with registry_on.reading() as connection:
        assert amended(connection, chip.no, "note") == "clean"


def test_a_withdrawn_amendment_gives_back_the_earlier_value(registry_on: Registry) -> None:
    chip = add_chip(registry_on, "K7")
    amend(registry_on, chip.hex, "note", "a", why="x", at=1)
    second = amend(registry_on, chip.hex, "note", "b", why="x", at=2)
    withdraw(registry_on, second.hex, why="slip", at=3)
    with registry_on.reading() as connection:
        assert amended(connection, chip.no, "note") == "a"


BAD_AMENDMENTS = [
    ("wafer", "W1", "x", "'wafer' of a chip"),
    ("digest", "00", "x", "cannot be amended"),
    ("note", "b", "  ", "no reason"),
    ("note", "a\0", "x", "U+0000"),
]


@pytest.mark.parametrize(("field", "value", "why", "word"), BAD_AMENDMENTS)
def test_an_amendment_that_cannot_be_is_refused(
    registry_here: Registry, field: str, value: str, why: str, word: str, count: Any
) -> None:
    chip = add_chip(registry_here, "K7")
    with pytest.raises(InputError) as caught:
        amend(registry_here, chip.hex, field, value, why=why, at=1)
    assert word in str(caught.value)
    assert count(registry_here, "amendment") == 0


@pytest.mark.parametrize("call", [amend, withdraw])
def test_a_change_of_an_unknown_record_or_in_the_future_is_refused(
    registry_here: Registry, call: Any
) -> None:
    chip = add_chip(registry_here, "K7").hex
    more = ("note", "x") if call is amend else ()
    with pytest.raises(LookupFailed):
        call(registry_here, "abcdef0123", *more, why="x")
    with pytest.raises(InputError, match="future"):
        call(registry_here, chip, *more, why="x", at=now_us() + 10**9)


def test_only_kinds_that_are_there_can_be_amended() -> None:
    assert set(AMENDABLE) <= set(KINDS)


def test_a_withdrawn_record_taints_what_hangs_on_it_but_not_its_children_or_successors(lab: Any) -> None:
    state = lab.state(1)
    standing = judge(lab.registry, state, "good", why="x", at=lab.day(2)).hex
    newer = judge(lab.registry, state, "poor", why="x", at=lab.day(3)).hex
    child = revisit_tuning(lab.registry, state, at=lab.day(4)).hex
    withdraw(lab.registry, standing, why="x", at=lab.day(5))
    assert not is_withdrawn(lab.registry, newer)
    withdraw(lab.registry, state, why="wrong wire", at=lab.day(6))
    assert [is_withdrawn(lab.registry, r) for r in (state, standing, newer, child)] == [
        True,
        True,
        True,
        False,
    ]
    assert audit(lab.registry).findings == ()


def test_what_is_recorded_later_on_a_withdrawn_record_is_tainted_too(lab: Any, rehashed: Any) -> None:
    state, other = lab.state(1), lab.state(2)
    withdraw(lab.registry, state, why="wrong wire", at=lab.day(3))
    standing = judge(lab.registry, state, "good", why="x", at=lab.day(4)).hex
    fine = judge(lab.registry, other, "good", why="x", at=lab.day(4)).hex
    noted = amend(lab.registry, standing, "note", "x", why="x", at=lab.day(5)).hex
    assert [is_withdrawn(lab.registry, r) for r in (standing, noted, fine)] == [True, True, False]
    assert {standing, noted, fine} <= set(rehashed(lab.registry))
    assert audit(lab.registry).findings == ()


def test_several_records_of_one_block_inherit_taint_from_each_other(lab: Any, rehashed: Any) -> None:
    state = lab.state(1)
    withdraw(lab.registry, state, why="wrong wire", at=lab.day(2))
    with lab.registry.writing():
        first = judge(lab.registry, state, "good", why="x", at=lab.day(3)).hex
        second = amend(lab.registry, first, "note", "x", why="x", at=lab.day(4)).hex
    assert is_withdrawn(lab.registry, first)
    assert is_withdrawn(lab.registry, second)
    assert {first, second} <= set(rehashed(lab.registry))
    assert audit(lab.registry).findings == ()


def test_a_withdrawn_withdrawal_restores_and_cannot_be_withdrawn_again(lab: Any) -> None:
    state = lab.state(1)
    standing = judge(lab.registry, state, "good", why="x", at=lab.day(2)).hex
    first = withdraw(lab.registry, state, why="wrong", at=lab.day(3))
    second = withdraw(lab.registry, first.hex, why="was right", at=lab.day(4))
    assert not is_withdrawn(lab.registry, state)
    assert not is_withdrawn(lab.registry, standing)
    with pytest.raises(InputError, match="restored"):
        withdraw(lab.registry, second.hex, why="x", at=lab.day(5))
    withdraw(lab.registry, state, why="wrong after all", at=lab.day(6))
    assert is_withdrawn(lab.registry, standing)
    assert audit(lab.registry).findings == ()


def test_a_reason_is_needed(lab_here: Any) -> None:
    state = lab_here.state(1)
    with pytest.raises(InputError, match="no reason"):
        withdraw(lab_here.registry, state, why="\n ")
    with pytest.raises(InputError, match="no reason"):
        same_as(lab_here.registry, "K7", add_chip(lab_here.registry, "K8").hex, why="")


def test_one_chip_is_not_said_to_be_itself(lab_here: Any) -> None:
    with lab_here.registry.reading() as connection:
        chip = find_chip(connection, "K7").hex
    with pytest.raises(InputError, match="one record already"):
        same_as(lab_here.registry, "K7", chip[:10], why="x")


def test_which_chip_is_named_first_makes_no_difference(lab_here: Any) -> None:
    add_chip(lab_here.registry, "K8")
    one = same_as(lab_here.registry, "K7", "K8", why="x", at=1)
    assert same_as(lab_here.registry, "K8", "K7", why="x", at=1).hex == one.hex


def test_a_file_is_attached_and_kept(lab: Any, tmp_path: Any) -> None:
    event = mark_event(lab.registry, "C1", "note", note="photo", at=lab.day(1)).hex
    (tmp_path / "photo.png").write_bytes(b"\x89PNG photo")
    kept = attach(lab.registry, event, tmp_path / "photo.png")
    assert lab.row("attachment", kept.hex)["file_name"] == "photo.png"
    (digest,) = lab.registry.files
    assert lab.registry.files.open_path(digest).read_bytes() == b"\x89PNG photo"


def test_a_file_that_cannot_be_attached_leaves_nothing(lab_here: Any, tmp_path: Any, count: Any) -> None:
    state = lab_here.state(1)
    before = count(lab_here.registry)
    for path in (tmp_path, tmp_path / "nowhere"):
        with pytest.raises(InputError):
            attach(lab_here.registry, state, path)
    with pytest.raises(LookupFailed):
        attach(lab_here.registry, "abcdef0123", __file__)
    assert count(lab_here.registry) == before
