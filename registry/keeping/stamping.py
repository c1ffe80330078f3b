"""How is the state of the whole registry written on one line of a paper notebook?

A stamp names the registry, the size of its journal, its root and the time of its last entry;
whoever has the line can later prove that nothing before it was changed or lost.

    millikeep 3f9a01c2/1234/2026-03-02T14:30:00Z/4KQX 7M2A … 5TNB/K7QP

The root stands in base 32 (RFC 4648, section 6: no 0, 1, 8 or 9 to misread), cut to 160 of its
256 bits: two histories with one such root would take 2**80 trials to make.  The last four
characters find any single wrong character and any two that were swapped.
"""

from __future__ import annotations

import base64
import contextlib
import json
import re
from dataclasses import dataclass

from registry.errors import DamageError, InputError
from registry.keeping import head, journal
from registry.keeping.handle import Registry
from registry.records.instants import format_instant, parse_instant

__all__ = ["Stamp", "parse_stamp", "stamp"]

WORD = "millikeep"
ROOT_BYTES = 20
"""Bytes of the root on the line; 160 bits make 32 characters without padding."""
ID_DIGITS = 8
"""Hex digits of the registry's id on the line; the root covers the whole id."""

_LETTERS = "ABCDEFGHIJKLMNOPQRSTUVWXYZ234567"
_MISREAD = str.maketrans("018", "OIB")  # digits that base 32 does not have
_CHECK_PRIME = 1_048_573
"""Largest prime below 32**4, so that the remainder fits four characters.  A single wrong
character changes the sum by (difference x a power of the base), which this prime cannot
divide; a swap by (difference x a power x (a power - 1)), likewise."""
_CHECK_BASE = 131

_ID = re.compile(rf"[0-9A-F]{{{ID_DIGITS}}}")
_SIZE = re.compile(r"[1-9][0-9]{0,17}")
_ROOT = re.compile(rf"[A-Z2-7]{{{ROOT_BYTES * 8 // 5}}}")
_TIME = re.compile(r"\d{4}-\d{2}-\d{2}T\d{2}:\d{2}:\d{2}Z", re.ASCII)
_REMEDY = "compare it with the notebook, character by character; `millikeep stamp` shows what one looks like"


@dataclass(frozen=True, slots=True)
class Stamp:
    """The journal at one moment.

    Args:
        registry_id: hex; whole from ``stamp``, the first 8 digits from a written line.
        size: entries.
        root: whole (32 bytes) from ``stamp``, the first 20 bytes from a written line.
        time: of the last entry, microseconds UTC; whole seconds from a written line.
    """

    registry_id: str
    size: int
    root: bytes
    time: int

    @property
    def check(self) -> str:
        """The four check characters."""
        return _check("/".join(self._fields()))

    def line(self) -> str:
        """The line for the notebook, at most 100 characters."""
        known, size, time, root = self._fields()
        grouped = " ".join(root[place : place + 4] for place in range(0, len(root), 4))
        return f"{WORD} {known.lower()}/{size}/{time}/{grouped}/{self.check}"

    def to_json(self) -> dict[str, object]:
        """For ``--json``."""
        return {
            "registry": self.registry_id,
            "size": self.size,
            "root": self.root.hex(),
            "time": format_instant(self.time),
            "line": self.line(),
        }

    def _fields(self) -> tuple[str, str, str, str]:
        """The fields as the check characters see them: upper case, no spaces."""
        return (
            self.registry_id[:ID_DIGITS].upper(),
            str(self.size),
            format_instant(self.time)[:19] + "Z",
            base64.b32encode(self.root[:ROOT_BYTES]).decode("ascii"),
        )


def stamp(registry: Registry) -> Stamp:
    """The stamp of a registry now.

    A copy of its size and root goes into the file store, unless it was opened for reading.

    Raises:
        DamageError: the journal's first or last entry cannot be read.
    """
    with registry.reading() as connection:
        size = journal.size_of(connection)
        opening, last = (
            _entry(registry, journal.entry(connection, seq), seq) for seq in (0, max(size - 1, 0))
        )
        root = journal.root_at(connection, size)
    try:
        made = Stamp(str(opening["registry"]), size, root, parse_instant(str(last["entered"])))
    except (KeyError, InputError) as error:
        raise _unreadable(registry, size - 1) from error
    if not registry.side.frozen:
        with contextlib.suppress(OSError):  # a stamp can be read where nothing may be written
            registry.files.root.mkdir(exist_ok=True)
        head.write(registry.files.root / head.HEAD_NAME, head.Head(size, root))
    return made


def parse_stamp(text: str) -> Stamp:
    """Read a stamp that a person typed from paper.

    Spaces and case do not matter, nor whether the first word is there.

    Raises:
        InputError: a part is missing, or a character is wrong.
    """
    even = "".join(text.split()).upper()
    parts = even.removeprefix(WORD.upper()).split("/")
    if len(parts) != 5:
        raise InputError(
            f"a stamp has five parts between slashes, this has {len(parts)}",
            where=f"stamp {text.strip()[:120]!r}",
            remedy=_REMEDY,
        )
    known, size, time, root, check = parts
    root, check = root.translate(_MISREAD), check.translate(_MISREAD)
    fields = ((_ID, known, "registry"), (_SIZE, size, "size"), (_TIME, time, "time"), (_ROOT, root, "root"))
    for form, field, name in fields:
        if not form.fullmatch(field):
            raise InputError(f"its {name} cannot be {field!r}", where="stamp", remedy=_REMEDY)
    if check != _check("/".join((known, size, time, root))):
        raise InputError(
            "a character of it is wrong: the check characters differ", where="stamp", remedy=_REMEDY
        )
    moment = parse_instant(time, where="stamp")
    return Stamp(known.lower(), int(size), base64.b32decode(root), moment)


def _check(fields: str) -> str:
    """Four characters over all the others (a remainder by a prime, as ISO/IEC 7064 does for fewer)."""
    remainder = 0
    for letter in fields:
        remainder = (remainder * _CHECK_BASE + ord(letter)) % _CHECK_PRIME
    return "".join(_LETTERS[remainder >> shift & 31] for shift in (15, 10, 5, 0))


def _entry(registry: Registry, entry: str, seq: int) -> dict[str, object]:
    try:
        told: object = json.loads(entry)
    except ValueError as error:
        raise _unreadable(registry, seq) from error
    if not isinstance(told, dict):
        raise _unreadable(registry, seq)
    return told


def _unreadable(registry: Registry, seq: int) -> DamageError:
    return DamageError(
        f"entry {seq} of the journal cannot be read",
        where=registry.where,
        remedy="run `millikeep audit` for the extent, then restore the newest backup",
    )
