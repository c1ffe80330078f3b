"""Which columns does a delimited text hold, under which names and units?

Lines that begin with ``#``, ``%`` or ``//`` are comments, and so are lines that begin with
``;`` before the first row.  The header is the first other line, or else the last comment
whose cells are as many as the columns and all carry a unit.  Units may stand in the header
(``name [unit]``, ``name (unit)``) or in a row of their own beneath it.

Numbers take the quick way through numpy's text parser; only where that stops is a file
read cell by cell, for blanks, times and the place of a fault.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from registry.errors import InputError
from registry.reading.layout_parts import Layout
from registry.reading.limits import ReadingLimits
from registry.reading.text_cells import (
    Decimal,
    HeadCell,
    cells,
    decimal_sign,
    delimiter_of,
    head_cell,
    head_cells,
    is_unit_row,
    number,
)
from registry.reading.times import looks_like_time, microseconds
from registry.samples import FloatArray

__all__ = ["Column", "Table", "parse_table"]

_COMMENTS: Final = ("#", "%", "//")
_PROBES: Final = 32
"""Rows from which delimiter and number of columns are told: most of them decide."""


@dataclass(frozen=True, eq=False)
class Column:
    """One column; ``start_us`` and ``certain`` only where it held dates and times."""

    name: str
    unit: str | None
    values: FloatArray
    start_us: int | None = None
    certain: bool = False


@dataclass(frozen=True, eq=False)
class Table:
    """All columns wanted, by their number from 1, and the comments in order."""

    columns: dict[int, Column]
    comments: tuple[str, ...]
    first_line: int


@dataclass(frozen=True)
class _Lines:
    """The lines that are neither blank nor comment, with their numbers, and the comments."""

    numbers: Sequence[int]
    rows: list[str]
    comments: tuple[str, ...]


def parse_table(text: str, layout: Layout | None, *, where: str, limits: ReadingLimits) -> Table:
    """Take ``text`` apart; with a layout only the columns that it names.

    Raises:
        InputError: no rows, no header (and no layout), a cell that is no number in a
            wanted column, rows of different length.
    """
    lines = _content(text, layout)
    if not lines.rows:
        raise InputError(
            "there are no rows in this text", where=where, remedy="check that the file was saved"
        )
    probes = lines.rows[1:_PROBES] or lines.rows
    delimiter = (layout.delimiter if layout else None) or delimiter_of(probes)
    count = Counter(len(cells(row, delimiter)) for row in probes).most_common(1)[0][0]
    if count > limits.text_columns:
        raise InputError(f"{count} columns are too many", where=where, remedy="save it as HDF5")
    wanted = _wanted(layout, count, where)
    head, body = _head(lines, delimiter, count, wanted, where)
    rows = lines.rows[body:]
    if not rows:
        raise InputError("there is a header but no row", where=where, remedy="check that the file was saved")
    decimal: Decimal = (
        ("," if layout.decimal == "," else ".")
        if layout and layout.decimal
        else decimal_sign(rows, delimiter, where)
    )
    if wanted is None:
        wanted = [at for at in range(count) if not _is_empty_column(at, head, rows, delimiter)]
    reader = _Reader(rows, lines.numbers[body:], delimiter, decimal, count, where)
    columns = reader.columns(wanted, head, limits.faults)
    return Table(columns, lines.comments, lines.numbers[body])


def _content(text: str, layout: Layout | None) -> _Lines:
    skipped = layout.skip_rows if layout else 0
    semicolon_parts = layout is not None and layout.delimiter == ";"
    numbers: list[int] = []
    rows: list[str] = []
    comments: list[str] = []
    for at, line in enumerate(text.split("\n")[skipped:], start=skipped + 1):
        lead = line.lstrip()
        if not lead:
            continue
        if lead.startswith(_COMMENTS):
            comments.append(lead.lstrip("#%/").strip())
        elif lead[0] == ";" and not rows and not semicolon_parts:
            comments.append(lead.lstrip(";").strip())
        else:
            numbers.append(at)
            rows.append(line)
    return _Lines(numbers, rows, tuple(comments))


def _wanted(layout: Layout | None, count: int, where: str) -> list[int] | None:
    """Return the columns (from 0) that the layout names, or None for all."""
    if layout is None or not layout.signals:
        return None
    named = [item for item in (*layout.axes, *layout.signals) if item.column is not None]
    for item in named:
        if item.column is not None and item.column > count:
            raise InputError(
                f"the layout puts {item.name!r} into column {item.column}, the text has {count}",
                where=where,
                remedy="correct column (counted from 1) or delimiter in the layout",
            )
    return sorted({item.column - 1 for item in named if item.column is not None})


def _head(
    lines: _Lines, delimiter: str, count: int, wanted: list[int] | None, where: str
) -> tuple[list[HeadCell] | None, int]:
    """Return names and units (None if there is no header) and the index of the first row."""
    first = cells(lines.rows[0], delimiter)
    needed = wanted is None
    told = first if wanted is None else [first[at] for at in wanted if at < len(first)]
    if all(_is_datum(cell) for cell in told) and len(told) == len(first if wanted is None else wanted):
        head = _head_in_comments(lines.comments, delimiter, count)
        if head is None and needed:
            raise InputError(
                "there is no header line with names and units",
                where=where,
                remedy='write one, e.g. "P1 [mV]<tab>current [nA]", or give a layout',
            )
        return head, 0
    names = head_cells(lines.rows[0], delimiter, count)
    if len(names) != count and needed:
        raise InputError(
            f"the header has {len(names)} cells, the rows have {count}",
            where=f"{where}, line {lines.numbers[0]}",
            remedy="part the header like the rows, or give a layout",
        )
    head = [head_cell(cell) for cell in names] + [("", None)] * (count - len(names))
    if len(lines.rows) > 1 and all(unit is None for _, unit in head):
        units = head_cells(lines.rows[1], delimiter, count)
        if len(units) == count and is_unit_row(units):
            return [(name, unit.strip("[]()")) for (name, _), unit in zip(head, units, strict=False)], 2
    return head, 1


def _is_datum(cell: str) -> bool:
    return number(cell, ".") is not None or number(cell, ",") is not None or looks_like_time(cell)


def _head_in_comments(comments: tuple[str, ...], delimiter: str, count: int) -> list[HeadCell] | None:
    for comment in reversed(comments):
        names = [head_cell(cell) for cell in head_cells(comment, delimiter, count)]
        if len(names) == count and all(unit is not None for _, unit in names):
            return names
    return None


def _is_empty_column(at: int, head: list[HeadCell] | None, rows: list[str], delimiter: str) -> bool:
    """Tell whether a column exists only because every line ends with the delimiter."""
    if head is None or head[at][0]:
        return False
    return all(len(found) <= at or not found[at] for found in (cells(row, delimiter) for row in rows))


class _Reader:
    """Reads the wanted columns of rows of text."""

    def __init__(
        self,
        rows: list[str],
        numbers: Sequence[int],
        delimiter: str,
        decimal: Decimal,
        count: int,
        where: str,
    ) -> None:
        self.rows = rows
        self.numbers = numbers
        self.delimiter = delimiter
        self.decimal = decimal
        self.count = count
        self.where = where

    def columns(self, wanted: list[int], head: list[HeadCell] | None, most_faults: int) -> dict[int, Column]:
        names = head or [(f"column {at + 1}", None) for at in range(self.count)]
        block = self._quick(wanted)
        if block is None:
            return self._by_cell(wanted, names, most_faults)
        return {at + 1: Column(*names[at], block[:, i].copy()) for i, at in enumerate(wanted)}

    def _quick(self, wanted: list[int]) -> FloatArray | None:
        """Read all rows at once; None where a cell is anything but a number with a point."""
        rows = self.rows
        if self.decimal == ",":
            if any("." in row for row in rows):
                return None
            rows = [row.replace(",", ".") for row in rows]
        part = None if self.delimiter == " " else self.delimiter
        try:
            block: FloatArray = np.loadtxt(rows, delimiter=part, comments=None, ndmin=2)
        except ValueError:
            return None
        return block[:, wanted] if block.shape[1] == self.count else None

    def _by_cell(self, wanted: list[int], names: list[HeadCell], most_faults: int) -> dict[int, Column]:
        table, faults = self._cut(most_faults)
        columns: dict[int, Column] = {}
        for at in wanted if not faults else ():
            texts = [row[at] for row in table]
            if looks_like_time(texts[0]):
                columns[at + 1] = self._times(texts, names[at][0])
                continue
            values = [number(cell, self.decimal) for cell in texts]
            faults += [(self.numbers[i], at, texts[i]) for i, value in enumerate(values) if value is None][
                :most_faults
            ]
            columns[at + 1] = Column(*names[at], np.array([np.nan if v is None else v for v in values]))
        if faults:
            raise self._fault(sorted(faults)[:most_faults])
        return columns

    def _cut(self, most_faults: int) -> tuple[list[list[str]], list[tuple[int, int, str]]]:
        """Cut every row; a row of another length is a fault, blanks at its end are not."""
        table: list[list[str]] = []
        faults: list[tuple[int, int, str]] = []
        for at, row in zip(self.numbers, self.rows, strict=True):
            found = cells(row, self.delimiter)
            while len(found) > self.count and not found[-1]:
                found.pop()
            if len(found) != self.count and len(faults) < most_faults:
                faults.append((at, -1, f"{len(found)} cells instead of {self.count}"))
            table.append(found)
        return table, faults

    def _times(self, texts: list[str], name: str) -> Column:
        stamps = [
            microseconds(text, where=f"{self.where}, line {at}, {name!r}")
            for at, text in zip(self.numbers, texts, strict=True)
        ]
        start, certain = stamps[0]
        values = np.array([stamp - start for stamp, _ in stamps], dtype=np.float64) / 1e6
        return Column("time", "s", values, start, certain)

    def _fault(self, faults: list[tuple[int, int, str]]) -> InputError:
        said = [
            f"line {at}: {text}"
            if column < 0
            else f"line {at}, column {column + 1}: {text[:40]!r} is no number"
            for at, column, text in faults
        ]
        return InputError(
            said[0],
            where=self.where,
            remedy="correct these cells (blank ones are allowed), or name columns of numbers in a layout",
            faults=tuple(said[1:]),
        )
