"""Which instant does a text or number in a file mean?

RFC 3339 texts with an offset are instants; texts without one are instants only if a zone
is given, because a computer's local time is not in the file.  Second 60 (a leap second)
is the first instant of the next minute: microseconds since 1970 UTC have no place for it.
"""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta, timezone
from typing import Final

from registry.errors import InputError
from registry.records.units import canonical

__all__ = ["looks_like_time", "microseconds", "since_epoch_text", "zone_offset"]

_STAMP: Final = re.compile(
    r"(?P<year>\d{4})-(?P<month>\d\d)-(?P<day>\d\d)[Tt _](?P<hour>\d\d):(?P<minute>\d\d)"
    r"(?::(?P<second>\d\d)(?:[.,](?P<fraction>\d{1,12}))?)?\s?(?P<zone>[Zz]|UTC|[+-]\d\d:?\d\d)?"
)
_SINCE: Final = re.compile(r"(?P<unit>\w+)\s+since\s+(?P<start>.+)")
_EPOCH: Final = datetime(1970, 1, 1, tzinfo=UTC)


def looks_like_time(text: str) -> bool:
    """Tell whether ``text`` is a date and a time of day in the form of RFC 3339."""
    return _STAMP.fullmatch(text.strip()) is not None


def zone_offset(text: str, *, where: str) -> timezone:
    """Return the zone of ``Z``, ``UTC`` or ``+hh:mm``.

    Raises:
        InputError: the text is none of these.
    """
    if text in ("Z", "z", "UTC"):
        return UTC
    match = re.fullmatch(r"([+-])(\d\d):?(\d\d)", text)
    if match is None or int(match[2]) > 23 or int(match[3]) > 59:
        raise InputError(
            f"{text!r} is no zone", where=where, remedy='write "Z" or an offset such as "+01:00"'
        )
    minutes = int(match[2]) * 60 + int(match[3])
    return timezone(timedelta(minutes=-minutes if match[1] == "-" else minutes))


def microseconds(text: str, *, where: str, zone: timezone | None = None) -> tuple[int, bool]:
    """Return microseconds since 1970 UTC, and whether the instant is certain.

    It is uncertain where neither the text nor ``zone`` gives an offset; then the number
    is that of the same clock reading in UTC and is good for differences only.

    Raises:
        InputError: the text is no date and time, or names a day or hour that is none.
    """
    match = _STAMP.fullmatch(text.strip())
    if match is None:
        raise _no_time(text, where)
    second = int(match["second"] or 0)
    written = match["zone"]
    try:
        moment = datetime(
            int(match["year"]),
            int(match["month"]),
            int(match["day"]),
            int(match["hour"]),
            int(match["minute"]),
            min(second, 59),
            tzinfo=zone_offset(written, where=where) if written else zone or UTC,
        )
    except ValueError as error:
        raise _no_time(text, where) from error
    if second > 60:
        raise _no_time(text, where)
    fraction = int((match["fraction"] or "0").ljust(6, "0")[:6])
    whole = (moment - _EPOCH) // timedelta(microseconds=1) + fraction + (1_000_000 if second == 60 else 0)
    return whole, written is not None or zone is not None


def since_epoch_text(unit: str) -> tuple[str, str] | None:
    """Split ``seconds since 2030-01-01 00:00:00`` (the CF convention) into unit and start.

    Returns:
        (``seconds``, the start's text), or None if ``unit`` is an ordinary unit.
    """
    match = _SINCE.fullmatch(unit.strip())
    if match is None or canonical(match["unit"])[2] != "s":
        return None
    start = match["start"].strip()
    return match["unit"], start if ":" in start else f"{start} 00:00:00"


def _no_time(text: str, where: str) -> InputError:
    return InputError(
        f"{text[:60]!r} is no date and time",
        where=where,
        remedy="write it as RFC 3339 says, e.g. 2031-05-06T14:03:00+02:00",
    )
