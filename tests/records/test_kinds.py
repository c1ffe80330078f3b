"""What the tables say about identity is what the digest takes."""

from __future__ import annotations

import math
from typing import Any

import pytest

from registry.errors import InputError
from registry.records.canonical import canonical_text
from registry.records.kinds import Column, content_value, kind_of, stored_value
from registry.records.tables import KINDS, kept_tables
from registry.records.volts import block_sha256, pack


def column(form: str, *, nullable: bool = True) -> Column:
    return Column("x", form, None, nullable, False)


def test_every_kind_knows_its_columns() -> None:
    for name in KINDS:
        kind = kind_of(name)
        assert kind.columns
        assert {*kind.links, *kind.contents, *kind.asides} == set(kind.columns)


def test_an_unknown_kind_is_a_programmers_fault() -> None:
    with pytest.raises(KeyError):
        kind_of("wafer")


@pytest.mark.parametrize(
    ("kind", "asides"),
    [
        ("tuning", {"moment"}),
        ("measurement", {"moment", "file_name"}),
        ("analysis", {"refused", "warnings"}),
        ("standing", {"device_no", "tuning_moment"}),
        ("chip", set()),
    ],
)
def test_what_stands_outside_the_identity_is_as_promised(kind: str, asides: set[str]) -> None:
    assert {column.name for column in kind_of(kind).asides} == asides


def test_change_records_hold_what_they_saw_and_when() -> None:
    for name in ("gate_sheet", "wiring", "criteria", "standing", "amendment", "withdrawal"):
        kind = kind_of(name)
        assert "after" in kind.many
        assert "at" in {column.name for column in kind.contents}


def test_a_column_that_is_null_is_no_content() -> None:
    kind = kind_of("chip")
    assert kind.content({"label": "K7", "wafer": None, "lot": None, "die": None}) == {"label": "K7"}


FORMS: list[tuple[str, Any, Any, Any]] = [
    ("text", "cafe\u0301", "caf\u00e9", "caf\u00e9"),
    ("json", {"b": 1, "a": [1e17, 2.0]}, '{"a":[100000000000000000,2],"b":1}', {"a": [1e17, 2], "b": 1}),
    ("instant", 1, 1, "1970-01-01T00:00:00.000001Z"),
    ("real", -0.0, 0.0, 0.0),
    ("integer", 7, 7, 7),
]


@pytest.mark.parametrize(("form", "given", "stored", "content"), FORMS)
def test_a_value_is_stored_and_digested_in_its_form(form: str, given: Any, stored: Any, content: Any) -> None:
    kept = stored_value(column(form), given, "x")
    assert kept == stored
    assert content_value(column(form), kept) == content


def test_volts_are_digested_as_their_sha256() -> None:
    block = stored_value(column("volts"), [0.5, math.nan], "x")
    assert block == pack([0.5, math.nan])
    assert content_value(column("volts"), block) == {"sha256": block_sha256(block)}


@pytest.mark.parametrize("number", [2.0**53, 2.0**53 + 2, 1e17, 123456789012345680.0, -1e20, 1e21, 1e300])
def test_large_whole_doubles_in_json_keep_their_canonical_text(number: float) -> None:
    stored = stored_value(column("json"), {"v": number}, "x")
    assert canonical_text(content_value(column("json"), stored)) == stored


def test_a_missing_value_is_a_programmers_fault() -> None:
    with pytest.raises(TypeError, match="must be given"):
        stored_value(column("text", nullable=False), None, "chip, label")


@pytest.mark.parametrize(
    ("form", "value"), [("text", 5), ("real", "5"), ("integer", 0.5), ("json", math.inf)]
)
def test_a_wrong_value_is_named_with_its_place(form: str, value: Any) -> None:
    with pytest.raises(InputError) as caught:
        stored_value(column(form), value, "parameter, value")
    assert caught.value.where == "parameter, value"


def test_parents_are_made_before_children() -> None:
    order = kept_tables()
    assert order.index("record") < order.index("chip") < order.index("device") < order.index("tuning")
    assert set(KINDS) < set(order)
