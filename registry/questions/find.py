"""Where a word turns up: labels, ids, purposes, notes, events, file names, amended values.

Upper and lower case are one.  The database narrows with LIKE on the word's longest run of
ASCII letters and digits, which both engines fold alike; Python decides, so that letters
beyond ASCII fold too and both engines give the same answer.
"""

from __future__ import annotations

import json
import re
import unicodedata
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection

from registry.errors import InputError
from registry.questions.asking import ALWAYS, ask
from registry.questions.currency import taints_of

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["MOST_HITS", "Hit", "find"]

# Of one field of one kind; more is no answer but a list, and the word should be longer.
MOST_HITS = 200

_FIELDS = (
    ("chip", "label"),
    ("chip", "wafer"),
    ("chip", "lot"),
    ("chip", "die"),
    ("device", "name"),
    ("cooldown", "label"),
    ("cooldown", "cryostat"),
    ("cooldown", "board"),
    ("event", "event"),
    ("event", "note"),
    ("event", "details"),
    ("gate_health", "note"),
    ("gate_sheet", "why"),
    ("wiring", "why"),
    ("tuning", "purpose"),
    ("measurement", "file_name"),
    ("measurement", "kind"),
    ("raw_file", "sha256"),
    ("parameter", "source"),
    ("parameter", "method"),
    ("criteria", "name"),
    ("standing", "purpose"),
    ("standing", "why"),
    ("withdrawal", "why"),
    ("same_as", "why"),
    ("attachment", "file_name"),
    ("quantity", "name"),
)
_ID = re.compile(r"[0-9a-f]{6,64}")
_RUN = re.compile(r"[a-z0-9]+")


@dataclass(frozen=True)
class Hit:
    """One place where the word stands.

    Attributes:
        id, kind: of the record.
        field: which of its fields; ``id`` for a hit on the id itself.
        text: the whole field.
        amended: the field was given this value later.
        withdrawn: the record is withdrawn or hangs on a withdrawn one.
    """

    id: str
    kind: str
    field: str
    text: str
    amended: bool
    withdrawn: bool

    def to_json(self) -> dict[str, Any]:
        """All members."""
        return {
            "id": self.id,
            "kind": self.kind,
            "field": self.field,
            "text": self.text,
            "amended": self.amended,
            "withdrawn": self.withdrawn,
        }


def find(reg: Registry, text: str) -> tuple[Hit, ...]:
    """Records in which ``text`` stands, by kind, field and text.

    Args:
        reg: an open registry.
        text: part of a word, or the beginning of an id (6 hex digits or more).

    Raises:
        InputError: nothing to look for.
    """
    wanted = _folded(text.strip())
    if not wanted:
        raise InputError("nothing to look for", where="find", remedy="give a word, or the beginning of an id")
    with reg.reading() as connection:
        found = _ids(connection, wanted)
        for kind, field in _FIELDS:
            found += _in_field(connection, kind, field, wanted)
        found += _amended(connection, wanted)
        gone = taints_of(connection, (no for no, _ in found), ALWAYS)
    hits = (Hit(*parts, withdrawn=no in gone) for no, parts in found)
    return tuple(sorted(hits, key=lambda hit: (hit.kind, hit.field, hit.text, hit.id)))


_Found = list[tuple[int, tuple[str, str, str, str, bool]]]


def _folded(text: str) -> str:
    return unicodedata.normalize("NFC", text).casefold()


def _pattern(wanted: str) -> str:
    """LIKE pattern for the longest ASCII run; it holds no wildcard that must be escaped."""
    runs = _RUN.findall(wanted)
    return f"%{max(runs, key=len)}%" if runs else "%"


def _ids(connection: Connection, wanted: str) -> _Found:
    if not _ID.fullmatch(wanted):
        return []
    low, high = (bytes.fromhex(wanted.ljust(64, fill)) for fill in "0f")
    rows = ask(
        connection,
        "SELECT no, kind, digest FROM record WHERE digest BETWEEN :low AND :high ORDER BY digest LIMIT :most",
        low=low,
        high=high,
        most=MOST_HITS,
    )
    return [(row.no, (row.digest.hex(), row.kind, "id", row.digest.hex(), False)) for row in rows]


def _in_field(connection: Connection, kind: str, field: str, wanted: str) -> _Found:
    rows = ask(
        connection,
        f'SELECT no, digest, "{field}" AS found FROM "{kind}" WHERE lower("{field}") LIKE :pattern'
        " ORDER BY digest",
        pattern=_pattern(wanted),
    )
    hits = (row for row in rows if wanted in _folded(row.found))
    return [
        (row.no, (row.digest.hex(), kind, field, row.found, False))
        for row, _ in zip(hits, range(MOST_HITS), strict=False)
    ]


def _amended(connection: Connection, wanted: str) -> _Found:
    """Amended values, told as fields of the record they amend."""
    rows = ask(
        connection,
        "SELECT t.no, t.digest, t.kind, a.field, a.value FROM amendment a JOIN record t ON t.no = a.target_no"
        " WHERE lower(a.value) LIKE :pattern ORDER BY a.digest",
        pattern=_pattern(wanted),
    )
    found: _Found = []
    for row in rows:
        value = json.loads(row.value)
        told = value if isinstance(value, str) else row.value
        if wanted in _folded(told):
            found.append((row.no, (row.digest.hex(), row.kind, row.field, told, True)))
    return found[:MOST_HITS]
