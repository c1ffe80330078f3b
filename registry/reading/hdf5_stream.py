"""Which bytes of an HDF5 file does the HDF5 library get to see?

The library reads through this stream, because two kinds of damage must be seen before the
library acts on them.  A global heap (texts of varying length lie there) whose objects do
not follow one another sends it round without end: such a heap is handed over as zeros,
which the library refuses by itself; ``fault`` then says why.  And a text is taken to be as
long as the pointer to it says, up to 4 GiB, before its heap is looked at: ``longest`` finds
what the pointers of an attribute say.

Layouts: HDF5 File Format Specification, sections III.E (global heap), IV.A.2.m (attribute
message: version, sizes of name, datatype and dataspace, then these and the data).
"""

from __future__ import annotations

import io
import math
from pathlib import Path
from typing import Any, Final

__all__ = ["GuardedStream"]

_SIGNATURE: Final = b"GCOL\x01\x00\x00\x00"
_HEAD: Final = 16
"""Bytes before the first object: signature, version, reserved, size of the collection."""

_OBJECT_HEAD: Final = 16
"""Bytes before an object's data: index, reference count, reserved, size."""

_VARYING: Final = 9
"""Class of a datatype of varying length, in the low half of its first byte."""

_WINDOW: Final = 64
"""Blocks after an object's header in which its continuations lie, and after an attribute."""

_LARGEST: Final = 2**28
"""Bytes of a heap: the library makes them 4 KiB, or as long as one text."""


class GuardedStream(io.RawIOBase):
    """A file opened for reading, byte for byte, except damaged global heaps."""

    def __init__(self, path: Path) -> None:
        self._file = path.open("rb", buffering=0)
        self._blocks: list[tuple[int, int]] = []
        self._latest: dict[int, int] = {}
        self.fault: str | None = None
        self.recording = True
        """Whether blocks handed over are described objects (and not bulk data)."""

    def readable(self) -> bool:
        """Return True."""
        return True

    def seekable(self) -> bool:
        """Return True."""
        return True

    def fileno(self) -> int:
        """Return the descriptor, for locks."""
        return self._file.fileno()

    def seek(self, offset: int, whence: int = io.SEEK_SET, /) -> int:
        """Go to ``offset`` as ``io.RawIOBase`` does."""
        return self._file.seek(offset, whence)

    def tell(self) -> int:
        """Return the present offset in bytes."""
        return self._file.tell()

    def readinto(self, buffer: Any, /) -> int:
        """Fill ``buffer``; with zeros beyond the end and in place of a damaged heap."""
        start = self._file.tell()
        view = memoryview(buffer).cast("B")
        at = 0
        while at < len(view):
            count = self._file.readinto(view[at:])
            if not count:
                view[at:] = bytes(len(view) - at)
                break
            at += count
        if self.recording:
            self._latest[start] = len(self._blocks)
            self._blocks.append((start, len(view)))
        if bytes(view[: len(_SIGNATURE)]) == _SIGNATURE:
            fault = self._heap_fault(start)
            if fault is not None:
                self.fault = f"the text heap at byte {start} is damaged: {fault}"
                view[:] = bytes(len(view))
        self._file.seek(start + len(view))
        return len(view)

    def close(self) -> None:
        """Close the file."""
        self._file.close()
        super().close()

    def longest(self, name: bytes, count: int, header: int, offset_bytes: int) -> int | None:
        """Return the largest length in the pointers of the attribute ``name``.

        Args:
            name: of an attribute of varying length that the library has just opened.
            count: of pointers in it.
            header: byte at which the header of its object begins.
            offset_bytes: width of an address, from the superblock.

        Returns:
            Elements, or None if no such attribute was among what the library has read.
        """
        at = self._latest.get(header, len(self._blocks))
        near = self._blocks[at : at + _WINDOW] + self._blocks[-_WINDOW:]
        for blocks in (dict.fromkeys(near), dict.fromkeys(self._blocks)):
            found = [n for block in blocks for n in self._lengths(block, name, count, 8 + offset_bytes)]
            if found:
                return max(found)
        return None

    def first_length(self, start: int) -> int:
        """Return the length in the pointer at byte ``start``."""
        self._file.seek(start)
        return int.from_bytes(self._file.read(4), "little")

    def _lengths(self, block: tuple[int, int], name: bytes, count: int, width: int) -> list[int]:
        """Return the lengths in every message in ``block`` that is an attribute ``name``."""
        self._file.seek(block[0])
        data = self._file.read(block[1])
        found: list[int] = []
        at = data.find(name + b"\0")
        while at >= 0:
            for version, head in ((1, 8), (2, 8), (3, 9)):
                begin = at - head
                if begin < 0 or data[begin] != version:
                    continue
                sizes = [int.from_bytes(data[begin + i : begin + i + 2], "little") for i in (2, 4, 6)]
                parts = [-(-size // 8) * 8 if version == 1 else size for size in sizes]
                kind, space, pointers = at + parts[0], at + parts[0] + parts[1], at + sum(parts)
                if sizes[0] != len(name) + 1 or space + 2 > len(data) or _points(data, space) != count:
                    continue
                if data[kind] & 15 == _VARYING:
                    places = range(pointers, pointers + count * width, width)
                    found += [int.from_bytes(data[i : i + 4], "little") for i in places]
            at = data.find(name + b"\0", at + 1)
        return found

    def _heap_fault(self, start: int) -> str | None:
        """Follow the objects of the heap at ``start``; return what is wrong with them."""
        self._file.seek(start)
        size = int.from_bytes(self._file.read(_HEAD)[len(_SIGNATURE) :], "little")
        if not _HEAD <= size <= _LARGEST:
            return f"its size is {size}"
        self._file.seek(start)
        heap = self._file.read(size)
        at = _HEAD
        while at + _OBJECT_HEAD <= size:
            index = int.from_bytes(heap[at : at + 2], "little")
            length = int.from_bytes(heap[at + 8 : at + 16], "little")
            # Index 0 is the free space, whose size counts its head; data is padded to 8.
            needed = length if index == 0 else _OBJECT_HEAD + -(-length // 8) * 8
            if not _OBJECT_HEAD <= needed <= size - at:
                return f"object {index} has {length} bytes"
            at += needed
        return None


def _points(data: bytes, at: int) -> int:
    """Return the number of elements that the dataspace message at ``at`` gives (section IV.A.2.b)."""
    first = at + (8 if data[at] == 1 else 4)
    return math.prod(
        int.from_bytes(data[first + 8 * i : first + 8 * i + 8], "little") for i in range(data[at + 1])
    )
