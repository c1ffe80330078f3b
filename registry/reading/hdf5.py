"""Which samples does an HDF5 file hold?

In this order: what a layout names; the NXdata group of a NeXus file; datasets with
dimension scales.  A file with none of these needs a layout, and the error lists its
datasets.
"""

from __future__ import annotations

from pathlib import Path

from registry.errors import InputError
from registry.reading.fields import RawField, chosen, index_field
from registry.reading.hdf5_guard import GuardedFile, opened
from registry.reading.hdf5_values import HdfSource, field_of
from registry.reading.layout_parts import FieldLayout, Layout
from registry.reading.limits import ReadingLimits
from registry.reading.moment import with_moment
from registry.reading.nxdata import read_nxdata
from registry.reading.scales import read_scales
from registry.reading.shaping import shape_columns, shape_grid
from registry.samples import Samples

__all__ = ["read_hdf5"]


def read_hdf5(path: Path, layout: Layout | None, *, where: str, limits: ReadingLimits) -> Samples:
    """Read the one measurement in an HDF5 file.

    Raises:
        InputError: the file is damaged or hostile, or does not say what it holds.
    """
    with opened(path, where=where, limits=limits) as file:
        if layout is not None and layout.signals:
            samples = _by_layout(file, layout)
        else:
            samples = read_nxdata(file) or read_scales(file) or _undescribed(file)
        return with_moment(samples, layout, HdfSource(file), where=where)


def _by_layout(file: GuardedFile, layout: Layout) -> Samples:
    signals = [_named(file, item) for item in layout.signals]
    axes = [_named(file, item) for item in layout.axes]
    shape = signals[0].values.shape
    if not axes:
        axes = [index_field(length, file.where, f"index {at}") for at, length in enumerate(shape, start=1)]
    if len(shape) == 1 and all(field.values.ndim == 1 for field in axes):
        return shape_columns(axes, signals, where=file.where, limits=file.limits)
    return shape_grid(axes, signals, where=file.where)


def _named(file: GuardedFile, item: FieldLayout) -> RawField:
    path = item.dataset or ""
    node = file.find(path)
    if node is None or not node.is_dataset:
        raise InputError(
            f"the layout names the dataset {path!r}, which is not there",
            where=file.where,
            remedy=f"there are: {_datasets(file)}",
        )
    field = field_of(file, node)
    named = chosen(item, field.values, field.unit, field.place)
    level = item.level or field.level
    return RawField(
        named.name, named.values, named.unit, named.place, named.factor, named.offset, level, field.start_us
    )


def _datasets(file: GuardedFile) -> str:
    found = [f"{node.path} {file.shape(node)}" for node in file.all_objects() if file.is_numeric(node)]
    return ", ".join(found[:12]) + (" …" if len(found) > 12 else "") if found else "no datasets of numbers"


def _undescribed(file: GuardedFile) -> Samples:
    raise InputError(
        "the file does not say which datasets are axes and signals (no NXdata group, no dimension scales)",
        where=file.where,
        remedy=f"give a layout that names them; there are: {_datasets(file)}",
    )
