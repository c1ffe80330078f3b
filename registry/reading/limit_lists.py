"""Which limits does a criteria file set?

The file is TOML: one ``[[require]]`` table a limit, with ``quantity``, ``at_most`` or
``at_least``, ``unit``, and optionally ``subject`` (none means the summary value),
``guard`` (k of the guard band, default 2), ``scope`` (state, stretch or cooldown; default
state) and ``max_age_days``.
"""

from __future__ import annotations

import difflib
import re
import tomllib
from pathlib import Path
from typing import Any

from registry.errors import InputError
from registry.reading.written import Faults, read_text
from registry.records.descriptions import Requirement

__all__ = ["read_criteria"]

_NUMBERS = ("at_most", "at_least", "guard", "max_age_days")
_TEXTS = ("quantity", "unit", "subject", "scope")
_HEAD = re.compile(r"^[ \t]*\[\[[ \t]*require[ \t]*\]\]", re.MULTILINE)
_REMEDY = "write one [[require]] table a limit: quantity, at_most or at_least, unit"


def read_criteria(path: Path) -> tuple[Requirement, ...]:
    """The limits of a criteria file, in the units written there.

    Raises:
        InputError: no TOML, no limit, or all faults of the file with their places.
    """
    text = read_text(path)
    try:
        document = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(f"is no TOML: {error}", where=str(path), remedy=_REMEDY) from error
    faults = Faults(path, _REMEDY)
    for name in document:
        if name != "require":
            faults.add("top level", f"{name!r} is unknown; the file holds [[require]] tables only")
    entries = document.get("require", [])
    if not isinstance(entries, list) or not entries:
        faults.add("top level", "there is no [[require]] table")
        entries = []
    places = _places(text, len(entries))
    kept = [_requirement(entry, place, faults) for entry, place in zip(entries, places, strict=True)]
    faults.check()
    return tuple(one for one in kept if one is not None)


def _places(text: str, count: int) -> list[str]:
    """Where each entry begins: its line where every one has a head of its own."""
    lines = [text.count("\n", 0, match.start()) + 1 for match in _HEAD.finditer(text)]
    if len(lines) != count:
        return [f"limit {number}" for number in range(1, count + 1)]
    return [f"line {line}" for line in lines]


def _requirement(entry: Any, place: str, faults: Faults) -> Requirement | None:
    if not isinstance(entry, dict):
        faults.add(place, f"{entry!r} is no [[require]] table")
        return None
    before = len(faults)
    for name, value in entry.items():
        _check_member(name, value, place, faults)
    for name in ("quantity", "unit"):
        if name not in entry:
            faults.add(place, f"{name!r} is missing")
    if len(faults) > before:
        return None
    try:
        return Requirement(**entry)
    except InputError as error:
        faults.add(place, f"{error.what}; {error.remedy}")
        return None


def _check_member(name: str, value: Any, place: str, faults: Faults) -> None:
    if name in _NUMBERS:
        if isinstance(value, bool) or not isinstance(value, int | float):
            faults.add(f"{place}, {name}", f"{value!r} is not a number")
    elif name in _TEXTS:
        if not isinstance(value, str) or not value:
            faults.add(f"{place}, {name}", f"{value!r} is not a text in quotation marks")
    else:
        near = difflib.get_close_matches(name, [*_NUMBERS, *_TEXTS], n=1)
        hint = f"; did you mean {near[0]!r}?" if near else f"; known are {', '.join([*_TEXTS, *_NUMBERS])}"
        faults.add(place, f"{name!r} is unknown{hint}")
