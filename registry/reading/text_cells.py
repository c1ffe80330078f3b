"""What does one line of a text, or one cell of it, say: number, name and unit, or time?

Numbers have no thousands separators: ``1,234`` under a decimal comma is 1.234, and where
nothing else tells whether the comma is decimal it is refused, not guessed.
"""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Sequence
from typing import Final, Literal

from registry.errors import InputError
from registry.records.units import canonical

__all__ = [
    "Decimal",
    "HeadCell",
    "cells",
    "decimal_sign",
    "delimiter_of",
    "head_cell",
    "head_cells",
    "is_unit_row",
    "number",
]

Decimal = Literal[".", ","]
HeadCell = tuple[str, str | None]

_POINT: Final = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eEdD][+-]?\d+)?")
_COMMA: Final = re.compile(r"[+-]?(?:\d+,?\d*|,\d+)(?:[eEdD][+-]?\d+)?")
_THOUSANDS: Final = re.compile(r"[+-]?[1-9]\d{0,2}(?:,\d{3})+")
_WORDS: Final = {
    # Exact spellings: "nA" is a unit, not a missing value.
    **dict.fromkeys(
        ("", "nan", "NaN", "NAN", "-nan", "NA", "N/A", "n/a", "null", "NULL", "--"), float("nan")
    ),
    **dict.fromkeys(("inf", "+inf", "Inf", "+Inf", "INF", "Infinity"), float("inf")),
    **dict.fromkeys(("-inf", "-Inf", "-INF", "-Infinity"), float("-inf")),
}
_SQUARE: Final = re.compile(r"(.*?)\s*\[([^\[\]]*)\]")
_ROUND: Final = re.compile(r"(.*?)\s*\((.*)\)")
_SPACED_HEAD: Final = re.compile(r"[^\s\[\]()]+(?:\s?(?:\[[^\[\]]*\]|\([^()]*\)))?")
_BRACKETS: Final = "[]()"


def number(cell: str, decimal: Decimal) -> float | None:
    """Return the number in ``cell``, NaN where it is blank or says so, None if it is none."""
    text = cell.strip()
    if (_POINT if decimal == "." else _COMMA).fullmatch(text):
        return float(text.replace(",", ".").replace("d", "e").replace("D", "e"))
    return _WORDS.get(text)


def cells(line: str, delimiter: str) -> list[str]:
    """Cut ``line`` at ``delimiter`` (a space stands for any white space); quotes are removed."""
    if delimiter == " ":
        return line.split() if '"' not in line else next(csv.reader([" ".join(line.split())], delimiter=" "))
    if '"' in line:
        return [
            cell.strip()
            for cell in next(csv.reader([line.strip()], delimiter=delimiter, skipinitialspace=True))
        ]
    return [cell.strip() for cell in line.split(delimiter)]


def head_cell(cell: str) -> HeadCell:
    """Split ``name [unit]`` or ``name (unit)``; the unit is None where there are no brackets."""
    text = cell.strip()
    match = _SQUARE.fullmatch(text) or _ROUND.fullmatch(text)
    if match is None or not match[1].strip():
        return text, None
    return match[1].strip(), match[2].strip()


def head_cells(line: str, delimiter: str, count: int) -> list[str]:
    """Cut a header line into ``count`` cells if any way of cutting it gives as many.

    A header may be parted otherwise than the numbers below it, and in a header parted by
    white space a unit in brackets belongs to the name before it.
    """
    ways = [cells(line, delimiter)] if delimiter != " " else []
    ways += [cells(line, other) for other in "\t;," if other != delimiter and other in line]
    ways.append([match.strip() for match in _SPACED_HEAD.findall(line)])
    ways.append([part for part in re.split(r"\s{2,}|\t", line.strip()) if part])
    ways.append(cells(line, " "))
    for way in ways:
        if len(way) == count:
            return way
    return ways[0]


def delimiter_of(lines: Sequence[str]) -> str:
    """Tell what parts the numbers of most of ``lines``: tab, semicolon, comma or white space."""
    return Counter(_delimiter(line) for line in lines).most_common(1)[0][0]


def _delimiter(line: str) -> str:
    for candidate in ("\t", ";"):
        if candidate in line.strip():
            return candidate
    if "," not in line:
        return " "
    spaced = line.split()
    decimal = len(spaced) > 1 and all(_COMMA.fullmatch(cell) for cell in spaced)
    return " " if decimal and not any(cell.endswith(",") for cell in spaced) else ","


def decimal_sign(rows: Sequence[str], delimiter: str, where: str) -> Decimal:
    """Tell the decimal sign of numbers parted by ``delimiter``, from all of ``rows``.

    Raises:
        InputError: every comma could as well part thousands.
    """
    if delimiter == ",":
        return "."
    written = [cell for row in rows if "," in row for cell in cells(row, delimiter) if "," in cell]
    numbers = [cell for cell in written if _COMMA.fullmatch(cell) or _THOUSANDS.fullmatch(cell)]
    if not numbers:
        return "."
    if all(_THOUSANDS.fullmatch(cell) for cell in numbers):
        raise InputError(
            f"{numbers[0]!r} can be read with a decimal comma or with thousands parted",
            where=where,
            remedy='say which in a layout: decimal = "," or decimal = "."',
        )
    return ","


def is_unit_row(row: Sequence[str]) -> bool:
    """Tell whether every cell is a unit, as in ``[V]  [nA]`` or ``mV  nA``; a row of ones is none."""
    try:
        for cell in row:
            canonical(cell.strip().strip(_BRACKETS))
    except InputError:
        return False
    return any(letter.isalpha() or letter == "%" for cell in row for letter in cell)
