"""Which axes and signals does an NXdata group of a NeXus file name?

After the NeXus base class NXdata: group attributes ``signal``, ``axes`` and
``<axis>_indices``, ``auxiliary_signals`` for further signals; the attribute ``default``
leads from the root over NXentry to the group.  The older marks on the fields themselves
(``signal=1``, ``axes``, ``axis`` with ``primary``) are deprecated there and only read.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

from registry.errors import InputError
from registry.reading.fields import RawField, index_field
from registry.reading.hdf5_guard import GuardedFile
from registry.reading.hdf5_node import Node
from registry.reading.hdf5_values import field_of, text_attribute
from registry.reading.shaping import shape_grid
from registry.reading.times import looks_like_time, microseconds
from registry.samples import Samples

__all__ = ["read_nxdata"]

_NONE: Final = "."


@dataclass(frozen=True)
class _Plan:
    """Names of signals, and for each dimension of the first one the name of its axis."""

    signals: tuple[str, ...]
    axes: tuple[str | None, ...]


def read_nxdata(file: GuardedFile) -> Samples | None:
    """Read the NXdata group that the file points at, or its only one; None if it has none.

    Raises:
        InputError: there are several and no ``default``, or a group contradicts itself.
    """
    group = _group(file)
    if group is None:
        return None
    plan = _plan(file, group)
    signals = [field_of(file, _member(file, group, name)) for name in plan.signals]
    shape = signals[0].values.shape
    axes, notes = _axes(file, group, plan, shape)
    for name in (f"{signals[0].name}_scaling_factor", f"{signals[0].name}_offset"):
        if file.find(name, group) is not None:
            raise file.refused(group, f"the signal has {name!r}, whose use is not settled")
    errors = [name for name in plan.signals if file.find(f"{name}_errors", group) is not None]
    notes += [f"the uncertainties {name}_errors were not used" for name in errors]
    samples = shape_grid(axes, signals, where=f"{file.where}, {group.path}")
    started = samples.taken_at_us if samples.taken_at_us is not None else _start_time(file, group, notes)
    return replace(samples, notes=(*notes, *samples.notes), taken_at_us=started)


def _group(file: GuardedFile) -> Node | None:
    node = file.root
    for _ in range(file.limits.depth):
        if text_attribute(file, node, "NX_class") == "NXdata":
            return node
        name = text_attribute(file, node, "default")
        following = file.find(name, node) if name else None
        if following is None or not following.is_group:
            break
        node = following
    found = [n for n in file.all_objects() if n.is_group and text_attribute(file, n, "NX_class") == "NXdata"]
    if len(found) > 1:
        raise InputError(
            f"there are {len(found)} NXdata groups: {', '.join(n.path for n in found[:8])}",
            where=file.where,
            remedy="mark one with the attribute default at root and entry, or name its datasets in a layout",
        )
    return found[0] if found else None


def _plan(file: GuardedFile, group: Node) -> _Plan:
    signal = text_attribute(file, group, "signal")
    if signal is None:
        return _deprecated_plan(file, group)
    further = file.attribute(group, "auxiliary_signals") or []
    names = [further] if isinstance(further, str) else [str(name) for name in further]
    node = _member(file, group, signal)
    if not file.is_numeric(node):
        raise file.refused(node, "the signal is no dataset of real numbers")
    rank = len(file.shape(node))
    axes = file.attribute(group, "axes")
    listed = [axes] if isinstance(axes, str) else [str(name) for name in axes or []]
    if len(listed) == 1 and rank > 1:
        listed = _parted(listed[0])
    return _Plan((signal, *names), _placed(file, group, listed, rank))


def _placed(file: GuardedFile, group: Node, listed: Sequence[str], rank: int) -> tuple[str | None, ...]:
    """Put the axes named by ``axes`` where ``<axis>_indices``, or else their order, says."""
    axes: list[str | None] = [None] * rank
    for position, name in enumerate(listed):
        if name == _NONE:
            continue
        indices = _indices(file, group, name)
        for dimension in indices[:1] if len(indices) == 1 else [position]:
            if not 0 <= dimension < rank:
                raise file.refused(group, f"the axis {name!r} belongs to dimension {dimension} of {rank}")
            axes[dimension] = axes[dimension] or name
    for key in file.attribute_names(group):
        name = key.removesuffix("_indices")
        indices = _indices(file, group, name) if name != key else []
        if len(indices) == 1 and 0 <= indices[0] < rank and axes[indices[0]] is None and name not in axes:
            axes[indices[0]] = name if file.find(name, group) is not None else None
    return tuple(axes)


def _indices(file: GuardedFile, group: Node, name: str) -> list[int]:
    value = file.attribute(group, f"{name}_indices")
    if value is None:
        return []
    values = value if isinstance(value, list) else [value]
    if not all(isinstance(v, int | float) and float(v).is_integer() for v in values):
        raise file.refused(group, f"{name}_indices is no whole number")
    return [int(v) for v in values]


def _deprecated_plan(file: GuardedFile, group: Node) -> _Plan:
    fields = [child for child in file.children(group) if file.is_numeric(child)]
    marked = [child for child in fields if _mark(file, child, "signal") == 1]
    if not marked:
        raise InputError(
            "the NXdata group names no signal",
            where=f"{file.where}, {group.path}",
            remedy="write its attribute signal, or name the datasets in a layout",
        )
    signal = marked[0]
    rank = len(file.shape(signal))
    listed = text_attribute(file, signal, "axes")
    if listed is not None:
        return _Plan((signal.name,), _placed(file, group, _parted(listed), rank))
    axes: list[str | None] = [None] * rank
    for child in sorted(fields, key=lambda child: _mark(file, child, "primary") != 1):
        dimension = (_mark(file, child, "axis") or 0) - 1
        if 0 <= dimension < rank and axes[dimension] is None:
            axes[dimension] = child.name
    return _Plan((signal.name,), tuple(axes))


def _mark(file: GuardedFile, node: Node, name: str) -> int | None:
    value = file.attribute(node, name)
    text = str(value[0] if isinstance(value, list) and value else value)
    return int(float(text)) if re.fullmatch(r"\d{1,3}(\.0)?", text) else None


def _parted(text: str) -> list[str]:
    return [name.strip() for name in re.split(r"[:,]", text.strip("[] ")) if name.strip()]


def _member(file: GuardedFile, group: Node, name: str) -> Node:
    node = file.find(name, group)
    if node is None or not node.is_dataset:
        raise InputError(
            f"the NXdata group names {name!r}, which is not there",
            where=f"{file.where}, {group.path}",
            remedy="add the field, or name the datasets in a layout",
        )
    return node


def _axes(
    file: GuardedFile, group: Node, plan: _Plan, shape: tuple[int, ...]
) -> tuple[list[RawField], list[str]]:
    axes: list[RawField] = []
    notes: list[str] = []
    for dimension, (name, length) in enumerate(zip(plan.axes, shape, strict=True), start=1):
        if name is None:
            axes.append(index_field(length, file.where, f"index {dimension}"))
            notes.append(f"dimension {dimension} has no axis; its samples are numbered")
            continue
        field = field_of(file, _member(file, group, name))
        if field.values.shape == (length + 1,):
            field = replace(field, values=(field.values[:-1] + field.values[1:]) / 2.0)
            notes.append(f"axis {name!r} holds bin edges; the centres were taken")
        axes.append(field)
    return axes, notes


def _start_time(file: GuardedFile, group: Node, notes: list[str]) -> int | None:
    """Return the ``start_time`` of the entry around ``group``, if it has an offset from UTC."""
    parts = group.path.strip("/").split("/")[:-1]
    for depth in range(len(parts), -1, -1):
        node = file.find("/" + "/".join([*parts[:depth], "start_time"]))
        if node is None or not node.is_dataset or file.is_numeric(node):
            continue
        text = file.text(node)
        place = f"{file.where}, {node.path}"
        stamp, certain = microseconds(text, where=place) if looks_like_time(text) else (0, False)
        if certain:
            return stamp
        notes.append(f"start_time {text[:40]!r} has no offset from UTC and was not used")
        return None
    return None
