"""The canonical form is that of RFC 8785, whatever the structure, and never changes."""

from __future__ import annotations

import hashlib
import json
import math
from pathlib import Path
from typing import Any

import pytest
import rfc8785
from hypothesis import given
from hypothesis import strategies as st

from registry.records.canonical import canonical_bytes, canonical_text

GOLDEN = json.loads((Path(__file__).parent / "golden_canonical.json").read_text("utf-8"))

TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
NUMBERS = st.one_of(
    st.integers(-(2**53) + 1, 2**53 - 1),
    st.floats(allow_nan=False, allow_infinity=False),
    st.floats(1e-7, 1e-3),
    st.floats(1e14, 1e22),
    st.integers(2**53, 2**70).map(float),
)
VALUES: st.SearchStrategy[Any] = st.recursive(
    st.one_of(st.none(), st.booleans(), NUMBERS, TEXTS),
    lambda inner: st.one_of(
        st.lists(inner, max_size=4), st.tuples(inner), st.dictionaries(TEXTS, inner, max_size=4)
    ),
    max_leaves=12,
)


@given(VALUES)
def test_every_structure_is_written_as_the_package_rfc8785_writes_it(value: Any) -> None:
    assert canonical_bytes(value) == rfc8785.dumps(value)


@given(VALUES)
def test_the_text_reads_back_to_the_same_text(value: Any) -> None:
    text = canonical_text(value)
    assert canonical_text(json.loads(text, parse_int=lambda t: int(t) if len(t) < 16 else float(t))) == text


@pytest.mark.parametrize("case", GOLDEN, ids=lambda case: case["name"])
def test_the_form_of_schema_version_1_stays_as_it_is(case: dict[str, Any]) -> None:
    assert canonical_text(case["value"]) == case["text"]
    assert hashlib.sha256(canonical_bytes(case["value"])).hexdigest() == case["sha256"]


def test_names_above_the_basic_plane_sort_by_utf16_units() -> None:
    assert canonical_text({"\ufb33": 1, "\U0001f600": 2}) == '{"\U0001f600":2,"\ufb33":1}'


@pytest.mark.parametrize("number", [math.nan, math.inf, -math.inf, 2**53, -(2**53)])
def test_a_number_without_json_form_is_refused(number: float) -> None:
    with pytest.raises(ValueError, match="JSON"):
        canonical_text([number])


@pytest.mark.parametrize("value", [b"x", {1}, object(), 1j])
def test_what_json_does_not_have_is_refused(value: Any) -> None:
    with pytest.raises(TypeError, match="canonical form"):
        canonical_text({"x": value})


def test_a_lone_surrogate_has_no_bytes() -> None:
    with pytest.raises(UnicodeEncodeError):
        canonical_bytes("\ud800")


def test_a_negative_zero_is_written_as_zero() -> None:
    assert canonical_text([-0.0, 0.0, 0]) == "[0,0,0]"
