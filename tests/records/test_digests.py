"""A record's digest depends on kind, content and links alone, and never changes again."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from registry.records.canonical import Json
from registry.records.digests import digest_of
from registry.records.kinds import kind_of
from registry.records.tables import KINDS

GOLDEN = json.loads((Path(__file__).parent / "golden_digests.json").read_text("utf-8"))
A, B, C = ("aa" * 32, "bb" * 32, "cc" * 32)


@pytest.mark.parametrize("case", GOLDEN, ids=lambda case: case["kind"])
def test_digests_of_schema_version_1_stay_as_they_are(case: dict[str, Any]) -> None:
    assert digest_of(case["kind"], case["content"], case["links"]).hex() == case["digest"]


def test_there_is_a_golden_digest_of_every_kind() -> None:
    assert {case["kind"] for case in GOLDEN} == set(KINDS)


@pytest.mark.parametrize("case", GOLDEN, ids=lambda case: case["kind"])
def test_golden_records_use_columns_and_links_that_are_there(case: dict[str, Any]) -> None:
    kind = kind_of(case["kind"])
    assert set(case["content"]) <= {column.name for column in kind.contents}
    assert set(case["links"]) <= {column.role for column in kind.links} | set(kind.many)


@pytest.mark.parametrize("case", GOLDEN, ids=lambda case: case["kind"])
def test_a_column_that_is_added_later_does_not_change_a_digest(case: dict[str, Any]) -> None:
    content = {**case["content"], "a_later_column": None}
    links = {**case["links"], "a_later_link": [], "another": ()}
    assert digest_of(case["kind"], content, links).hex() == case["digest"]


CHANGES: dict[str, tuple[str, dict[str, Json], dict[str, str | list[str]]]] = {
    "kind": ("parameter", {"label": "K7"}, {"chip": A}),
    "value": ("chip", {"label": "K8"}, {"chip": A}),
    "name": ("chip", {"labels": "K7"}, {"chip": A}),
    "one more": ("chip", {"label": "K7", "lot": "L"}, {"chip": A}),
    "link": ("chip", {"label": "K7"}, {"chip": B}),
    "role": ("chip", {"label": "K7"}, {"device": A}),
    "link as a set of one": ("chip", {"label": "K7"}, {"chip": [A]}),
    "no link": ("chip", {"label": "K7"}, {}),
    "content as link": ("chip", {"label": "K7", "chip": A}, {}),
}


@pytest.mark.parametrize("case", CHANGES)
def test_any_change_of_identity_changes_the_digest(case: str) -> None:
    kind, content, links = CHANGES[case]
    assert digest_of(kind, content, links) != digest_of("chip", {"label": "K7"}, {"chip": A})


def test_several_links_of_a_role_are_a_set() -> None:
    one = digest_of("cooldown", {}, {"chips": [A, B, C]})
    assert one == digest_of("cooldown", {}, {"chips": [C, A, B]})
    assert one == digest_of("cooldown", {}, {"chips": (C, A, B, A)})


def test_order_of_members_does_not_matter() -> None:
    assert digest_of("chip", {"a": 1, "b": 2}, {}) == digest_of("chip", {"b": 2, "a": 1}, {})
