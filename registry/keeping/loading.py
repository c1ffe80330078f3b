"""How tables of older history enter the registry: all rows, or none and every fault."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from sqlalchemy import text

from registry.errors import InputError, MillikeepError
from registry.keeping.cooldowns import cooldown_at
from registry.keeping.handle import Registry
from registry.keeping.judging import keep_standing
from registry.keeping.naming import Found, device_name, find_device, find_tuning
from registry.keeping.sheets_in_force import gates_of
from registry.keeping.tunings import keep_tuning
from registry.keeping.units_of import quantity_unit
from registry.keeping.writing import Writer, refuse_future
from registry.reading.rows import Cells, Table, read_table
from registry.records.instants import parse_instant
from registry.records.units import to_si

__all__ = ["Loaded", "load_parameters", "load_tunings"]

Progress = Callable[[int, int], None]

# How often the progress is told, in rows.
TELL_EVERY = 100


@dataclass
class Loaded:
    """What became of a table.

    Attributes:
        rows: in the table; new: records made of them; already: rows that were on record.
        standings: judgements recorded beside states.
        notes: limits that loaded volts cross, by line.
    """

    rows: int = 0
    new: int = 0
    already: int = 0
    standings: int = 0
    notes: tuple[str, ...] = ()


class _Undo(Exception):
    """Ends a trial run."""


def load_tunings(
    registry: Registry,
    device: str,
    path: str | os.PathLike[str],
    *,
    dry_run: bool = False,
    progress: Progress | None = None,
) -> Loaded:
    """Load tuning states from a table: ``at,cooldown[,purpose,sites,standing,why]`` and gates.

    Volts are at the gates, in V; an empty cell is not recorded.  A standing needs its
    ``why`` and is dated like its state.

    Args:
        registry: open for writing.
        device: CHIP/NAME; path: the table.
        dry_run: check all rows and record nothing.
        progress: called with (rows done, rows in all).

    Raises:
        InputError: every faulty row with its line; nothing was recorded.
    """
    optional = ("purpose", "sites", "standing", "why")
    table = read_table(Path(path), ("at", "cooldown"), optional)
    loaded = Loaded(len(table.rows))

    def keep(writer: Writer, row: Cells) -> None:
        found = find_device(writer.connection, device)
        at = _instant(row)
        kept = keep_tuning(
            writer,
            found,
            _row_volts(table, row),
            cooldown=row.text("cooldown"),
            purpose=row.text("purpose"),
            sites=(row.text("sites") or "").split(),
            at=at,
        )
        _count(loaded, kept.new)
        loaded.notes += tuple(f"line {row.line}: {note}" for note in kept.notes)
        standing = row.text("standing")
        if standing is not None:
            state = Found(kept.no, "tuning", kept.digest)
            why = row.text("why")
            if why is None:
                raise InputError("a standing needs a why", where="why", remedy="fill the cell")
            judged = keep_standing(writer, state, standing, why=why, purpose=row.text("purpose"), at=at)
            loaded.standings += judged.new

    with registry.reading() as connection:
        names = gates_of(connection, find_device(connection, device).no).names
    unknown = [name for name in table.extra if name not in names]
    if unknown:
        raise InputError(
            f"there is no gate {unknown[0]!r}",
            where=f"{path}, header",
            remedy=f"columns are at, cooldown, {', '.join(optional)} and gates: {', '.join(names[:8])} ...",
            faults=tuple(f"there is no gate {name!r}" for name in unknown[1:]),
        )
    _load(registry, table, keep, dry_run=dry_run, progress=progress)
    return loaded


def load_parameters(
    registry: Registry,
    device: str,
    path: str | os.PathLike[str],
    *,
    dry_run: bool = False,
    progress: Progress | None = None,
) -> Loaded:
    """Load values that were found elsewhere.

    Columns: ``cooldown,quantity,subject,value,standard_uncertainty,unit,at,source`` and,
    where wanted, ``tuning`` (id of the state) and ``method`` (NAME/VERSION; another text
    is another version).  An empty uncertainty means unknown, an empty cooldown the one
    open at the time; more columns are kept as notes.

    Raises:
        InputError: every faulty row with its line; nothing was recorded.
    """
    needed = ("cooldown", "quantity", "subject", "value", "standard_uncertainty", "unit", "at", "source")
    table = read_table(Path(path), needed, ("tuning", "method"))
    loaded = Loaded(len(table.rows))

    def keep(writer: Writer, row: Cells) -> None:
        found = find_device(writer.connection, device)
        at = _instant(row)
        refuse_future(at, writer.entered, "at")
        span = cooldown_at(writer.connection, found, row.text("cooldown"), at)
        state = row.text("tuning")
        value, spread, unit = _numbers(writer, row)
        kept = writer.keep(
            "parameter",
            links={
                "device": found.no,
                "cooldown": span.no,
                "tuning": _state(writer, state, found).no if state else None,
            },
            quantity=row.text("quantity"),
            subject=row.text("subject"),
            value=value,
            standard_uncertainty=spread,
            unit=unit,
            source=row.text("source"),
            method=row.text("method"),
            notes=table.notes(row) or None,
            at=at,
            moment=at,
        )
        _count(loaded, kept.new)

    _load(registry, table, keep, dry_run=dry_run, progress=progress)
    return loaded


def _load(
    registry: Registry,
    table: Table,
    keep: Callable[[Writer, Cells], None],
    *,
    dry_run: bool,
    progress: Progress | None,
) -> None:
    """Keep every row in one transaction that ends without a trace on any fault."""
    try:
        with registry.writing() as writer:
            for place, row in enumerate(table.rows, start=1):
                with _faults_of(table, row):
                    keep(writer, row)
                if progress is not None and (place % TELL_EVERY == 0 or place == len(table.rows)):
                    progress(place, len(table.rows))
            table.faults.check()
            if dry_run:
                raise _Undo
    except _Undo:
        return


@contextmanager
def _faults_of(table: Table, row: Cells) -> Iterator[None]:
    """Note what a row is refused for beside the other rows' faults."""
    before = len(table.faults)
    try:
        yield
    except MillikeepError as error:
        if len(table.faults) == before:
            for what in (error.what, *error.faults):
                table.faults.add(f"line {row.line}", f"{what} ({error.remedy})")


def _instant(row: Cells) -> int:
    return parse_instant(row.text("at") or "", where="at")


def _row_volts(table: Table, row: Cells) -> dict[str, float]:
    volts = {name: row.optional_number(name, "V") for name in table.extra}
    return {name: value for name, value in volts.items() if value is not None and not math.isnan(value)}


def _state(writer: Writer, typed: str, device: Found) -> Found:
    """The state named in a row; it must be one of the table's device."""
    found = find_tuning(writer.connection, typed, device)
    owner = writer.connection.execute(
        text("SELECT device_no FROM tuning WHERE no = :no"), {"no": found.no}
    ).scalar_one()
    if owner != device.no:
        raise InputError(
            f"the state {typed!r} is one of {device_name(writer.connection, owner)}",
            where="tuning",
            remedy="name a state of the table's device",
        )
    return found


def _numbers(writer: Writer, row: Cells) -> tuple[float, float | None, str]:
    """Value and uncertainty in the quantity's unit."""
    value = row.number("value")
    spread = row.optional_number("standard_uncertainty")
    if math.isnan(value) or (spread is not None and math.isnan(spread)):
        raise InputError("no number", where="value", remedy="correct the cell")
    if spread is not None and spread < 0:
        raise InputError(
            "the uncertainty is negative", where="standard_uncertainty", remedy="give it as positive"
        )
    unit = quantity_unit(writer.connection, row.text("quantity") or "")
    written = row.text("unit") or ""
    numbers, si_unit = to_si([value], written)
    if si_unit != unit:
        raise InputError(
            f"the unit {written!r} does not fit",
            where="unit",
            remedy=f"give {row.text('quantity')} in {unit}",
        )
    if spread is not None:
        # A spread scales without the offset that a unit of temperature may have.
        ends, _ = to_si([value, value + spread], written)
        spread = float(ends[1] - ends[0]) if _has_offset(written) else float(to_si([spread], written)[0][0])
    return float(numbers[0]), spread, unit


def _has_offset(unit: str) -> bool:
    return float(to_si([0.0], unit)[0][0]) != 0.0


def _count(loaded: Loaded, new: bool) -> None:
    loaded.new += new
    loaded.already += not new
