"""Which errors a user can meet, and what each of them must say.

    MillikeepError
    ├── InputError       what was typed or read is wrong          exit 2
    ├── LookupFailed     a record is missing or ambiguous         exit 2
    ├── RegistryError    the registry cannot be used as asked     exit 2
    ├── DamageError      stored data is not what was recorded     exit 1
    └── BadNews          a sound answer that is not the hoped one exit 1

Every error states what is wrong, where, and what to do next.  Misuse by a
programmer (a wrong call order, an unknown keyword) is an ordinary ``TypeError``
or ``RuntimeError``, not one of these.
"""

from __future__ import annotations

from typing import ClassVar

__all__ = [
    "BadNews",
    "DamageError",
    "InputError",
    "LookupFailed",
    "MillikeepError",
    "RegistryError",
]


class MillikeepError(Exception):
    """Base of all errors that are the world's fault, not the programmer's.

    Args:
        what: the fault, quoting the offending value.
        where: file and place, record, option or registry.
        remedy: what the reader can do next.
        faults: further faults of the same input, hardest first; they are shown
            with the first so that one run mends all of them.
    """

    exit_code: ClassVar[int] = 2

    def __init__(self, what: str, *, where: str, remedy: str, faults: tuple[str, ...] = ()) -> None:
        self.what = what
        self.where = where
        self.remedy = remedy
        self.faults = faults
        super().__init__(what, where, remedy, faults)

    def __str__(self) -> str:
        lines = [f"{self.where}: {self.what}"]
        lines += [f"  also: {fault}" for fault in self.faults]
        lines.append(f"  -> {self.remedy}")
        return "\n".join(lines)


class InputError(MillikeepError):
    """What was typed, or what a file holds, cannot be taken.  Nothing was recorded."""


class LookupFailed(MillikeepError):
    """No record, or more than one, answers to what was asked for."""


class RegistryError(MillikeepError):
    """The registry is locked, read-only, of another version, or not there."""


class DamageError(MillikeepError):
    """Stored bytes no longer agree with their digest."""

    exit_code = 1


class BadNews(MillikeepError):
    """The question was sound and the answer is no: a refused fit, a violated limit."""

    exit_code = 1
