"""How a moment is written and read: microseconds UTC inside, RFC 3339 text outside."""

from __future__ import annotations

import re
import time
from datetime import UTC, datetime, timedelta, timezone

from registry.errors import InputError

__all__ = ["format_instant", "now_us", "parse_instant"]

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
# RFC 3339, section 5.6; lower-case t and z and a space for the T are allowed to readers.
_FORM = re.compile(
    r"(\d{4})-(\d{2})-(\d{2})[Tt ](\d{2}):(\d{2}):(\d{2})(?:\.(\d+))?(?:([Zz])|([+-])(\d{2}):(\d{2}))",
    re.ASCII,
)
_REMEDY = "write date, time and offset as in 2026-03-02T14:30:00Z or 2026-03-02T15:30:00+01:00"


def now_us() -> int:
    """Microseconds since 1970-01-01T00:00:00Z by this computer's clock."""
    return time.time_ns() // 1000


def parse_instant(text: str, *, where: str = "time") -> int:
    """Microseconds since 1970-01-01T00:00:00Z of an RFC 3339 time.

    A leap second (second 60, RFC 3339 section 5.7: only at 23:59 UTC) is taken as the
    first instant of the next minute: the inner scale has no room for it.  Digits beyond
    the microsecond are cut.

    Raises:
        InputError: no RFC 3339 time; a time without offset is refused, because two
            computers would read it as two different moments.
    """
    match = _FORM.fullmatch(text.strip())
    if match is None:
        raise InputError(f"{text!r} is not a time with date, clock and offset", where=where, remedy=_REMEDY)
    year, month, day, hour, minute, second, fraction, zulu, sign, off_h, off_m = match.groups()
    leap = second == "60"
    try:
        zone = UTC
        if not zulu:
            if int(off_h) > 23 or int(off_m) > 59:
                raise ValueError("offset out of range")
            shift = timedelta(hours=int(off_h), minutes=int(off_m))
            zone = timezone(-shift if sign == "-" else shift)
        moment = datetime(
            int(year), int(month), int(day), int(hour), int(minute), 59 if leap else int(second), tzinfo=zone
        )
        micro = 0 if leap else int(((fraction or "") + "000000")[:6])
        since = moment.astimezone(UTC) - _EPOCH + timedelta(seconds=1 if leap else 0)
        following = (_EPOCH + since).time()
        if leap and (following.hour, following.minute) != (0, 0):
            raise ValueError("a second 60 is possible only at 23:59 UTC")
    except (ValueError, OverflowError) as error:
        raise InputError(
            f"{text!r} is no moment of the calendar: {error}", where=where, remedy=_REMEDY
        ) from error
    return (since.days * 86_400 + since.seconds) * 1_000_000 + micro


def format_instant(microseconds: int) -> str:
    """RFC 3339 text in UTC with exactly six digits after the second."""
    moment = _EPOCH + timedelta(microseconds=microseconds)
    return moment.isoformat(timespec="microseconds").removesuffix("+00:00") + "Z"
