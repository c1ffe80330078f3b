"""What do the tables say in which people write down volts and settings of a moment?

    volts.csv     gate,volts      volts in V at the gate
                  line,volts      volts in V at the source of that line
    settings.csv  name,value,unit

Comment lines beginning with ``#`` are left out, so a table may say where it comes from.
"""

from __future__ import annotations

from pathlib import Path
from typing import Literal

from registry.errors import InputError
from registry.reading.rows import Cells, read_table

__all__ = ["read_settings", "read_volts"]


def read_volts(path: Path) -> tuple[dict[str, float], Literal["gate", "line"]]:
    """Volts by name from volts.csv, and whether the names are gates or lines.

    Raises:
        InputError: all faults of the file, each with line and column.
    """
    table = read_table(path, ("volts",), ("gate", "line"))
    both = [column for column in ("gate", "line") if column in table.columns]
    if len(both) != 1:
        raise InputError(
            "has both a gate and a line column" if both else "has neither a gate nor a line column",
            where=str(path),
            remedy="write gate,volts for volts at the gates, or line,volts for volts at the sources",
        )
    header: Literal["gate", "line"] = "gate" if both == ["gate"] else "line"
    seen: dict[str, int] = {}

    def pair(row: Cells) -> tuple[str, float]:
        name = row.name(header)
        table.unique(seen, row, header, name)
        return name, row.number("volts", "V")

    return dict(table.keep(pair)), header


def read_settings(path: Path) -> dict[str, tuple[float, str]]:
    """Settings by name from settings.csv as (value, unit), both as written.

    Raises:
        InputError: all faults of the file, each with line and column.
    """
    table = read_table(path, ("name", "value", "unit"))
    seen: dict[str, int] = {}

    def setting(row: Cells) -> tuple[str, tuple[float, str]]:
        name = row.name("name")
        table.unique(seen, row, "name", name)
        unit = row.text("unit")
        if unit is None:
            row.fault("unit", "the unit is missing; write 1 for a plain number")
        return name, (row.number("value", unit or ""), unit or "1")

    return dict(table.keep(setting))
