"""What does one array of a file become once unit, factor and offset are applied?

Every format hands over ``RawField`` values; shaping takes them as float64 in SI.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from registry.errors import InputError
from registry.reading.layout_parts import FieldLayout
from registry.records.units import to_si
from registry.samples import Axis, FloatArray, Level, Signal

__all__ = ["RawField", "axis_of", "chosen", "index_field", "missing_units", "signal_of"]

MISSING_UNIT_REMEDY = (
    "write it into the file, e.g. P1 [mV] in a header or the attribute units, or give a layout"
)


@dataclass(frozen=True, eq=False)
class RawField:
    """One array as it stands in the file.

    Attributes:
        name: as the file or layout names it.
        values: real numbers of any width and shape.
        unit: as written; None where the file says nothing.
        place: file and place, for errors.
        factor, offset: value in ``unit`` = value in the file x factor + offset.
        level: for voltages, where they are.
        start_us: for times, the instant (microseconds since 1970 UTC) of value 0.
    """

    name: str
    values: NDArray[Any]
    unit: str | None
    place: str
    factor: float = 1.0
    offset: float = 0.0
    level: Level | None = None
    start_us: int | None = None


def chosen(item: FieldLayout, values: NDArray[Any], unit: str | None, place: str) -> RawField:
    """Return the field that a layout names; the layout's unit wins over the file's."""
    return RawField(
        name=item.name,
        values=values,
        unit=item.unit if item.unit is not None else unit,
        place=place,
        factor=item.factor,
        offset=item.offset,
        level=item.level,
    )


def index_field(length: int, where: str, name: str = "index") -> RawField:
    """Return the axis 0, 1, 2 … for a dimension that has none."""
    return RawField(name, np.arange(length, dtype=np.float64), "1", where)


def missing_units(fields: Sequence[RawField], where: str) -> None:
    """Refuse fields without a unit, all of them in one error.

    Raises:
        InputError: at least one field has no unit.
    """
    missing = [field.name for field in fields if field.unit is None]
    if missing:
        raise InputError(
            f"{missing[0]!r} has no unit",
            where=where,
            remedy=MISSING_UNIT_REMEDY,
            faults=tuple(f"{name!r} has no unit" for name in missing[1:10]),
        )


def axis_of(field: RawField) -> Axis:
    """Return ``field`` in SI; a voltage is at the gate unless it says otherwise.

    Raises:
        InputError: unit missing or unknown, a level on what is no voltage, a value that
            is not finite.
    """
    values, unit = _converted(field)
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        raise InputError(
            f"axis {field.name!r} has no finite value at sample {int(bad[0]) + 1} ({bad.size} such samples)",
            where=field.place,
            remedy="an axis needs a number at every sample: remove those rows, or name another axis",
        )
    if field.level is not None and unit != "V":
        raise InputError(
            f"axis {field.name!r} has a level but its unit is {unit}",
            where=field.place,
            remedy="only voltages are at the gate or at the source: remove the level",
        )
    level: Level | None = (field.level or "gate") if unit == "V" else None
    return Axis(field.name, unit, values, level)


def signal_of(field: RawField) -> Signal:
    """Return ``field`` in SI.

    Raises:
        InputError: unit missing or unknown.
    """
    values, unit = _converted(field)
    return Signal(field.name, unit, values)


def _converted(field: RawField) -> tuple[FloatArray, str]:
    if field.unit is None:
        raise InputError(f"{field.name!r} has no unit", where=field.place, remedy=MISSING_UNIT_REMEDY)
    values = np.asarray(field.values, dtype=np.float64)
    with np.errstate(over="ignore", invalid="ignore"):
        if field.factor != 1.0 or field.offset != 0.0:
            values = values * field.factor + field.offset
        return to_si(values, field.unit, where=f"{field.place}, {field.name!r}")
