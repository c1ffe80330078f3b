"""Which gate volts, settings and time does a file tell about the moment it was taken?

Only what a layout names is taken.  A PATH in a layout is

=====================  ======================================================================
``@name``              attribute of an HDF5 file's root
``group/sub@name``     attribute of an HDF5 group or dataset
``group/sub@``         with ``all``: every attribute of it
``group/dataset``      HDF5 dataset of one value (its attribute ``units`` counts), or an NPZ array
``group/sub``          with ``all``: every dataset of one value in it
``…@name$.gates.P1``   JSON path into a text attribute (or ``dataset$.gates.P1``)
``$.gates.P1``         JSON path into the JSON objects among the comments of a text
``#name``              what follows ``name:`` or ``name =`` in a comment of a text
=====================  ======================================================================

A value is a number, a text such as ``12.5 mV``, ``[12.5, "mV"]`` or
``{"value": 12.5, "unit": "mV"}``; with ``all`` the unit may also stand in the name, as in
``P1 [mV]``.  The unit of the entry in the layout wins, then the one with the value, then
that of the whole table; volts without any are in V, a setting without any is an error.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import replace
from typing import Final

from registry.errors import InputError
from registry.reading.json_path import MomentSource
from registry.reading.layout_parts import Entry, Layout, MomentLayout
from registry.reading.text_cells import head_cell, number
from registry.reading.times import microseconds, zone_offset
from registry.records.units import to_si
from registry.samples import Samples

__all__ = ["with_moment"]

_NUMBER_AND_UNIT: Final = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*)")
_LATEST_US: Final = 253_402_300_800 * 10**6
"""The year 10000, microseconds since 1970: RFC 3339 ends there."""


def with_moment(samples: Samples, layout: Layout | None, source: MomentSource, *, where: str) -> Samples:
    """Return ``samples`` with what ``layout`` says of volts, settings, time, kind and derive.

    Raises:
        InputError: a path leads nowhere, or what stands there is no such value.
    """
    if layout is None:
        return samples
    notes = list(samples.notes)
    volts = {} if layout.volts is None else _table(layout.volts, source, "V", where, None)
    wrong = [name for name, (_, unit) in volts.items() if unit != "V"]
    if wrong:
        raise _fault(
            f"the volts of {wrong[0]!r} are in {volts[wrong[0]][1]}", where, "correct the unit or the path"
        )
    settings = {} if layout.settings is None else _table(layout.settings, source, None, where, notes)
    return replace(
        samples,
        taken_at_us=samples.taken_at_us
        if layout.time is None
        else _instant(layout, layout.time, source, where),
        volts={name: value for name, (value, _) in volts.items()},
        volts_level="gate" if layout.volts is None else layout.volts.level,
        settings=settings,
        kind=layout.kind,
        derive=layout.derive,
        notes=tuple(notes),
    )


def _table(
    layout: MomentLayout, source: MomentSource, default: str | None, where: str, skipped: list[str] | None
) -> dict[str, tuple[float, str]]:
    """Return name -> (value, canonical unit); words among ``all`` go to ``skipped`` if given."""
    found: dict[str, tuple[float, str]] = {}
    fallback = layout.unit if layout.unit is not None else default
    if layout.all_path is not None:
        for written, value in source.group(layout.all_path).items():
            name, unit = head_cell(str(written))
            if skipped is not None and _is_word(value):
                skipped.append(f"setting {name!r} is no number and was left out")
                continue
            place = f"{where}, {layout.all_path}, {name!r}"
            found[name] = _quantity(value, None, unit if unit is not None else fallback, 1.0, place)
    for name, entry in layout.entries.items():
        place = f"{where}, {entry.path}"
        found[name] = _quantity(source.value(entry.path), entry.unit, fallback, entry.factor, place)
    return found


def _is_word(value: object) -> bool:
    if isinstance(value, str):
        return _NUMBER_AND_UNIT.fullmatch(value.strip()) is None
    return value is None or isinstance(value, bool) or (isinstance(value, dict) and "value" not in value)


def _quantity(
    value: object, wanted: str | None, fallback: str | None, factor: float, place: str
) -> tuple[float, str]:
    value, unit = _parts(value)
    unit = next((text for text in (wanted, unit, fallback) if text is not None), None)
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise _fault(
            f"{str(value)[:60]!r} is no number",
            place,
            "correct the path, or take this entry out of the layout",
        )
    if unit is None:
        raise _fault("the value has no unit", place, "add unit = ... to the entry in the layout")
    try:
        scaled = float(value) * factor
    except OverflowError:
        scaled = math.inf
    if not math.isfinite(scaled):
        raise _fault(f"{str(value)[:60]} is not finite", place, "correct the path, or take this entry out")
    converted, canonical_unit = to_si(scaled, unit, where=place)
    return float(converted), canonical_unit


def _parts(value: object) -> tuple[object, str | None]:
    """Part a value from the unit that comes with it."""
    if isinstance(value, Mapping) and "value" in value:
        unit = value.get("unit", value.get("units"))
        return value["value"], unit if isinstance(unit, str) else None
    if isinstance(value, list) and len(value) == 2 and isinstance(value[1], str):
        return value[0], value[1]
    if isinstance(value, str):
        match = _NUMBER_AND_UNIT.fullmatch(value.strip())
        if match is not None:
            return float(match[1]), match[2] or None
    return value, None


def _instant(layout: Layout, entry: Entry, source: MomentSource, where: str) -> int:
    place = f"{where}, {entry.path}"
    value = source.value(entry.path)
    if isinstance(value, str) and number(value, ".") is None:
        zone = None if layout.zone is None else zone_offset(layout.zone, where=place)
        stamp, certain = microseconds(value, where=place, zone=zone)
        if not certain:
            raise _fault(
                f"{value!r} has no offset from UTC", place, 'add zone = "+01:00" to [time] in the layout'
            )
        return stamp
    seconds, unit = _quantity(value, entry.unit, "s", entry.factor, place)
    if unit != "s" or not 0 <= seconds * 1e6 < _LATEST_US:
        raise _fault(
            f"{value!r} is no number of seconds since 1970", place, "correct the path or the unit of [time]"
        )
    return round(seconds * 1e6)


def _fault(what: str, where: str, remedy: str) -> InputError:
    return InputError(what, where=where, remedy=remedy)
