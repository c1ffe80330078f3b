"""What does the file at a path hold, whatever its format?

The format is told by the content and never by the name: a stored copy has no suffix.
"""

from __future__ import annotations

from pathlib import Path
from typing import BinaryIO, Final, Literal

from registry.errors import InputError
from registry.reading.faults import as_input_error
from registry.reading.finished import hdf5_offset
from registry.reading.layout_parts import Format, Layout
from registry.reading.limits import DEFAULT_LIMITS, ReadingLimits
from registry.reading.text import read_text
from registry.reading.text_source import GZIP_MAGIC, gunzipped
from registry.samples import Samples

__all__ = ["read_file"]

_Kind = Literal["hdf5", "npz", "npy", "gzip", "text"]
_NPY_MAGIC: Final = b"\x93NUMPY"
_ZIP_MAGIC: Final = b"PK\x03\x04"
_FORMATS: Final[dict[_Kind, Format]] = {
    "hdf5": "hdf5",
    "npz": "numpy",
    "npy": "numpy",
    "gzip": "text",
    "text": "text",
}


def read_file(
    path: Path,
    layout: Layout | None = None,
    *,
    shown_as: str | None = None,
    limits: ReadingLimits = DEFAULT_LIMITS,
) -> Samples:
    """Read one measured file into memory, in SI.

    Args:
        path: the file, or a stored copy of it.
        layout: what the file does not say itself.
        shown_as: the name for messages where ``path`` is not the user's own file.
        limits: sizes above which a file is refused.

    Raises:
        InputError: the file is not there, damaged, hostile, not finished, or does not say
            what it holds; with file, place and remedy.
    """
    where = shown_as if shown_as is not None else str(path)
    kind, size = _kind_of(path, where)
    if layout is not None and layout.format != _FORMATS[kind]:
        raise InputError(
            f"the layout is for {layout.format} files, and this is {_FORMATS[kind]}",
            where=where,
            remedy="give the layout that belongs to this file",
        )
    if kind == "hdf5":
        # Imported here: h5py is not needed for thousands of small texts.
        from registry.reading.hdf5 import read_hdf5

        return read_hdf5(path, layout, where=where, limits=limits)
    if kind in ("npz", "npy"):
        from registry.reading.numpy_files import read_npy, read_npz  # only when met

        return (read_npz if kind == "npz" else read_npy)(path, layout, where=where, limits=limits)
    content = _content(path, size, where, limits)
    if kind == "gzip":
        content = gunzipped(content, where=where, limits=limits)
        if content.startswith((b"\x89HDF", _NPY_MAGIC, _ZIP_MAGIC, GZIP_MAGIC)):
            raise InputError("a compressed file inside is no text", where=where, remedy="unpack it first")
    return read_text(content, layout, where=where, limits=limits)


def _kind_of(path: Path, where: str) -> tuple[_Kind, int]:
    with as_input_error(where):
        if not path.is_file():
            raise InputError("there is no such file", where=where, remedy="check the path")
        size = path.stat().st_size
        if size == 0:
            raise InputError("the file is empty", where=where, remedy="wait until it is written")
        with path.open("rb") as stream:
            return _kind(stream, size), size


def _kind(stream: BinaryIO, size: int) -> _Kind:
    head = stream.read(len(_NPY_MAGIC))
    if head == _NPY_MAGIC:
        return "npy"
    if head.startswith(_ZIP_MAGIC):
        return "npz"
    if head.startswith(GZIP_MAGIC):
        return "gzip"
    return "text" if hdf5_offset(stream, size) is None else "hdf5"


def _content(path: Path, size: int, where: str, limits: ReadingLimits) -> bytes:
    if size > limits.text_bytes:
        raise InputError(
            f"the text has {size} bytes, more than {limits.text_bytes}",
            where=where,
            remedy="save measurements of this size as HDF5",
        )
    with as_input_error(where):
        return path.read_bytes()
