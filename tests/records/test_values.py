"""Values are brought to one form at entry, and what could not keep its form is refused."""

from __future__ import annotations

import enum
import math
from decimal import Decimal
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from registry.errors import InputError
from registry.records.canonical import canonical_text
from registry.records.values import (
    DEEPEST_JSON,
    LONGEST_TEXT,
    normal_float,
    normal_int,
    normal_json,
    normal_text,
)


class Word(str, enum.Enum):  # noqa: UP042 - the older form, whose str() is not its value
    GOOD = "good"


def test_text_is_composed() -> None:
    assert normal_text("cafe\u0301", "note") == "caf\u00e9"


def test_micro_and_mu_stay_two_letters() -> None:
    assert normal_text("\u00b5", "note") != normal_text("\u03bc", "note")


@pytest.mark.parametrize("value", [np.str_("good"), Word.GOOD], ids=["numpy", "enum"])
def test_a_subclass_of_text_becomes_plain_text(value: str) -> None:
    assert type(normal_text(value, "note")) is str
    assert canonical_text(normal_json({"x": value}, "note")) == '{"x":"good"}'


@pytest.mark.parametrize("value", ["a\0b", "\ud800", "\u0378", 5, None, b"x"])
def test_text_that_cannot_be_kept_is_refused(value: object) -> None:
    with pytest.raises(InputError) as caught:
        normal_text(value, "the note")
    assert caught.value.where == "the note"


def test_the_refused_character_is_named() -> None:
    with pytest.raises(InputError, match=r"U\+0378"):
        normal_text("caf\u00e9 \u0378", "note")


def test_the_longest_text_is_kept_and_one_more_is_refused() -> None:
    assert len(normal_text("x" * LONGEST_TEXT, "note")) == LONGEST_TEXT
    with pytest.raises(InputError, match="100,001 characters"):
        normal_text("x" * (LONGEST_TEXT + 1), "note")


def test_a_negative_zero_loses_its_sign() -> None:
    assert math.copysign(1.0, normal_float(-0.0, "x")) == 1.0


@pytest.mark.parametrize(
    ("value", "expected"),
    [(np.float32(0.5), 0.5), (np.int64(3), 3.0), (Decimal("0.1"), 0.1), (Fraction(1, 4), 0.25), (7, 7.0)],
)
def test_other_numbers_become_doubles(value: object, expected: float) -> None:
    number = normal_float(value, "x")
    assert type(number) is float
    assert number == expected


@pytest.mark.parametrize(
    "value", [math.nan, math.inf, -math.inf, "1.5", b"1", True, None, 1j, 10**400, Decimal("NaN"), [1.0]]
)
def test_no_finite_number_is_refused(value: object) -> None:
    with pytest.raises(InputError):
        normal_float(value, "x")


@pytest.mark.parametrize("value", [1.0, "1", True, None, 2**53, -(2**53), np.float64(1)])
def test_no_exact_whole_number_is_refused(value: object) -> None:
    with pytest.raises(InputError):
        normal_int(value, "n")


def test_whole_numbers_of_numpy_become_plain_ones() -> None:
    assert type(normal_int(np.int32(5), "n")) is int
    assert normal_int(2**53 - 1, "n") == 2**53 - 1


def test_members_without_a_value_are_dropped() -> None:
    assert normal_json({"a": None, "b": {"c": None, "d": (1, "x")}}, "j") == {"b": {"d": [1, "x"]}}


def test_a_fault_deep_inside_names_its_place() -> None:
    with pytest.raises(InputError) as caught:
        normal_json({"bias": {"value": math.nan}}, "settings")
    assert caught.value.where == "settings.bias.value"


@pytest.mark.parametrize(
    "value", [[None], {1: "x"}, {"a": {1, 2}}, [b"x"], object(), {"n": 2**60}, {"a\0": 1}]
)
def test_json_that_cannot_be_kept_is_refused(value: Any) -> None:
    with pytest.raises(InputError):
        normal_json(value, "j")


def test_two_names_that_are_one_after_composing_are_refused_rather_than_lost() -> None:
    with pytest.raises(InputError, match="one text"):
        normal_json({"caf\u00e9": 1, "cafe\u0301": 2}, "details")


def test_a_nesting_without_end_is_refused_in_words() -> None:
    value: Any = 1
    for _ in range(DEEPEST_JSON + 1):
        value = [value]
    assert normal_json(value[0], "j")
    with pytest.raises(InputError, match="nested"):
        normal_json(value, "j")
