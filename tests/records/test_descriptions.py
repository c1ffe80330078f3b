"""A description refuses nonsense when it is made, whoever makes it."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import pytest

from registry.errors import InputError
from registry.records.descriptions import Gate, Line, PairLimit, Requirement, Site, check_name


def gate(**more: Any) -> Gate:
    values: dict[str, Any] = {
        "gate": "P1",
        "role": "plunger",
        "x_nm": 0,
        "y_nm": 0,
        "v_min": -1,
        "v_max": 1,
        "max_step": 0.01,
        "max_rate": 0.1,
    }
    return Gate(**{**values, **more})


def line(**more: Any) -> Line:
    values: dict[str, Any] = {
        "line": "L1",
        "gates": ("P1",),
        "source": "rack A",
        "divider": 5,
        "offset": 0.0,
        "out_min": -10,
        "out_max": 10,
        "resolution": 1e-4,
    }
    return Line(**{**values, **more})


NAMES = ["", "-x", "a b", "a\tb", "a:b", "a/b", "a,b", "a;b", "a=b", 'a"b', "a'b", "a\u200bb", "a\u202eb"]


@pytest.mark.parametrize("name", [*NAMES, "x" * 101, "a\0", "\ud800", 5, None])
def test_a_name_unfit_for_tables_is_refused(name: object) -> None:
    with pytest.raises(InputError) as caught:
        check_name(name, "gate name")
    assert caught.value.where == "gate name"


@pytest.mark.parametrize("name", ["P1", "ρ_x", "x" * 100, "7", "B1.2", "(a)"])
def test_a_usable_name_is_kept(name: str) -> None:
    assert check_name(name, "gate name") == name


BAD: dict[str, tuple[Callable[[], object], str]] = {
    "limits exchanged": (lambda: gate(v_min=1, v_max=-1), "v_min"),
    "limits equal": (lambda: gate(v_min=1, v_max=1), "v_min"),
    "limit unknown": (lambda: gate(v_max=math.nan), "not finite"),
    "limit a word": (lambda: gate(v_max="1"), "not a number"),
    "no step": (lambda: gate(max_step=0), "max_step"),
    "backward rate": (lambda: gate(max_rate=-0.1), "max_rate"),
    "site without name": (lambda: Site("", "dot", ("P1",)), "name"),
    "site with a gate twice": (lambda: Site("Q1", "dot", ("P1", "P1")), "twice"),
    "strange carrier": (lambda: Site("Q1", "dot", ("P1",), carrier="muon"), "muon"),
    "pair with itself": (lambda: PairLimit("P1", "P1", -1, 1), "itself"),
    "pair limits exchanged": (lambda: PairLimit("P1", "P2", 1, -1), "low"),
    "line to nothing": (lambda: line(gates=()), "no gate"),
    "divider below 1": (lambda: line(divider=0.5), "below 1"),
    "divider zero": (lambda: line(divider=0, gain=True), "not positive"),
    "divider negative": (lambda: line(divider=-5), "not positive"),
    "range exchanged": (lambda: line(out_min=10, out_max=-10), "out_min"),
    "no resolution": (lambda: line(resolution=0), "resolution"),
    "strange kind": (lambda: line(kind="ac"), "ac"),
    "negative spread": (lambda: line(divider_u=-0.1), "divider_u"),
    "filter at zero": (lambda: line(filter_hz=0), "filter_hz"),
    "no limit": (lambda: Requirement("lever_arm"), "exactly one"),
    "two limits": (lambda: Requirement("lever_arm", at_most=1, at_least=0), "exactly one"),
    "negative guard": (lambda: Requirement("lever_arm", at_most=1, guard=-1), "guard"),
    "strange scope": (lambda: Requirement("lever_arm", at_most=1, scope="year"), "year"),  # type: ignore[arg-type]
    "no age": (lambda: Requirement("lever_arm", at_most=1, max_age_days=0), "max_age_days"),
    "limit infinite": (lambda: Requirement("lever_arm", at_most=math.inf), "not finite"),
}


@pytest.mark.parametrize("case", BAD)
def test_nonsense_is_refused_with_its_name(case: str) -> None:
    make, word = BAD[case]
    with pytest.raises(InputError, match=word):
        make()


DESCRIBED = [
    gate(ramp_order=2, notes={"colour": "red"}),
    Site("Q1", "dot", ("P1", "B1"), carrier="hole"),
    PairLimit("P1", "P2", -0.5, 0.5),
    line(kind="fast", divider_u=0.01, filter_hz=1e6, attenuation_db=20, gain=True),
    Requirement("lever_arm", at_least=0.05, unit="eV/V", subject="Q1", guard=1.0, scope="stretch"),
]


@pytest.mark.parametrize("described", DESCRIBED, ids=lambda d: type(d).__name__)
def test_a_description_comes_back_from_its_content(described: Any) -> None:
    content = {name: list(v) if isinstance(v, tuple) else v for name, v in described.content().items()}
    again = type(described).from_content({**content, "of_a_later_version": 1})
    assert again.content() == described.content()


def test_what_is_not_set_is_no_content() -> None:
    assert "ramp_order" not in gate().content()
    assert "notes" not in gate().content()
    assert set(Requirement("lever_arm", at_most=1).content()) == {"quantity", "at_most", "guard", "scope"}


def test_numbers_become_doubles() -> None:
    assert type(gate().v_min) is float


def test_volts_go_through_a_line_and_back() -> None:
    behind = line(divider=4.0, offset=0.125)
    assert behind.at_source(0.5) == 1.5
    assert behind.at_gate(1.5) == 0.5
