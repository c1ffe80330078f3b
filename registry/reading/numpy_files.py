"""Which samples does a NumPy file (NPY or NPZ) hold?

Pickled objects are never loaded: only arrays of real numbers, and single texts where a
layout looks for one.  All sizes are checked as declared before anything is unpacked.
With a layout ``dataset`` names an array of an NPZ archive or a field of a structured NPY
array, and ``column`` a column of a two-dimensional array.  Without a layout every array
of the archive needs a name such as ``P1 [V]``.
"""

from __future__ import annotations

import io
import math
import zipfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import IO, Any, Final

import numpy as np
from numpy.lib import format as npy
from numpy.typing import NDArray

from registry.errors import InputError
from registry.reading.faults import as_input_error, damaged
from registry.reading.fields import RawField, chosen, index_field
from registry.reading.json_path import follow, parsed_json
from registry.reading.layout_parts import FieldLayout, Layout
from registry.reading.limits import ReadingLimits
from registry.reading.moment import with_moment
from registry.reading.shaping import shape_columns, shape_grid
from registry.reading.text_cells import head_cell
from registry.samples import Samples

__all__ = ["read_npy", "read_npz"]

_NUMBERS: Final = "biuf"


def read_npy(path: Path, layout: Layout | None, *, where: str, limits: ReadingLimits) -> Samples:
    """Read one NPY array.

    Raises:
        InputError: it is damaged, too large, holds objects, or needs a layout.
    """
    with as_input_error(where), path.open("rb") as stream:
        array = _array(stream, path.stat().st_size, where, limits)
    if array.dtype.names is not None:
        arrays = {name: array[name] for name in array.dtype.names}
        return _samples(arrays, layout, where=where, limits=limits)
    return _samples({"": array}, layout, where=where, limits=limits)


def read_npz(path: Path, layout: Layout | None, *, where: str, limits: ReadingLimits) -> Samples:
    """Read the arrays of an NPZ archive.

    Raises:
        InputError: it is damaged, too large, holds objects, or needs a layout.
    """
    arrays: dict[str, NDArray[Any]] = {}
    with _archive(path, where) as archive:
        for member in _members(archive, where, limits):
            name = member.filename.removesuffix(".npy")
            place = f"{where}, array {name!r}"
            with as_input_error(place), archive.open(member) as stream:
                arrays[name] = _array(stream, member.file_size, place, limits)
                # Reading on to the end makes zipfile compare the check sum.
                if stream.read(1):
                    raise damaged(place, "there is something after the array")
    return _samples(arrays, layout, where=where, limits=limits)


@contextmanager
def _archive(path: Path, where: str) -> Iterator[zipfile.ZipFile]:
    with as_input_error(where):
        archive = zipfile.ZipFile(path)
    with archive:
        yield archive


def _members(archive: zipfile.ZipFile, where: str, limits: ReadingLimits) -> list[zipfile.ZipInfo]:
    members = archive.infolist()
    if len(members) > limits.archive_members:
        raise _refused(f"an archive of {len(members)} arrays", where, "save fewer arrays in one file")
    if sum(member.file_size for member in members) > limits.file_arrays_bytes:
        raise _refused("the arrays are larger together than may be read", where, "save them as HDF5 in parts")
    names = [member.filename for member in members]
    for member in members:
        if not member.filename.endswith(".npy") or names.count(member.filename) > 1:
            raise _refused(f"the member {member.filename!r}", where, "give an archive written by numpy.savez")
        if member.compress_type not in (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED) or member.flag_bits & 1:
            raise _refused(
                f"the packing of {member.filename!r}", where, "write it with numpy.savez_compressed"
            )
    return members


def _array(stream: IO[bytes], size: int, where: str, limits: ReadingLimits) -> NDArray[Any]:
    """Read one array after checking what its header declares; ``size`` is all there is."""
    head = stream.read(min(size, limits.npy_header_bytes + 16))
    header = io.BytesIO(head)
    version = npy.read_magic(header)
    if version not in ((1, 0), (2, 0), (3, 0)):
        raise _refused(f"NPY version {version}", where, "write it with numpy.save")
    # Version 3 differs from 2 only by UTF-8 in field names, which the same reader takes.
    reader = npy.read_array_header_1_0 if version == (1, 0) else npy.read_array_header_2_0
    shape, fortran, dtype = reader(header, max_header_size=limits.npy_header_bytes)
    names = dtype.names
    kinds = [dtype.kind] if names is None else [dtype[name].kind for name in names]
    if dtype.hasobject or any(kind not in _NUMBERS + "U" for kind in kinds):
        raise _refused(f"an array of type {dtype}", where, "save plain arrays of real numbers, no objects")
    count = math.prod(shape)
    declared = count * dtype.itemsize
    if declared > limits.array_bytes:
        raise _refused(f"an array of {declared} bytes", where, "save it as HDF5 in parts")
    if declared != size - header.tell():
        raise damaged(where, f"{size - header.tell()} bytes stand where {declared} are declared")
    body = bytearray(declared)
    body[: len(head) - header.tell()] = head[header.tell() :]
    at = len(head) - header.tell()
    while at < declared:
        part = stream.read(min(declared - at, 2**24))
        if not part:
            raise damaged(where, "the array ends too early")
        body[at : at + len(part)] = part
        at += len(part)
    return np.frombuffer(body, dtype=dtype, count=count).reshape(shape, order="F" if fortran else "C")


def _samples(
    arrays: dict[str, NDArray[Any]], layout: Layout | None, *, where: str, limits: ReadingLimits
) -> Samples:
    if layout is not None and layout.signals:
        signals = [_named(item, arrays, where) for item in layout.signals]
        axes = [_named(item, arrays, where) for item in layout.axes]
    else:
        axes, signals = _by_name(arrays, where)
    if not signals:
        raise _refused("an archive without a signal", where, "save an axis and at least one signal")
    shape = signals[0].values.shape
    if not axes:
        axes = [index_field(length, where, f"index {at}") for at, length in enumerate(shape, start=1)]
    long_form = len(axes) > 1 and len(shape) == 1
    if long_form or (len(axes) == 1 and axes[0].values.ndim == 1 and len(shape) == 1):
        samples = shape_columns(axes, signals, where=where, limits=limits)
    else:
        samples = shape_grid(axes, signals, where=where)
    return with_moment(samples, layout, _ArraySource(arrays, where, limits), where=where)


def _named(item: FieldLayout, arrays: dict[str, NDArray[Any]], where: str) -> RawField:
    name = item.dataset
    if name is None:
        if len(arrays) != 1:
            raise _refused(
                f"{item.name!r} without dataset", where, f"add dataset, one of: {', '.join(arrays)}"
            )
        name = next(iter(arrays))
    if name not in arrays:
        raise InputError(
            f"there is no array {name!r}", where=where, remedy=f"there are: {', '.join(arrays)[:400]}"
        )
    values = arrays[name]
    place = f"{where}, array {name!r}"
    if item.column is not None:
        if values.ndim != 2 or item.column > values.shape[1]:
            raise InputError(
                f"there is no column {item.column} in an array of shape {values.shape}",
                where=place,
                remedy="columns are those of a two-dimensional array, counted from 1",
            )
        values = values[:, item.column - 1]
    return chosen(item, _numbers(values, place), None, place)


def _numbers(values: NDArray[Any], place: str) -> NDArray[Any]:
    if values.dtype.kind not in _NUMBERS:
        raise _refused(
            f"an array of type {values.dtype}", place, "axes and signals are arrays of real numbers"
        )
    return values


def _by_name(arrays: dict[str, NDArray[Any]], where: str) -> tuple[list[RawField], list[RawField]]:
    """Take arrays named ``name [unit]``: those of one dimension are axes if a map is there."""
    fields = []
    for written, values in arrays.items():
        name, unit = head_cell(written)
        if unit is None:
            what = (
                f"the array {written!r} does not say its unit"
                if written
                else "an NPY array says nothing of its columns"
            )
            raise InputError(
                what,
                where=where,
                remedy='give a layout (format = "numpy"), or name the arrays like "P1 [V]"',
            )
        fields.append(RawField(name, _numbers(values, where), unit, f"{where}, array {written!r}"))
    most = max((field.values.ndim for field in fields), default=0)
    signals = [field for field in fields if field.values.ndim == most]
    axes = [field for field in fields if field.values.ndim < most]
    return (axes, signals) if most > 1 else (signals[:1], signals[1:])


class _ArraySource:
    """Looks values up in the arrays of one value of an archive."""

    def __init__(self, arrays: Mapping[str, NDArray[Any]], where: str, limits: ReadingLimits) -> None:
        self._arrays = arrays
        self._where = where
        self._limits = limits

    def value(self, path: str) -> object:
        name, mark, steps = path.partition("$")
        place = f"{self._where}, array {name!r}"
        if name not in self._arrays or self._arrays[name].size != 1:
            raise InputError(
                f"{name!r} is no array of one value",
                where=self._where,
                remedy="correct the path in the layout",
            )
        value: object = self._arrays[name].reshape(-1)[0].item()
        if not mark:
            return value
        return follow(parsed_json(str(value), where=place, limits=self._limits), mark + steps, where=place)

    def group(self, path: str) -> Mapping[str, object]:
        value = self.value(path if "$" in path else f"{path}$")
        if not isinstance(value, dict):
            raise InputError(
                f"{path!r} is no JSON object", where=self._where, remedy="correct the path in the layout"
            )
        return value


def _refused(what: str, where: str, remedy: str) -> InputError:
    return InputError(f"{what} is not read here", where=where, remedy=remedy)
