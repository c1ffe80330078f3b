"""Which values may enter a record, and the one form each takes.

Everything is normalised once, at entry, so that the same thing typed on two computers
has one digest: text is NFC, floats are finite doubles without a negative zero, JSON
holds nothing else.
"""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Mapping, Sequence
from typing import Any

from registry.errors import InputError
from registry.records.canonical import Json

__all__ = ["LONGEST_TEXT", "normal_float", "normal_int", "normal_json", "normal_text"]

# Long enough for any note; a whole log belongs into a file.
LONGEST_TEXT = 100_000
# Deeper than any setting or note; far from where Python's own readers of JSON give up.
DEEPEST_JSON = 50


def normal_text(value: object, where: str) -> str:
    """``value`` as NFC text.

    Raises:
        InputError: no text, NUL, a lone surrogate, a code point that this Unicode
            version does not assign (its normal form could change later), or too long.
    """
    if not isinstance(value, str):
        raise InputError(f"{value!r} is not text", where=where, remedy="give text")
    # A plain str: a subclass (numpy's, an enum's) has no canonical form.
    text = str.__str__(value)
    if not text.isascii() or "\0" in text:
        text = unicodedata.normalize("NFC", text)
        for character in text:
            if character == "\0" or unicodedata.category(character) in {"Cs", "Cn"}:
                raise InputError(
                    f"the character U+{ord(character):04X} cannot be kept",
                    where=where,
                    remedy="remove it (NUL, lone surrogates and unassigned code points are refused)",
                )
    if len(text) > LONGEST_TEXT:
        raise InputError(
            f"{len(text):,} characters; at most {LONGEST_TEXT:,} are kept",
            where=where,
            remedy="shorten it, or attach the text as a file",
        )
    return text


def normal_float(value: object, where: str) -> float:
    """``value`` as a finite double, -0.0 as 0.0.

    Raises:
        InputError: no number, NaN, infinity.
    """
    if isinstance(value, (bool, str, bytes)) or value is None:
        raise InputError(f"{value!r} is not a number", where=where, remedy="give a finite number")
    try:
        number = float(value)  # type: ignore[arg-type]  # numpy scalars and Decimals convert here
    except (TypeError, ValueError, OverflowError) as error:
        raise InputError(f"{value!r} is not a number", where=where, remedy="give a finite number") from error
    if not math.isfinite(number):
        raise InputError(f"{number} is not finite", where=where, remedy="leave it out where it is not known")
    return number + 0.0


def normal_int(value: object, where: str) -> int:
    """``value`` as an integer that JSON keeps exactly."""
    if isinstance(value, bool) or not hasattr(value, "__index__"):
        raise InputError(f"{value!r} is not a whole number", where=where, remedy="give a whole number")
    number = int(value.__index__())
    if abs(number) > 2**53 - 1:
        raise InputError(
            f"{number} is too large to be kept exactly", where=where, remedy="give a smaller number"
        )
    return number


def normal_json(value: Any, where: str, *, depth: int = 0) -> Json:
    """``value`` with every text, number and list inside normalised; None members dropped.

    Raises:
        InputError: a value that cannot be kept, two names that are one after NFC, or
            lists and mappings nested deeper than ``DEEPEST_JSON``.
    """
    if depth > DEEPEST_JSON:
        raise InputError(
            f"it is nested more than {DEEPEST_JSON} deep", where=where, remedy="flatten it, or attach a file"
        )
    if isinstance(value, bool):
        return value
    if isinstance(value, str):
        return normal_text(value, where)
    if isinstance(value, Mapping):
        members = {
            normal_text(name, where): normal_json(member, f"{where}.{name}", depth=depth + 1)
            for name, member in value.items()
            if member is not None
        }
        if len(members) < sum(member is not None for member in value.values()):
            raise InputError(
                "two of its names are one text (they differ only in how their letters are encoded)",
                where=where,
                remedy="give each name once",
            )
        return members
    if isinstance(value, Sequence) and not isinstance(value, bytes):
        return [normal_json(member, where, depth=depth + 1) for member in value]
    if hasattr(value, "__index__"):
        return normal_int(value, where)
    return normal_float(value, where)
