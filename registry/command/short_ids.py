"""What is the shortest prefix of each of many ids that no other record shares?

``keeping.naming.short`` answers for one id; asked for thousands of files one after the
other it would take longer than admitting them.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from functools import cache
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from sqlalchemy import Connection

__all__ = ["short_ids", "shortest"]

SHORTEST = 10
"""Hex digits at least, so that a printed id stays unique while a registry grows."""
SLOTS = 100
"""Ids asked for in one statement; SQLite takes at most 500 parts in a compound SELECT."""

_RANGE = "SELECT digest FROM record WHERE digest >= :low{n} AND digest <= :high{n}"


def short_ids(connection: Connection, ids: Iterable[str]) -> dict[str, str]:
    """Full id -> shortest unique prefix of at least 10 hex digits.

    Args:
        connection: of a registry.
        ids: full ids of records in it.
    """
    wanted = sorted(set(ids))
    found: dict[str, str] = {}
    for start in range(0, len(wanted), SLOTS):
        part = wanted[start : start + SLOTS]
        neighbours = _sharing(connection, part)
        found |= {one: shortest(one, neighbours.get(one[:SHORTEST], ())) for one in part}
    return found


def _sharing(connection: Connection, ids: Sequence[str]) -> dict[str, list[str]]:
    """All records whose first 10 digits are those of one of the ids, by these digits."""
    from registry.questions.asking import ask

    # Two statements only, one slot or all, so that drivers meet what they have prepared.
    slots = 1 if len(ids) == 1 else SLOTS
    padded = [*ids, *[ids[-1]] * (slots - len(ids))]
    bounds: dict[str, bytes] = {}
    for n, one in enumerate(padded):
        bounds[f"low{n}"] = bytes.fromhex(one[:SHORTEST].ljust(64, "0"))
        bounds[f"high{n}"] = bytes.fromhex(one[:SHORTEST].ljust(64, "f"))
    groups: dict[str, list[str]] = {}
    for row in ask(connection, _statement(slots), **bounds):
        digest = bytes(row.digest).hex()
        groups.setdefault(digest[:SHORTEST], []).append(digest)
    return groups


@cache
def _statement(slots: int) -> str:
    return " UNION ALL ".join(_RANGE.format(n=n) for n in range(slots))


def shortest(one: str, neighbours: Iterable[str]) -> str:
    """The shortest prefix of ``one``, at least 10 digits, that no neighbour has."""
    others = [other for other in neighbours if other != one]
    length = SHORTEST
    while any(other.startswith(one[:length]) for other in others):
        length += 1
    return one[:length]
