"""Where do half-copied files live, and when may somebody else remove them?

Each running program has a folder of its own, ``incoming/<random>``, on which it holds a shared
lock as long as it lives.  Whoever can take the exclusive lock knows that its owner is gone,
and sweeps it.  Where there are no such locks (some network file systems), age decides.
"""

from __future__ import annotations

import contextlib
import os
import secrets
import sys
import threading
import time
from pathlib import Path

from registry.keeping.disk import Disk, lock

__all__ = ["Incoming"]

ABANDONED_SECONDS = 86_400.0
"""Without locks: no copy of one file takes a day."""


class Incoming:
    """Temporary files under ``root/incoming``; only ``new`` may raise ``OSError``.

    Args:
        root: the file store; it and its ``incoming`` are made when first needed.
        disk: the operating system, or a test's stand-in.
    """

    def __init__(self, root: Path, disk: Disk) -> None:
        self._root = root
        self._all = root / "incoming"
        self._disk = disk
        self._own: tuple[Path, int | None, int] | None = None  # folder, lock's descriptor, process
        self._guard = threading.Lock()

    def new(self) -> tuple[Path, int]:
        """Path and descriptor of a new empty file."""
        path = self._folder() / secrets.token_hex(8)
        return path, self._disk.open_new(path)

    def sweep(self) -> int:
        """Remove the files of programs that are gone; returns how many files."""
        own = self._own[0] if self._own else None
        try:
            folders = [path for path in self._all.iterdir() if path != own]
        except OSError:
            return 0
        return sum(_sweep_folder(folder) for folder in folders)

    def close(self) -> None:
        """Remove this program's folder, with whatever a fault left in it."""
        with self._guard:
            own, self._own = self._own, None
        if own is None:
            return
        folder, handle, process = own
        if process == os.getpid():  # after a fork the folder stays the parent's
            _empty(folder)
        if handle is not None:
            os.close(handle)

    def _folder(self) -> Path:
        with self._guard:
            if self._own is None or self._own[2] != os.getpid():
                self._disk.make_folder(self._root)
                with contextlib.suppress(PermissionError):  # a parent we may not read is not ours
                    self._disk.sync_folder(self._root.parent)
                self._disk.make_folder(self._all)
                self.sweep()
                self._own = self._claimed()
            return self._own[0]

    def _claimed(self) -> tuple[Path, int | None, int]:
        """A new folder with our lock on it; another name where a sweeper was quicker."""
        while True:
            folder = self._all / secrets.token_hex(8)
            self._disk.make_folder(folder)
            if sys.platform == "win32":
                return folder, None, os.getpid()
            try:
                handle = os.open(folder, os.O_RDONLY)
            except FileNotFoundError:
                continue
            if lock(handle, shared=True) is not False and folder.exists():
                return folder, handle, os.getpid()
            os.close(handle)


def _sweep_folder(folder: Path) -> int:
    try:
        handle = os.open(folder, os.O_RDONLY)
    except OSError:
        return 0
    try:
        free = lock(handle, shared=False)
        if free is None:
            free = time.time() - os.fstat(handle).st_mtime > ABANDONED_SECONDS
        return _empty(folder) if free else 0
    finally:
        os.close(handle)


def _empty(folder: Path) -> int:
    """Remove a folder of temporary files; what cannot be removed stays for the next sweep."""
    count = 0
    with contextlib.suppress(OSError):
        for path in folder.iterdir():
            path.unlink()
            count += 1
        folder.rmdir()
    return count
