"""Which axes and signals do the dimension scales of an HDF5 file tell (netCDF-4 too)?

A dataset whose every dimension has a scale is a signal and the scales are its axes (HDF5
Dimension Scale Specification).  netCDF-4 marks a dimension without values by a scale that
says so in its name; there the samples are numbered.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Final

import h5py
from h5py import h5a, h5o, h5t

from registry.errors import InputError
from registry.reading.faults import as_input_error
from registry.reading.fields import RawField, index_field
from registry.reading.hdf5_guard import GuardedFile
from registry.reading.hdf5_node import Node
from registry.reading.hdf5_values import field_of, text_attribute
from registry.reading.shaping import shape_grid
from registry.samples import Samples

__all__ = ["read_scales"]

_NO_VALUES: Final = "This is a netCDF dimension but not a netCDF variable"

_MOST_SCALES: Final = 64
"""Scales of one dimension; one is usual, a few are alternatives."""


def read_scales(file: GuardedFile) -> Samples | None:
    """Read the datasets that share their dimension scales; None if none has any.

    Raises:
        InputError: datasets with different scales leave open which are meant.
    """
    groups: dict[tuple[int, ...], list[tuple[Node, list[Node]]]] = {}
    for node in file.all_objects():
        scales = _scales(file, node) if file.is_numeric(node) else []
        if scales:
            key = tuple(_address(file, scale) for scale in scales)
            groups.setdefault(key, []).append((node, scales))
    if not groups:
        return None
    if len(groups) > 1:
        names = ", ".join(node.path for members in groups.values() for node, _ in members[:2])
        raise InputError(
            f"datasets on different axes: {names[:300]}",
            where=file.where,
            remedy="name the axes and signals of one measurement in a layout",
        )
    members = next(iter(groups.values()))
    signals = [field_of(file, node) for node, _ in members]
    notes: list[str] = []
    axes = [
        _axis(file, scale, length, notes)
        for scale, length in zip(members[0][1], signals[0].values.shape, strict=True)
    ]
    samples = shape_grid(axes, signals, where=file.where)
    return replace(samples, notes=(*notes, *samples.notes))


def _scales(file: GuardedFile, node: Node) -> list[Node]:
    """Return the first scale of each dimension, or nothing if a dimension has none."""
    with as_input_error(f"{file.where}, {node.path}"):
        if (
            not h5a.exists(node.ident, b"DIMENSION_LIST")
            or text_attribute(file, node, "CLASS") == "DIMENSION_SCALE"
        ):
            return []
        if not _is_scale_list(node.ident):
            raise file.refused(node, "DIMENSION_LIST does not list dimension scales")
        file.check_lengths(node, "DIMENSION_LIST", len(node.ident.shape), _MOST_SCALES)
        dataset = h5py.Dataset(node.ident)
        found = []
        for dimension in dataset.dims:
            if len(dimension) == 0:
                return []
            scale = dimension[0]
            found.append(Node(scale.id, str(scale.name or node.path)))
        return found


def _is_scale_list(ident: Any) -> bool:
    attribute = h5a.open(ident, b"DIMENSION_LIST")
    kind = attribute.get_type()
    if kind.get_class() != h5t.VLEN or kind.get_super().get_class() != h5t.REFERENCE:
        return False
    return bool(attribute.shape == (len(ident.shape),))


def _address(file: GuardedFile, node: Node) -> int:
    with as_input_error(f"{file.where}, {node.path}"):
        return int(h5o.get_info(node.ident).addr)


def _axis(file: GuardedFile, scale: Node, length: int, notes: list[str]) -> RawField:
    if (text_attribute(file, scale, "NAME") or "").startswith(_NO_VALUES):
        notes.append(f"dimension {scale.name!r} has no values; its samples are numbered")
        return index_field(length, file.where, scale.name)
    return field_of(file, scale)
