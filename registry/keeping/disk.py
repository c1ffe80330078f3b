"""Which operations of the operating system does the file store use?

One narrow class, so that a test can make any single one of them fail, and the few differences
between systems stand in one place.
"""

from __future__ import annotations

import contextlib
import os
import sys
from pathlib import Path

__all__ = ["Disk", "lock"]

if sys.platform != "win32":
    import fcntl


class Disk:
    """The real disk.  Every method raises ``OSError`` as the system reports it."""

    def open_read(self, path: Path) -> int:
        """Descriptor for reading; does not wait for a pipe's other end."""
        return os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0))

    def open_new(self, path: Path) -> int:
        """Descriptor of a file that must not exist yet, for writing."""
        return os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0), 0o600)

    def stat(self, handle: int) -> os.stat_result:
        """What the system knows of an open file."""
        return os.fstat(handle)

    def stat_path(self, path: Path) -> os.stat_result:
        """What the system knows of the file that has this name now."""
        return path.stat()

    def read_into(self, handle: int, buffer: memoryview) -> int:
        """Fill the buffer as far as one read goes; 0 at the end."""
        return os.readv(handle, [buffer]) if hasattr(os, "readv") else self._read(handle, buffer)

    def write(self, handle: int, data: memoryview) -> None:
        """Write all of ``data``."""
        while data:
            data = data[os.write(handle, data) :]

    def make_read_only(self, path: Path) -> None:
        """Nobody writes to this file any more."""
        path.chmod(0o444)

    def sync(self, handle: int) -> None:
        """Wait until the file's content is on the medium."""
        _sync(handle)

    def close(self, handle: int) -> None:
        """Give the descriptor back."""
        os.close(handle)

    def make_folder(self, path: Path) -> bool:
        """Make one folder; False where it was there already."""
        with contextlib.suppress(FileExistsError):
            path.mkdir(mode=0o755)
            return True
        return False

    def move(self, source: Path, target: Path) -> None:
        """Rename at one stroke, over whatever has the new name."""
        source.replace(target)

    def remove(self, path: Path) -> None:
        """Remove a file."""
        path.unlink()

    def sync_folder(self, path: Path) -> None:
        """Wait until the names in a folder are on the medium (Windows keeps no such promise)."""
        if sys.platform == "win32":
            return
        handle = os.open(path, os.O_RDONLY)
        try:
            _sync(handle)
        finally:
            os.close(handle)

    @staticmethod
    def _read(handle: int, buffer: memoryview) -> int:
        data = os.read(handle, len(buffer))
        buffer[: len(data)] = data
        return len(data)


def _sync(handle: int) -> None:
    if sys.platform == "darwin":
        fcntl.fcntl(handle, fcntl.F_FULLFSYNC)  # fsync there stops at the drive's own cache
    else:
        os.fsync(handle)


def lock(handle: int, *, shared: bool) -> bool | None:
    """Advisory lock without waiting: True taken, False held by another, None not to be had here."""
    if sys.platform == "win32":
        return None
    kind = fcntl.LOCK_SH if shared else fcntl.LOCK_EX
    try:
        fcntl.flock(handle, kind | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError:
        return None
    return True
