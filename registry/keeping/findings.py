"""What does an audit collect while it goes through a registry?"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass

from sqlalchemy import Connection
from sqlalchemy.exc import DBAPIError

__all__ = ["RESTORE", "STREAMED", "Course", "Finding", "Progress", "octets"]

MOST_FINDINGS = 1000
"""Beyond this a list helps nobody; the rest is counted."""

STREAMED = {"yield_per": 1000}
"""Execution options that keep a long answer out of memory on both engines."""

RESTORE = (
    "keep a copy of the registry as it is, then restore the newest backup made before this damage; "
    "until then do not rely on this record nor on what rests on it"
)

Progress = Callable[[int, int], None]
"""(done, total), in records, journal entries and files together."""


@dataclass(frozen=True, slots=True)
class Finding:
    """Something that is not as it was recorded: what, where, and what to do about it."""

    what: str
    where: str
    remedy: str

    def to_json(self) -> dict[str, str]:
        """For ``--json``."""
        return {"what": self.what, "where": self.where, "remedy": self.remedy}


def octets(value: object) -> bytes:
    """The bytes of a stored digest or block.

    Raises:
        TypeError: a damaged page holds something else there.
    """
    if not isinstance(value, bytes | memoryview):
        raise TypeError(f"bytes are expected where a {type(value).__name__} stands")
    return bytes(value)


class Course:
    """One audit under way: its findings, its remarks, and how far it has come."""

    def __init__(self, progress: Progress | None = None) -> None:
        self.total = 0
        self._progress = progress
        self._done = 0
        self._findings: list[Finding] = []
        self._more = 0
        self._remarks: list[Finding] = []

    def find(self, what: str, *, where: str, remedy: str = RESTORE) -> None:
        """Note damage."""
        if len(self._findings) < MOST_FINDINGS:
            self._findings.append(Finding(what, where, remedy))
        else:
            self._more += 1

    def remark(self, what: str, *, where: str, remedy: str) -> None:
        """Note what is harmless but worth knowing."""
        if len(self._remarks) < MOST_FINDINGS:
            self._remarks.append(Finding(what, where, remedy))

    def step(self, count: int = 1) -> None:
        """Tell that ``count`` more things have been looked at."""
        self._done += count
        if self._progress is not None:
            self._progress(self._done, max(self.total, self._done))

    @contextmanager
    def part(self, connection: Connection, where: str) -> Iterator[None]:
        """A part of the database: if it cannot be read, that is a finding and the audit goes on."""
        try:
            with connection.begin_nested():
                yield
        except (DBAPIError, TypeError, ValueError) as error:
            # The latter two: a damaged page can hold a value of any type in any column, and
            # sqlite3 raises UnicodeDecodeError where a damaged name stands in its message.
            reason = str(getattr(error, "orig", error)).strip().partition("\n")[0]
            self.find(f"cannot be read any further: {reason}", where=where)

    @property
    def findings(self) -> tuple[Finding, ...]:
        """All damage found, in the order of the audit."""
        if not self._more:
            return tuple(self._findings)
        rest = Finding(f"{self._more} more findings are not listed", "the whole registry", RESTORE)
        return (*self._findings, rest)

    @property
    def remarks(self) -> tuple[Finding, ...]:
        """Harmless things worth knowing."""
        return tuple(self._remarks)
