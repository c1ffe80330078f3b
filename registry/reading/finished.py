"""Is a file completely written, and is it still the one that was looked at?

A half-written HDF5 file can look whole, so that three signs are taken: a lock that a
writer holds, the mark in newer superblocks that the file is open for writing, and whether
size, time and inode stay what they were.  The caller compares the ``FileState`` from
before copying with the one after.
"""

from __future__ import annotations

import os
import sys
from dataclasses import dataclass
from io import IOBase
from pathlib import Path
from typing import BinaryIO, Final

from registry.errors import InputError
from registry.reading.faults import as_input_error

__all__ = ["HDF5_SIGNATURE", "FileState", "check_finished", "hdf5_offset", "try_lock"]

HDF5_SIGNATURE: Final = b"\x89HDF\r\n\x1a\n"
"""HDF5 File Format Specification, section II.A."""

_FIRST_OFFSET: Final = 512
_FLAGGED_VERSIONS: Final = (2, 3)
"""Superblock versions with the consistency flags in byte 11."""


@dataclass(frozen=True)
class FileState:
    """What changes when a file is written to: bytes, nanoseconds, inode and device."""

    size: int
    mtime_ns: int
    inode: int
    device: int


def hdf5_offset(stream: BinaryIO, size: int) -> int | None:
    """Return where the superblock begins (0, 512, 1024, … doubling), None if nowhere."""
    offset = 0
    while offset + len(HDF5_SIGNATURE) <= size:
        stream.seek(offset)
        if stream.read(len(HDF5_SIGNATURE)) == HDF5_SIGNATURE:
            return offset
        offset = offset * 2 or _FIRST_OFFSET
    return None


def check_finished(path: Path) -> FileState:
    """Return the state of ``path``, after checking that nobody is writing it.

    Raises:
        InputError: it is no readable file, is locked by a writer, or is marked as open.
    """
    where = str(path)
    with as_input_error(where):
        if not path.is_file():
            raise InputError("this is no file", where=where, remedy="check the path")
        # Non-blocking, so that a pipe put in the file's place cannot hold us up.
        descriptor = os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0))
        with os.fdopen(descriptor, "rb") as stream:
            try_lock(stream, where)
            found = os.fstat(stream.fileno())
            offset = hdf5_offset(stream, found.st_size)
            if offset is not None:
                stream.seek(offset + len(HDF5_SIGNATURE))
                head = stream.read(4)
                if len(head) == 4 and head[0] in _FLAGGED_VERSIONS and head[3] & 0b101:
                    raise _being_written(where, "the file is marked as open for writing")
    return FileState(found.st_size, found.st_mtime_ns, found.st_ino, found.st_dev)


def try_lock(stream: IOBase | BinaryIO, where: str) -> None:
    """Take a shared lock for a moment; file systems without locks are passed over.

    Raises:
        InputError: a writer holds the file locked.
    """
    if sys.platform == "win32":
        return
    import fcntl  # only there on POSIX systems

    try:
        fcntl.flock(stream.fileno(), fcntl.LOCK_SH | fcntl.LOCK_NB)
        fcntl.flock(stream.fileno(), fcntl.LOCK_UN)
    except BlockingIOError as error:
        raise _being_written(where, "another program holds the file locked for writing") from error
    except OSError:
        return


def _being_written(where: str, why: str) -> InputError:
    return InputError(
        why,
        where=where,
        remedy="wait until the measurement has ended; if its program crashed, clear the mark with h5clear -s",
    )
