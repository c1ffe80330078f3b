"""One write path: all or nothing, the same thing once, and the same id everywhere."""

from __future__ import annotations

import json
import random
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from sqlalchemy import text

from registry.errors import InputError, RegistryError
from registry.keeping.auditing import audit
from registry.keeping.changing import amend, attach, same_as, withdraw
from registry.keeping.cooling import begin_cooldown, mark_event, revise_wiring
from registry.keeping.describing import add_chip, add_device, add_quantity, mark_gate, revise_device
from registry.keeping.handle import Registry
from registry.keeping.judging import add_criteria, judge
from registry.keeping.naming import find_device
from registry.keeping.opening import create
from registry.keeping.tunings import record_tuning, revisit_tuning
from registry.keeping.writing import Kept, refuse_future
from registry.records.descriptions import Requirement
from registry.records.kinds import kind_of
from registry.records.tables import kept_tables
from registry.records.volts import unpack

# Every writing call, each on a laboratory with a state ``s`` of day 1 and a second chip.
CALLS: dict[str, Callable[[Any, str], Kept]] = {
    "add_chip": lambda lab, s: add_chip(lab.registry, "N1", lot="L", material="Si", note="new"),
    "add_device": lambda lab, s: add_device(
        lab.registry, "K8/D2", gates=lab.gates, family="twin", at=lab.day(1)
    ),
    "revise_device": lambda lab, s: revise_device(
        lab.registry, lab.device, pairs=[], why="none", at=lab.day(2)
    ),
    "mark_gate": lambda lab, s: mark_gate(
        lab.registry, lab.device, "P1", "leaky", above_v=0.7, at=lab.day(2)
    ),
    "begin_cooldown": lambda lab, s: begin_cooldown(
        lab.registry, "C2", cryostat="Blue", chips=["K7"], wiring=lab.lines(6.0), at=lab.day(9)
    ),
    "mark_event": lambda lab, s: mark_event(lab.registry, "C1", "power-loss", at=lab.day(2)),
    "revise_wiring": lambda lab, s: revise_wiring(
        lab.registry, "C1", lab.lines(6.0), correct=True, why="misread", at=lab.day(2)
    ),
    "add_quantity": lambda lab, s: add_quantity(
        lab.registry, "sheet_density", unit="1", valid_until="device"
    ),
    "record_tuning": lambda lab, s: lab.record(2, {"P1": 0.25}, purpose="readout", sites=["Q1"]),
    "revisit_tuning": lambda lab, s: revisit_tuning(lab.registry, s, at=lab.day(3)),
    "add_criteria": lambda lab, s: add_criteria(
        lab.registry, "cold", [Requirement("electron_temperature", at_most=200, unit="mK")], at=lab.day(1)
    ),
    "judge": lambda lab, s: judge(lab.registry, s, "good", why="clean", at=lab.day(2)),
    "amend": lambda lab, s: amend(lab.registry, s, "note", "seen", why="asked", at=lab.day(2)),
    "withdraw": lambda lab, s: withdraw(lab.registry, s, why="wrong wire", at=lab.day(2)),
    "same_as": lambda lab, s: same_as(lab.registry, "K7", "K8", why="one die", at=lab.day(2)),
    "attach": lambda lab, s: attach(lab.registry, s, __file__),
}


def prepared(lab: Any) -> str:
    add_chip(lab.registry, "K8", die="4")
    return str(lab.state(1))


class Undo(Exception):
    pass


def test_what_was_recorded_is_seen_through_another_handle(lab: Any, reopen: Any, rehashed: Any) -> None:
    state = prepared(lab)
    ids = {name: call(lab, state).hex for name, call in CALLS.items()}
    with reopen() as other:
        found = rehashed(other)
        assert {name: found[digest] for name, digest in ids.items()} == ids
        assert audit(other).findings == ()


@pytest.mark.parametrize("name", CALLS)
def test_the_same_again_gives_the_same_id_and_records_nothing(lab_here: Any, count: Any, name: str) -> None:
    state = prepared(lab_here)
    first = CALLS[name](lab_here, state)
    before = count(lab_here.registry), count(lab_here.registry, "journal")
    again = CALLS[name](lab_here, state)
    assert (again.hex, again.no, again.new) == (first.hex, first.no, False)
    assert (count(lab_here.registry), count(lab_here.registry, "journal")) == before


def test_inside_an_outer_block_the_ids_are_the_same(lab_here: Any, lab_twin: Any, rehashed: Any) -> None:
    state = prepared(lab_here)
    alone = {name: call(lab_here, state).hex for name, call in CALLS.items()}
    with lab_twin.registry.writing():
        assert prepared(lab_twin) == state
        inside = {name: call(lab_twin, state).hex for name, call in CALLS.items()}
        assert not any(call(lab_twin, state).new for call in CALLS.values())
    assert inside == alone
    assert set(alone.values()) <= set(rehashed(lab_twin.registry))
    assert audit(lab_twin.registry).findings == ()


def tables(registry: Registry, count: Any) -> list[int]:
    return [count(registry, table) for table in kept_tables()]


def recorded_and_undone(lab: Any, state: str, call: Callable[[Any, str], Kept]) -> None:
    with lab.registry.writing():
        assert call(lab, state).new
        raise Undo


def test_a_block_that_fails_leaves_nothing(lab: Any, reopen: Any, count: Any) -> None:
    state = prepared(lab)
    before = tables(lab.registry, count)
    for call in CALLS.values():
        with pytest.raises(Undo):
            recorded_and_undone(lab, state, call)
    with reopen() as other:
        assert tables(other, count) == before
    assert CALLS["judge"](lab, state).new
    assert audit(lab.registry).findings == ()


@pytest.mark.parametrize("name", CALLS)
def test_everything_can_be_recorded_after_a_withdrawal(lab_here: Any, rehashed: Any, name: str) -> None:
    state = prepared(lab_here)
    withdraw(lab_here.registry, lab_here.state(0.5), why="wrong", at=lab_here.day(1))
    kept = CALLS[name](lab_here, state)
    assert rehashed(lab_here.registry)[kept.hex] == kept.hex
    assert audit(lab_here.registry).findings == ()


def test_an_inner_block_joins_the_outer_one(registry_on: Registry, reopen: Any, count: Any) -> None:
    with registry_on.writing() as outer:
        with registry_on.writing() as inner:
            assert inner is outer
            add_chip(registry_on, "K7")
        with registry_on.reading() as connection:
            assert connection.execute(text("SELECT count(*) FROM chip")).scalar_one() == 1
        with reopen(read_only=registry_on.engine_name != "sqlite") as other:
            assert count(other, "chip") == 0
    assert count(registry_on, "chip") == 1


def test_an_empty_block_writes_nothing(registry_on: Registry, count: Any) -> None:
    with registry_on.writing():
        pass
    assert count(registry_on, "journal") == 1


def test_two_programs_count_on_from_each_other(registry_on: Registry, reopen: Any) -> None:
    with reopen() as other:
        for number in range(3):
            add_chip(registry_on, f"A{number}")
            add_chip(other, f"B{number}")
        with registry_on.reading() as connection:
            nos = connection.execute(text("SELECT no FROM record ORDER BY no")).scalars().all()
    assert list(nos) == [1, 2, 3, 4, 5, 6]
    assert audit(registry_on).findings == ()


def test_a_chip_named_twice_in_a_cooldown_is_in_it_once(registry_on: Registry, rehashed: Any) -> None:
    add_chip(registry_on, "K7")
    twice = begin_cooldown(registry_on, "C1", cryostat="Blue", chips=["K7", "K7"], at=1)
    once = begin_cooldown(registry_on, "C1", cryostat="Blue", chips=["K7"], at=1)
    assert once.hex == twice.hex
    assert rehashed(registry_on)[once.hex] == once.hex


@pytest.mark.parametrize(
    ("call", "word"),
    [
        (lambda w: w.keep("chip", label="x", colour="red"), "colour"),
        (lambda w: w.keep("chip", label="x", links={"device": 1}), "device"),
        (lambda w: w.keep("device", name="x"), "chip"),
        (lambda w: w.keep("chip"), "label"),
    ],
)
def test_misuse_by_a_programmer_is_a_type_error(registry_here: Registry, call: Any, word: str) -> None:
    with pytest.raises(TypeError, match=word), registry_here.writing() as writer:
        call(writer)


def test_a_time_ahead_of_the_clock_is_refused_beyond_five_minutes() -> None:
    refuse_future(300_000_000, 0, "x")
    with pytest.raises(InputError, match="future"):
        refuse_future(300_000_001, 0, "x")


def test_a_registry_opened_to_read_refuses_to_write(registry_on: Registry, reopen: Any, count: Any) -> None:
    if registry_on.engine_name == "sqlite":
        registry_on.close()  # an immutable file has no other writer
    with reopen(read_only=True) as other:
        with pytest.raises(RegistryError) as caught:
            add_chip(other, "K7")
        assert "may write" in caught.value.remedy
        assert count(other, "chip") == 0


# --- values that are easily changed on the way -----------------------------------------

AWKWARD_TEXT = st.one_of(
    st.sampled_from(
        ["", "cafe\u0301", "\u212b", "µV μV", "a'b\"c\\", "\n\t\x01", "😀", "\u2028", "%s :x ?", "{}"]
    ),
    st.text(st.characters(exclude_categories=["Cs", "Cn"], exclude_characters="\0"), max_size=8),
)
AWKWARD_FLOAT = st.one_of(
    st.sampled_from(
        [-0.0, 5e-324, -5e-324, 1.7976931348623157e308, 2.0**53, 2.0**53 + 2, 1e16, 1e17, 1e21, 0.1, 1e-7]
    ),
    st.floats(allow_nan=False, allow_infinity=False),
)
AWKWARD_JSON: st.SearchStrategy[Any] = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(-(2**53) + 1, 2**53 - 1), AWKWARD_FLOAT, AWKWARD_TEXT),
    lambda inner: st.one_of(
        st.lists(inner.filter(lambda v: v is not None), max_size=3),
        st.dictionaries(st.sampled_from(["", "a", "é", "\ufb33", "😀", "b c"]), inner, max_size=3),
    ),
    max_leaves=8,
)
FEW = settings(max_examples=12, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@FEW
@given(
    texts=st.lists(AWKWARD_TEXT, min_size=4, max_size=4),
    value=AWKWARD_FLOAT,
    whole=st.integers(-(2**53) + 1, 2**53 - 1),
    nested=AWKWARD_JSON,
    volts=st.lists(st.floats(allow_infinity=False), min_size=3, max_size=3),
)
def test_awkward_values_give_the_same_digest_when_read_back(
    lab: Any, rehashed: Any, texts: list[str], value: float, whole: int, nested: Any, volts: list[float]
) -> None:
    with lab.registry.writing() as writer:
        device = find_device(writer.connection, lab.device).no
        state = {name: lab_no(writer, name) for name in ("device", "cooldown", "gate_sheet")}
        kept = [
            writer.keep("chip", label=texts[0], lot=texts[1], wafer=texts[2], die=texts[3]),
            writer.keep("raw_file", sha256=texts[0], size=whole),
            writer.keep(
                "parameter",
                links={"device": device},
                quantity="x",
                value=value,
                unit=texts[1],
                standard_uncertainty=value,
                notes=nested,
                moment=0,
            ),
            writer.keep("tuning", links=state, level="gate", volts=volts, settings=nested, at=5, moment=5),
        ]
    found = rehashed(lab.registry)
    assert [found[one.hex] for one in kept] == [one.hex for one in kept]


def lab_no(writer: Any, kind: str) -> int:
    return int(writer.connection.execute(text(f'SELECT min(no) FROM "{kind}"')).scalar_one())


# --- two registries that hold the same things ------------------------------------------


def copied(source: Registry, target: Registry, order: list[int]) -> None:
    """Keep the source's records in the target, in an order that puts what is linked first."""
    numbers: dict[int, int] = {}
    with source.reading() as connection, target.writing() as writer:
        spine = {r.no: r.kind for r in connection.execute(text("SELECT no, kind FROM record"))}
        many: dict[int, list[tuple[str, int]]] = {}
        for link in connection.execute(text("SELECT record_no, role, target_no FROM link")):
            many.setdefault(link.record_no, []).append((link.role, link.target_no))

        def keep(no: int) -> int:
            if no not in numbers:
                kind = kind_of(spine[no])
                sql = text(f'SELECT * FROM "{kind.name}" WHERE no = :no')
                row = connection.execute(sql, {"no": no}).mappings().one()
                links: dict[str, Any] = {
                    c.role: keep(row[c.name]) for c in kind.columns if c.target and row[c.name] is not None
                }
                for role, other in many.get(no, []):
                    links[role] = [*links.get(role, []), keep(other)]
                values = {c.name: plain(c.form, row[c.name]) for c in kind.columns if not c.target}
                numbers[no] = writer.keep(kind.name, links=links, **values).no
            return numbers[no]

        for no in order:
            keep(no)


def plain(form: str, stored: Any) -> Any:
    if stored is None:
        return None
    return json.loads(stored) if form == "json" else unpack(stored) if form == "volts" else stored


def history(lab: Any, *, only: str) -> None:
    """A part that two computers share, and one that only this computer has."""
    state = prepared(lab)
    judge(lab.registry, state, "good", why="clean", at=lab.day(2))
    if only == "a":
        withdraw(lab.registry, lab.state(3), why="wrong", at=lab.day(4))
    else:
        judge(lab.registry, state, "poor", why="drifted", at=lab.day(3))
        record_tuning(lab.registry, lab.device, {"B1": -0.5}, at=lab.day(5), parent=state)


@pytest.mark.parametrize("seed", range(2))
def test_two_registries_joined_are_the_union_in_whatever_order(
    lab: Any, lab_twin: Any, tmp_path: Path, digests: Any, rehashed: Any, count: Any, seed: int
) -> None:
    history(lab, only="a")
    other = lab_twin.registry
    history(lab_twin, only="b")
    with create(tmp_path / "joined") as joined:
        for source in (lab.registry, other) if seed % 2 else (other, lab.registry):
            order = list(range(1, count(source) + 1))
            random.Random(seed).shuffle(order)
            copied(source, joined, order)
        assert digests(joined) == digests(lab.registry) | digests(other)
        assert len(digests(lab.registry) & digests(other)) > 5
        assert all(stored == again for stored, again in rehashed(joined).items())
