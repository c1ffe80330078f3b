"""Times go in and out as RFC 3339 and are counted in whole microseconds between."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from registry.errors import InputError
from registry.records.instants import format_instant, now_us, parse_instant

MOMENTS = st.datetimes(min_value=datetime(1, 1, 1), max_value=datetime(9999, 12, 31, 23, 59, 59))


@given(MOMENTS)
def test_every_microsecond_of_the_calendar_comes_back(moment: datetime) -> None:
    text = moment.isoformat(timespec="microseconds") + "Z"
    assert format_instant(parse_instant(text)) == text


@given(MOMENTS.filter(lambda m: 2 < m.year < 9998), st.integers(-1439, 1439))
def test_the_same_moment_with_another_offset_is_the_same_number(moment: datetime, minutes: int) -> None:
    sign = "-" if minutes < 0 else "+"
    offset = f"{sign}{abs(minutes) // 60:02d}:{abs(minutes) % 60:02d}"
    local = (moment + timedelta(minutes=minutes)).isoformat(timespec="microseconds")
    assert parse_instant(local + offset) == parse_instant(moment.isoformat(timespec="microseconds") + "Z")


def test_microseconds_are_exact_far_from_1970() -> None:
    assert parse_instant("9999-12-31T23:59:59.999999Z") == 253_402_300_799_999_999
    assert parse_instant("1969-12-31T23:59:59.999999Z") == -1


def test_digits_beyond_the_microsecond_are_cut() -> None:
    assert parse_instant("2026-03-02T14:30:00.1234567999Z") == parse_instant("2026-03-02T14:30:00.123456Z")


def test_early_years_keep_their_four_digits() -> None:
    assert format_instant(parse_instant("0045-03-15T12:00:00Z")) == "0045-03-15T12:00:00.000000Z"


@pytest.mark.parametrize(
    "text",
    ["2026-03-02t14:30:00z", "2026-03-02 14:30:00Z", " 2026-03-02T14:30:00Z ", "2026-03-02T14:30:00-00:00"],
)
def test_forms_that_a_reader_may_take_are_taken(text: str) -> None:
    assert parse_instant(text) == parse_instant("2026-03-02T14:30:00Z")


BAD = {
    "date only": "2026-03-02",
    "no offset": "2026-03-02T14:30:00",
    "no seconds": "2026-03-02T14:30Z",
    "comma": "2026-03-02T14:30:00,5Z",
    "basic form": "20260302T143000Z",
    "week date": "2026-W10-1T14:30:00Z",
    "no such day": "2026-02-29T14:30:00Z",
    "hour 24": "2026-03-02T24:00:00Z",
    "minute 60": "2026-03-02T14:60:00Z",
    "second 61": "2026-06-30T23:59:61Z",
    "second 60 at noon": "2026-03-02T12:30:60Z",
    "second 60 at local midnight only": "2026-03-02T23:59:60+05:00",
    "offset of a day": "2026-03-02T14:30:00+24:00",
    "offset minutes": "2026-03-02T14:30:00+01:60",
    "offset without colon": "2026-03-02T14:30:00+0100",
    "year 0": "0000-01-01T00:00:00Z",
    "before year 1 in UTC": "0001-01-01T00:00:00+01:00",
    "after year 9999 in UTC": "9999-12-31T23:59:59-01:00",
    "leap second of the last year": "9999-12-31T23:59:60Z",
    "other digits": "٢٠٢٦-03-02T14:30:00Z",
    "nothing": "",
    "words": "yesterday",
    "two times": "2026-03-02T14:30:00Z2026-03-02T14:30:00Z",
}


@pytest.mark.parametrize("case", BAD)
def test_what_is_no_moment_is_refused_with_an_example(case: str) -> None:
    with pytest.raises(InputError) as caught:
        parse_instant(BAD[case], where="--at")
    assert caught.value.where == "--at"
    assert "2026-03-02T14:30:00Z" in caught.value.remedy


def test_the_clock_is_the_computers() -> None:
    before = datetime.now(UTC)
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=now_us())
    assert before - timedelta(seconds=1) <= moment <= datetime.now(UTC) + timedelta(seconds=1)
