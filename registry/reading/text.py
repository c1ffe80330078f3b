"""Which samples does a delimited text hold?

Without a layout the first column is the axis and the others are signals; the two first
columns are the axes of a map if both are voltages and repeat in the pattern of a grid.
"""

from __future__ import annotations

from dataclasses import replace

from registry.reading.fields import RawField, axis_of, chosen, index_field, missing_units
from registry.reading.grid import looks_like_grid
from registry.reading.json_path import CommentSource
from registry.reading.layout_parts import FieldLayout, Layout
from registry.reading.limits import ReadingLimits
from registry.reading.moment import with_moment
from registry.reading.shaping import shape_columns
from registry.reading.text_source import decoded
from registry.reading.text_table import Column, Table, parse_table
from registry.samples import Samples

__all__ = ["read_text"]


def read_text(content: bytes, layout: Layout | None, *, where: str, limits: ReadingLimits) -> Samples:
    """Read the bytes of a text that is not compressed (any more).

    Raises:
        InputError: it is no text, no table, or does not say what it holds.
    """
    text, notes = decoded(content, where=where, limits=limits)
    table = parse_table(text, layout, where=where, limits=limits)
    axes, signals = _fields(table, layout, where, limits)
    samples = shape_columns(axes, signals, where=where, limits=limits)
    clock = table.columns.get(_clock_column(table))
    if clock is not None and not clock.certain:
        samples = replace(samples, taken_at_us=None)
        notes = (*notes, "the times have no offset from UTC; only their differences were used")
    samples = replace(samples, notes=(*notes, *samples.notes))
    return with_moment(samples, layout, CommentSource(table.comments, where, limits), where=where)


def _fields(
    table: Table, layout: Layout | None, where: str, limits: ReadingLimits
) -> tuple[list[RawField], list[RawField]]:
    if layout is not None and layout.signals:
        signals = [_named(item, table, where) for item in layout.signals]
        axes = [_named(item, table, where) for item in layout.axes]
        return axes or [index_field(signals[0].values.size, where)], signals
    fields = [_plain(number, column, where) for number, column in sorted(table.columns.items())]
    return (fields[:2], fields[2:]) if _is_map(fields, where, limits) else (fields[:1], fields[1:])


def _is_map(fields: list[RawField], where: str, limits: ReadingLimits) -> bool:
    if len(fields) < 3:
        return False
    missing_units(fields, where)
    pattern = looks_like_grid(fields[0].values, fields[1].values, limits.grid_tolerance)
    return pattern and all(axis_of(field).unit == "V" for field in fields[:2])


def _plain(number: int, column: Column, where: str) -> RawField:
    place = f"{where}, column {number}"
    return RawField(column.name, column.values, column.unit, place, start_us=column.start_us)


def _named(item: FieldLayout, table: Table, where: str) -> RawField:
    number = item.column or 0
    column = table.columns[number]
    field = chosen(item, column.values, column.unit, f"{where}, column {number}")
    return field if column.start_us is None else replace(field, unit="s", start_us=column.start_us)


def _clock_column(table: Table) -> int:
    return next((number for number, column in table.columns.items() if column.start_us is not None), 0)
