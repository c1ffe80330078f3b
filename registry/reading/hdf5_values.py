"""What does one HDF5 dataset or attribute say as a field, or as a value of the moment?

Packed values of the CF convention (attributes ``scale_factor``, ``add_offset``,
``_FillValue``, ``missing_value``) are unpacked, and times ``seconds since …`` are taken
apart, so that no format above needs to know them.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import cast, get_args

import numpy as np

from registry.errors import InputError
from registry.reading.fields import RawField
from registry.reading.hdf5_guard import GuardedFile
from registry.reading.hdf5_node import Node
from registry.reading.json_path import follow, parsed_json
from registry.reading.times import microseconds, since_epoch_text, zone_offset
from registry.samples import FloatArray, Level

__all__ = ["HdfSource", "field_of", "text_attribute"]


def text_attribute(file: GuardedFile, node: Node, name: str) -> str | None:
    """Return an attribute if it is one text, else None."""
    value = file.attribute(node, name)
    if isinstance(value, list) and len(value) == 1:
        value = value[0]
    return value if isinstance(value, str) else None


def field_of(file: GuardedFile, node: Node) -> RawField:
    """Read a dataset with its attributes ``units`` and ``level``.

    Raises:
        InputError: it may not be read, or is packed in a way that is not known.
    """
    place = f"{file.where}, {node.path}"
    unit = text_attribute(file, node, "units")
    unit = text_attribute(file, node, "unit") if unit is None else unit
    level = text_attribute(file, node, "level")
    values = _unpacked(file, node, file.numbers(node))
    since = None if unit is None or " since " not in unit else since_epoch_text(unit)
    start = None
    if since is not None:
        # The CF convention counts from UTC where the text names no zone.
        unit, text = since
        start = microseconds(text, where=place, zone=zone_offset("Z", where=place))[0]
    known = cast("Level | None", level if level in get_args(Level) else None)
    return RawField(node.name, values, unit, place, level=known, start_us=start)


def _unpacked(file: GuardedFile, node: Node, values: FloatArray) -> FloatArray:
    for name in ("_FillValue", "missing_value"):
        blank = _number_attribute(file, node, name)
        if blank is not None:
            values[values == blank] = np.nan
    scale, offset = (_number_attribute(file, node, name) for name in ("scale_factor", "add_offset"))
    if scale is not None:
        values *= scale
    if offset is not None:
        values += offset
    return values


def _number_attribute(file: GuardedFile, node: Node, name: str) -> float | None:
    value = file.attribute(node, name)
    while isinstance(value, list) and len(value) == 1:
        value = value[0]
    return float(value) if isinstance(value, int | float) else None


class HdfSource:
    """Looks up what a layout names; see ``registry.reading.moment`` for the paths."""

    def __init__(self, file: GuardedFile) -> None:
        """Look into ``file`` while it is open."""
        self._file = file

    def value(self, path: str) -> object:
        """Return a number or text, with its unit if it is a dataset that has one."""
        place, mark, steps = path.partition("$")
        holder, at, name = place.partition("@")
        node = self._node(holder)
        value = self._attribute(node, name) if at else self._single(node)
        if not mark:
            return value
        text = value["value"] if isinstance(value, dict) else value
        where = f"{self._file.where}, {place}"
        return follow(
            parsed_json(str(text), where=where, limits=self._file.limits), mark + steps, where=where
        )

    def group(self, path: str) -> Mapping[str, object]:
        """Return all attributes (``group@``), single datasets, or members of a JSON object."""
        if path.endswith("@"):
            node = self._node(path[:-1])
            return {name: self._attribute(node, name) for name in self._file.attribute_names(node)}
        if "@" in path or "$" in path:
            value = self.value(path if "$" in path else f"{path}$")
            if isinstance(value, dict):
                return value
            raise InputError(
                f"{path!r} is no JSON object", where=self._file.where, remedy="correct the layout"
            )
        node = self._node(path)
        if not node.is_group:
            raise InputError(f"{path!r} is no group", where=self._file.where, remedy="correct the layout")
        singles = [child for child in self._file.children(node) if child.is_dataset]
        return {child.name: self._single(child) for child in singles if self._is_single(child)}

    def _node(self, path: str) -> Node:
        node = self._file.find(path)
        if node is None:
            raise InputError(
                f"there is no {path!r}", where=self._file.where, remedy="correct the path in the layout"
            )
        return node

    def _attribute(self, node: Node, name: str) -> object:
        value = self._file.attribute(node, name)
        while isinstance(value, list) and len(value) == 1:
            value = value[0]
        if value is None:
            names = ", ".join(self._file.attribute_names(node)[:20]) or "none"
            raise InputError(
                f"there is no attribute {name!r}",
                where=f"{self._file.where}, {node.path}",
                remedy=f"there are: {names}; correct the layout",
            )
        return cast(object, value)

    def _is_single(self, node: Node) -> bool:
        return int(np.prod(self._file.shape(node), dtype=np.float64)) == 1

    def _single(self, node: Node) -> object:
        if not self._file.is_numeric(node):
            return self._file.text(node)
        if not self._is_single(node):
            raise InputError(
                f"{node.path!r} holds more than one value",
                where=self._file.where,
                remedy="correct the layout",
            )
        field = field_of(self._file, node)
        return {"value": float(field.values.reshape(-1)[0]), "unit": field.unit}
