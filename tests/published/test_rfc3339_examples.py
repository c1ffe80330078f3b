"""The examples of RFC 3339 (Klyne, Newman, July 2002), section 5.8."""

from __future__ import annotations

import pytest

from registry.records.instants import format_instant, parse_instant

# Text, and seconds since 1970-01-01T00:00:00Z (counted with the proleptic calendar, here).
SECONDS = [
    ("1985-04-12T23:20:50.52Z", 482_196_050.52),
    ("1996-12-19T16:39:57-08:00", 851_042_397.0),
    ("1937-01-01T12:00:27.87+00:20", -1_041_337_172.13),
]


@pytest.mark.parametrize(("text", "seconds"), SECONDS)
def test_an_example_is_read_as_its_moment(text: str, seconds: float) -> None:
    assert parse_instant(text) == round(seconds * 1_000_000)


def test_the_offset_example_is_the_moment_that_the_section_states_in_utc() -> None:
    assert format_instant(parse_instant("1996-12-19T16:39:57-08:00")) == "1996-12-20T00:39:57.000000Z"


def test_both_leap_second_examples_are_one_moment_taken_as_the_next_second() -> None:
    leap = parse_instant("1990-12-31T23:59:60Z")
    assert leap == parse_instant("1990-12-31T15:59:60-08:00")
    assert format_instant(leap) == "1991-01-01T00:00:00.000000Z"
