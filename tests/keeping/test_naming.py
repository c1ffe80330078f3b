"""What people type finds one record, or lists what it could have been."""

from __future__ import annotations

import hashlib
from typing import Any

import pytest

from registry.errors import LookupFailed
from registry.keeping.changing import amend, same_as, withdraw
from registry.keeping.cooling import begin_cooldown, mark_event
from registry.keeping.describing import add_chip, add_device
from registry.keeping.handle import Registry
from registry.keeping.naming import (
    amended,
    device_name,
    find_chip,
    find_cooldown,
    find_device,
    find_record,
    find_tuning,
    open_cooldown,
    short,
    withdrawn,
)


def colliding(registry: Registry, digits: int = 6) -> list[str]:
    """Ids of two raw files that share their first hex digits."""
    from registry.records.digests import digest_of

    seen: dict[str, int] = {}
    for size in range(200_000):
        prefix = digest_of("raw_file", {"sha256": "00" * 32, "size": size}, {}).hex()[:digits]
        if prefix in seen:
            with registry.writing() as writer:
                return [writer.keep("raw_file", sha256="00" * 32, size=n).hex for n in (seen[prefix], size)]
        seen[prefix] = size
    raise AssertionError("no two alike")


def test_an_unambiguous_prefix_of_six_digits_is_enough(lab: Any) -> None:
    state = lab.state(1)
    with lab.registry.reading() as connection:
        for typed in (state[:6], state[:7], state, state[:12].upper(), f" {state[:10]} "):
            assert find_record(connection, typed).hex == state
            assert find_tuning(connection, typed).hex == state


@pytest.mark.parametrize("typed", ["", "abc12", "xyzxyz", "g" * 64, "a" * 65, "%", "12345'"])
def test_what_is_no_id_is_told_so(lab: Any, typed: str) -> None:
    with lab.registry.reading() as connection, pytest.raises(LookupFailed):
        find_record(connection, typed)


def test_an_ambiguous_prefix_lists_what_it_could_be(registry_on: Registry) -> None:
    one, two = colliding(registry_on)
    with registry_on.reading() as connection:
        with pytest.raises(LookupFailed) as caught:
            find_record(connection, one[:6])
        assert one[:10] in str(caught.value)
        assert two[:10] in str(caught.value)
        shared = next(i for i in range(64) if one[i] != two[i])
        assert find_record(connection, one[: shared + 1]).hex == one


def test_a_short_id_is_the_shortest_that_finds_its_record(registry_on: Registry) -> None:
    ids = colliding(registry_on)
    with registry_on.reading() as connection:
        for digest in ids:
            shown = short(connection, bytes.fromhex(digest))
            assert len(shown) == 10
            assert find_record(connection, shown).hex == digest


def test_a_record_of_another_kind_is_named(lab: Any) -> None:
    state = lab.state(1)
    with lab.registry.reading() as connection, pytest.raises(LookupFailed, match="is a tuning"):
        find_record(connection, state[:10], ("chip",))


def test_latest_and_previous_follow_the_time_of_the_state(lab: Any) -> None:
    late, early = lab.state(3), lab.state(2)
    with lab.registry.reading() as connection:
        device = find_device(connection, lab.device)
        for typed, expected in (("latest", late), ("previous", early)):
            assert find_tuning(connection, typed).hex == expected
            assert find_tuning(connection, typed, device).hex == expected
            assert find_tuning(connection, f"K7/D1:{typed}").hex == expected


def test_a_withdrawn_state_is_never_the_latest(lab: Any) -> None:
    good, bad = lab.state(1), lab.state(2)
    withdrawal = withdraw(lab.registry, bad, why="wrong", at=lab.day(3)).hex
    with lab.registry.reading() as connection:
        assert find_tuning(connection, "latest").hex == good
    withdraw(lab.registry, withdrawal, why="was right", at=lab.day(4))
    with lab.registry.reading() as connection:
        assert find_tuning(connection, "latest").hex == bad


def test_there_may_be_no_previous_state(lab: Any) -> None:
    lab.state(1)
    with lab.registry.reading() as connection, pytest.raises(LookupFailed, match="no previous"):
        find_tuning(connection, "K7/D1:previous")


def test_latest_of_several_devices_asks_whose(lab: Any) -> None:
    add_device(lab.registry, "K7/D2", gates=lab.gates[:1], at=lab.day(1))
    from registry.keeping.tunings import record_tuning

    lab.state(1)
    record_tuning(lab.registry, "K7/D2", {"P1": 0.1}, at=lab.day(2))
    with lab.registry.reading() as connection, pytest.raises(LookupFailed, match="K7/D1, K7/D2") as caught:
        find_tuning(connection, "latest")
    assert "K7/D1:latest" in caught.value.remedy


def test_a_device_is_found_by_name_path_and_id(lab: Any) -> None:
    with lab.registry.reading() as connection:
        found = find_device(connection, "K7/D1")
        assert find_device(connection, "D1") == found
        assert find_device(connection, found.hex[:8]) == found
        assert device_name(connection, found.no) == "K7/D1"


@pytest.mark.parametrize("typed", ["K7/D9", "K9/D1", "D9", "", "/", "K7/"])
def test_an_unknown_device_lists_the_known(lab: Any, typed: str) -> None:
    with lab.registry.reading() as connection, pytest.raises(LookupFailed) as caught:
        find_device(connection, typed)
    assert "K7" in caught.value.remedy or "chip" in str(caught.value)


def test_a_bare_name_on_two_chips_is_ambiguous(lab: Any) -> None:
    add_chip(lab.registry, "K8")
    add_device(lab.registry, "K8/D1", gates=lab.gates, at=lab.day(1))
    with lab.registry.reading() as connection:
        with pytest.raises(LookupFailed, match="K7/D1, K8/D1"):
            find_device(connection, "D1")
        assert find_device(connection, "K8/D1").no != find_device(connection, "K7/D1").no


def test_an_amended_label_and_the_old_one_both_find(lab: Any) -> None:
    with lab.registry.reading() as connection:
        chip, device = find_chip(connection, "K7"), find_device(connection, "K7/D1")
    amend(lab.registry, chip.hex, "label", "K7b", why="relabelled", at=lab.day(1))
    amend(lab.registry, device.hex, "name", "D1b", why="renamed", at=lab.day(1))
    with lab.registry.reading() as connection:
        assert find_chip(connection, "K7b") == find_chip(connection, "K7") == chip
        assert find_device(connection, "K7b/D1b") == find_device(connection, "K7/D1") == device
        assert device_name(connection, device.no) == "K7b/D1b"
        assert amended(connection, chip.no, "material") is None


def test_two_chips_of_one_label_are_listed_and_one_once_said_to_be_the_same(lab: Any) -> None:
    other = add_chip(lab.registry, "K7", wafer="W9").hex
    with lab.registry.reading() as connection:
        with pytest.raises(LookupFailed, match="wafer W9"):
            find_chip(connection, "K7")
        first = find_record(connection, other).no
    with lab.registry.reading() as connection:
        ids = [r.hex for r in (find_chip(connection, other[:10]),)]
    with lab.registry.reading() as connection:
        from sqlalchemy import text

        digest = connection.execute(text("SELECT digest FROM chip WHERE wafer IS NULL")).scalar_one()
    said = same_as(lab.registry, bytes(digest).hex()[:12], ids[0][:12], why="one die", at=lab.day(1))
    with lab.registry.reading() as connection:
        assert find_chip(connection, "K7").digest == bytes(digest)
        assert find_device(connection, "K7/D1")
        assert find_chip(connection, other[:10]).no == first
    withdraw(lab.registry, said.hex, why="two after all", at=lab.day(2))
    with lab.registry.reading() as connection, pytest.raises(LookupFailed):
        find_chip(connection, "K7")


def test_a_cooldown_is_found_by_label_id_and_old_label(lab: Any) -> None:
    with lab.registry.reading() as connection:
        found = find_cooldown(connection, "C1")
        assert find_cooldown(connection, found.hex[:9], find_device(connection, "K7/D1")) == found
        with pytest.raises(LookupFailed) as caught:
            find_cooldown(connection, "C9")
    assert "C1" in caught.value.remedy
    amend(lab.registry, found.hex, "label", "2026-a", why="renamed", at=lab.day(1))
    with lab.registry.reading() as connection:
        assert find_cooldown(connection, "2026-a") == find_cooldown(connection, "C1") == found


def test_the_same_cooldown_label_of_two_chips_is_told_apart_by_the_device(lab: Any) -> None:
    add_chip(lab.registry, "K8")
    other = begin_cooldown(lab.registry, "C1", cryostat="Red", chips=["K8"], at=lab.day(1))
    with lab.registry.reading() as connection:
        with pytest.raises(LookupFailed, match="could be"):
            find_cooldown(connection, "C1")
        device = find_device(connection, "K7/D1")
        assert find_cooldown(connection, "C1", device).hex != other.hex


def test_a_cooldown_is_open_from_its_begin_to_its_warm_up(lab: Any) -> None:
    mark_event(lab.registry, "C1", "warm-up", kelvin=77, at=lab.day(3))
    mark_event(lab.registry, "C1", "warm-up", at=lab.day(5))
    with lab.registry.reading() as connection:
        chip = find_chip(connection, "K7").no
        assert [open_cooldown(connection, chip, lab.day(d)) is not None for d in (-1, 0, 2, 4, 5, 6)] == [
            False,
            True,
            True,
            True,
            False,
            False,
        ]


def test_what_hangs_on_a_withdrawn_record_is_withdrawn(lab: Any) -> None:
    state = lab.state(1)
    with lab.registry.reading() as connection:
        cooldown, found = find_cooldown(connection, "C1"), find_tuning(connection, state)
        assert not withdrawn(connection, found.no)
    withdraw(lab.registry, cooldown.hex, why="never happened", at=lab.day(2))
    with lab.registry.reading() as connection:
        assert withdrawn(connection, found.no)
        with pytest.raises(LookupFailed):
            find_cooldown(connection, "C1")


def test_a_label_that_looks_like_an_id_is_found_as_a_label(registry_on: Registry) -> None:
    label = hashlib.sha256(b"x").hexdigest()[:8]
    chip = add_chip(registry_on, label)
    with registry_on.reading() as connection:
        assert find_chip(connection, label).hex == chip.hex
