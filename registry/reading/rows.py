"""What stands in a table that a person wrote: columns, rows, and every fault with its place.

Delimited text with a header line; the delimiter is the one of comma, semicolon and tab
that the header uses most.  Blank lines and comment lines X

Nothing here knows which table it reads; ``sheets`` and its neighbours do.
"""

from __future__ import annotations

import csv
import io
import math
import re
import unicodedata
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TypeVar

from registry.errors import InputError
from registry.reading.written import Faults, read_text
from registry.records.descriptions import check_name

__all__ = ["Cells", "Table", "read_table"]

Kept = TypeVar("Kept")

_DELIMITERS = {",": "comma", ";": "semicolon", "\t": "tab"}
_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?", re.ASCII)


@dataclass
class Cells:
    """One row.  Every getter notes a fault and returns a harmless value if the cell is wrong.

    Attributes:
        line: where the row begins in the file, counted from 1.
        cells: column -> text without surrounding white space.
    """

    line: int
    cells: dict[str, str]
    faults: Faults
    decimal_comma: bool = False

    def fault(self, column: str, what: str) -> None:
        """Note a fault in this row."""
        self.faults.add(f"line {self.line}, column {column}", what)

    def text(self, column: str) -> str | None:
        """The cell's text in NFC, or None where it is empty or there is no such column."""
        return unicodedata.normalize("NFC", self.cells.get(column, "")) or None

    def name(self, column: str) -> str:
        """The cell as a name."""
        return self._checked_name(column, self.text(column) or "")

    def names(self, column: str, *, foreign: bool = False) -> tuple[str, ...]:
        """The cell as names separated by spaces; at least one, none twice.

        Args:
            column: where the names stand.
            foreign: also take CHIP/DEVICE:GATE, a gate of a device that is named.
        """
        found = tuple((self.text(column) or "").split())
        if not found:
            self.fault(column, "no name is given; several are separated by spaces")
        for name in found:
            self._checked_name(column, name.rpartition(":")[2] if foreign else name)
        for name in sorted({name for name in found if found.count(name) > 1}):
            self.fault(column, f"{name!r} is named twice")
        return found

    def choice(self, column: str, allowed: Sequence[str], default: str | None = None) -> str:
        """The cell as one of ``allowed``; ``default`` where it is empty."""
        text = (self.text(column) or default or "").lower()
        if text not in allowed:
            self.fault(column, f"{text!r} is not one of {', '.join(allowed)}")
            return allowed[0]
        return text

    def yes(self, column: str) -> bool:
        """The cell as yes or no; empty means no."""
        return self.choice(column, ("no", "yes"), default="no") == "yes"

    def number(self, column: str, unit: str = "", *, above: float | None = None) -> float:
        """The cell as a finite number; NaN, after a fault was noted, if it is none.

        Args:
            column: where the number stands.
            unit: what it is a number of, for the message.
            above: it must be greater than this, in ``unit``.
        """
        text = self.cells.get(column, "")
        if not text:
            self.fault(column, f"a number{' in ' + unit if unit else ''} is missing")
            return math.nan
        value = self._parse(text)
        if value is None:
            self.fault(column, self._why_no_number(text, unit))
            return math.nan
        if above is not None and value <= above:
            self.fault(column, f"{text} is not above {above:g}")
            return math.nan
        return value

    def optional_number(self, column: str, unit: str = "", *, above: float | None = None) -> float | None:
        """As ``number``, but None where the cell is empty or there is no such column."""
        return self.number(column, unit, above=above) if self.cells.get(column) else None

    def optional_whole(self, column: str) -> int | None:
        """The cell as a whole number, or None where it is empty."""
        value = self.optional_number(column)
        if value is None or math.isnan(value):
            return None
        if not value.is_integer():
            self.fault(column, f"{self.cells[column]!r} is no whole number")
            return None
        return int(value)

    def _checked_name(self, column: str, text: str) -> str:
        if not text:
            self.fault(column, "a name is missing")
            return text
        try:
            return check_name(text, "name")
        except InputError as error:
            self.fault(column, f"{error.what}; {error.remedy}")
            return text

    def _parse(self, text: str) -> float | None:
        plain = text.replace("\u2212", "-")
        if self.decimal_comma and plain.count(",") == 1 and "." not in plain:
            plain = plain.replace(",", ".")
        if _NUMBER.fullmatch(plain) is None:
            return None
        value = float(plain)
        return value + 0.0 if math.isfinite(value) else None

    def _why_no_number(self, text: str, unit: str) -> str:
        wanted = f"a finite number{' in ' + unit if unit else ''}"
        if "," in text and not self.decimal_comma:
            return f"{text!r} is not {wanted}; decimal commas need semicolons between the columns"
        return f"{text!r} is not {wanted}; write the number alone"


@dataclass
class Table:
    """A table: its columns and its rows in order of the file.

    Attributes:
        columns: as the header names them.
        extra: columns that nobody asked for; they are kept as notes.
        faults: where the reader of the table adds what it finds.
    """

    path: Path
    columns: tuple[str, ...]
    extra: tuple[str, ...]
    rows: list[Cells]
    faults: Faults = field(repr=False)

    def notes(self, row: Cells) -> dict[str, str]:
        """The row's cells in columns that nobody asked for, the empty ones left out."""
        return {column: text for column in self.extra if (text := row.text(column)) is not None}

    def keep(self, make: Callable[[Cells], Kept]) -> tuple[Kept, ...]:
        """Make one thing of every row; then raise all faults found, if any.

        ``make`` reads the row's cells; what it makes of a row with faults is not used.
        """
        made = []
        for row in self.rows:
            before = len(self.faults)
            try:
                made.append(make(row))
            except InputError as error:
                # A description checks itself; where a cell was wrong it would only repeat that.
                if len(self.faults) == before:
                    self.faults.add(f"line {row.line}", f"{error.what}; {error.remedy}")
        self.faults.check()
        return tuple(made)

    def unique(self, seen: dict[str, int], row: Cells, column: str, name: str) -> None:
        """Note a fault if ``name`` stood in an earlier row; ``seen`` remembers the lines."""
        if name in seen:
            row.fault(column, f"{name!r} stands in line {seen[name]} already")
        seen.setdefault(name, row.line)


def read_table(path: Path, needed: Sequence[str], optional: Sequence[str] = ()) -> Table:
    """Read the delimited table at ``path``.

    Args:
        path: the file.
        needed: columns that must be there.
        optional: columns that are understood where they are there.

    Raises:
        InputError: the file cannot be read, holds no row, lacks a needed column, has one
            twice, or a row with more or fewer cells than the header.
    """
    faults = Faults(path, f"correct the file and run the command again (columns: {','.join(needed)})")
    text = read_text(path)
    first = next((line for line in text.splitlines() if line.strip() and not line.startswith("#")), "")
    delimiter = max(_DELIMITERS, key=lambda sign: (first.count(sign), sign == ","))
    rows = _records(text, delimiter, faults)
    line, header = next(rows, (1, []))
    columns = tuple(unicodedata.normalize("NFC", cell) for cell in header)
    _check_columns(line, columns, needed, delimiter, faults)
    table = Table(path, columns, tuple(c for c in columns if c not in {*needed, *optional, ""}), [], faults)
    for line, cells in rows:
        if len(cells) != len(columns):
            faults.add(f"line {line}", f"{len(cells)} cells where the header has {len(columns)} columns")
            continue
        table.rows.append(Cells(line, dict(zip(columns, cells, strict=True)), faults, delimiter == ";"))
    if not table.rows and not faults:
        faults.add(f"line {line}", "there is no row below the header")
        faults.check()
    return table


def _records(text: str, delimiter: str, faults: Faults) -> Iterator[tuple[int, list[str]]]:
    """Line number and stripped cells of each row that is neither blank nor a comment."""
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    line = 1
    try:
        for cells in reader:
            stripped = [cell.strip() for cell in cells]
            if any(stripped) and not stripped[0].startswith("#"):
                yield line, stripped
            line = reader.line_num + 1
    except csv.Error as error:
        faults.add(f"line {line}", f"the quotation marks do not close ({error})")
        faults.check()


def _check_columns(
    line: int, columns: tuple[str, ...], needed: Sequence[str], delimiter: str, faults: Faults
) -> None:
    """Raise at once if the header is wrong: no row can be read then."""
    for column in needed:
        if column not in columns:
            found = ", ".join(repr(name) for name in columns) or "nothing"
            faults.add(
                f"line {line}", f"column {column!r} is missing; found {found} ({_DELIMITERS[delimiter]})"
            )
    for column in sorted({name for name in columns if columns.count(name) > 1}):
        what = f"column {column!r} stands there twice" if column else "several columns have no name"
        faults.add(f"line {line}", what)
    faults.check()
