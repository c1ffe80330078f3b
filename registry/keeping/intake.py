"""How does a file become a whole, synced copy under a temporary name?

The first half of keeping a file: one pass that reads, hashes and writes, with every check that
the source is a plain file which nobody changes meanwhile.  Giving the copy its name is for
``keeping.filestore``.
"""

from __future__ import annotations

import contextlib
import os
import stat
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from hashlib import sha256
from pathlib import Path

from registry.errors import InputError
from registry.keeping.disk import Disk, lock
from registry.keeping.incoming import Incoming
from registry.keeping.troubles import source_trouble, store_faults

__all__ = ["READ_BYTES", "Intake", "Taken", "hash_file"]

READ_BYTES = 1 << 20
"""Bytes a read: large enough to keep a disk busy, small enough for the processor's cache."""


@dataclass(frozen=True, slots=True)
class Taken:
    """A file copied but not placed; ``kept`` if a sound copy was there already."""

    sha256: str
    size: int
    temporary: Path
    kept: bool
    note: str | None


def hash_file(disk: Disk, path: Path) -> tuple[str, int]:
    """SHA-256 (hex) and size of a file; raises ``OSError``."""
    handle = disk.open_read(path)
    try:
        digest, size = sha256(), 0
        buffer = _buffer(disk.stat(handle).st_size)
        while count := disk.read_into(handle, buffer):
            digest.update(buffer[:count])
            size += count
        return digest.hexdigest(), size
    finally:
        _close_read(disk, handle)


class Intake:
    """Takes files and bytes in, each to a temporary file.

    Args:
        root: the file store.
        disk: the operating system, or a test's stand-in.
        target: SHA-256 -> path of the kept file.

    Attributes:
        doubtful: folders whose last sync failed.  A copy found there is written anew, because
            a later sync may report success for what the earlier one has lost.
    """

    def __init__(self, root: Path, disk: Disk, target: Callable[[str], Path]) -> None:
        self.doubtful: set[Path] = set()
        self._root = root
        self._disk = disk
        self._target = target
        self._incoming = Incoming(root, disk)

    def close(self) -> None:
        """Let go of the folder for temporary files."""
        self._incoming.close()

    def sweep(self) -> int:
        """Remove what interrupted programs left; returns how many files."""
        return self._incoming.sweep()

    def take(self, path: Path) -> Taken:
        """Copy a file to a temporary name.

        Raises:
            InputError: the file cannot be read, is no plain file, or changed meanwhile.
            RegistryError: the store cannot be written; nothing is left behind.
        """
        try:
            source = self._disk.open_read(path)
        except OSError as error:
            raise source_trouble(error, path) from error
        try:
            before = self._checked_source(source, path)
            with self._temporary() as (temporary, handle):
                digest, size = self._copy(source, handle, path, before.st_size)
                self._check_unchanged(source, path, before, size)
                return self._finished(temporary, handle, digest, size)
        finally:
            _close_read(self._disk, source)

    def take_bytes(self, data: bytes) -> Taken:
        """Write bytes to a temporary name.

        Raises:
            RegistryError: the store cannot be written; nothing is left behind.
        """
        with self._temporary() as (temporary, handle):
            with store_faults(self._root):
                self._disk.write(handle, memoryview(data))
            return self._finished(temporary, handle, sha256(data).hexdigest(), len(data))

    @contextlib.contextmanager
    def _temporary(self) -> Iterator[tuple[Path, int]]:
        """A temporary file that is gone again if the block fails."""
        with store_faults(self._root):
            temporary, handle = self._incoming.new()
        try:
            try:
                yield temporary, handle
            except BaseException:
                with contextlib.suppress(OSError):
                    self._disk.close(handle)
                raise
            with store_faults(self._root):
                self._disk.close(handle)
        except BaseException:
            self.discard(temporary)
            raise

    def _checked_source(self, source: int, path: Path) -> os.stat_result:
        try:
            found = self._disk.stat(source)
        except OSError as error:
            raise source_trouble(error, path) from error
        if not stat.S_ISREG(found.st_mode):
            raise InputError("it is no plain file", where=str(path), remedy="name a file that holds data")
        if lock(source, shared=True) is False:
            raise _still_written(path, "another program has it locked for writing")
        return found

    def _copy(self, source: int, handle: int, path: Path, expected: int) -> tuple[str, int]:
        """Read, hash and write in one pass; returns digest and size."""
        digest, size = sha256(), 0
        buffer = _buffer(expected)
        while True:
            try:
                count = self._disk.read_into(source, buffer)
            except OSError as error:
                raise source_trouble(error, path) from error
            if not count:
                return digest.hexdigest(), size
            digest.update(buffer[:count])
            with store_faults(self._root):
                self._disk.write(handle, buffer[:count])
            size += count

    def _check_unchanged(self, source: int, path: Path, before: os.stat_result, size: int) -> None:
        try:
            after, named = self._disk.stat(source), self._disk.stat_path(path)
        except OSError as error:
            raise source_trouble(error, path) from error
        if size != before.st_size or not _signature(before) == _signature(after) == _signature(named):
            raise _still_written(path, "it changed while it was being copied")

    def _finished(self, temporary: Path, handle: int, digest: str, size: int) -> Taken:
        """Sync the temporary file, unless a sound copy makes it needless."""
        target = self._target(digest)
        kept, note = self._older_copy(target, digest, size)
        if not kept:
            with store_faults(self._root):
                self._disk.make_read_only(temporary)
                self._disk.sync(handle)
        return Taken(digest, size, temporary, kept, note)

    def _older_copy(self, target: Path, digest: str, size: int) -> tuple[bool, str | None]:
        """Whether a sound copy is there already; a note if a damaged one is."""
        if target.parent in self.doubtful:
            return False, None
        try:
            found, found_size = hash_file(self._disk, target)
        except FileNotFoundError:
            return False, None
        except OSError as error:
            return False, f"an older copy could not be read ({error.strerror}) and was replaced"
        if (found, found_size) == (digest, size):
            return True, None
        return False, f"an older copy was damaged ({found_size} of {size} bytes) and was replaced"

    def discard(self, temporary: Path) -> None:
        """Remove a temporary file that is not needed."""
        with contextlib.suppress(OSError):  # `close` or a later sweep removes what stays
            self._disk.remove(temporary)


def _buffer(size: int) -> memoryview:
    """Room for one read of a file; a small file shall not pay for clearing a large buffer."""
    return memoryview(bytearray(min(READ_BYTES, size + 1)))


def _close_read(disk: Disk, handle: int) -> None:
    with contextlib.suppress(OSError):  # what was read has been compared already
        disk.close(handle)


def _signature(found: os.stat_result) -> tuple[int, int, int, int]:
    return found.st_size, found.st_mtime_ns, found.st_ino, found.st_dev


def _still_written(path: Path, what: str) -> InputError:
    return InputError(
        what,
        where=str(path),
        remedy="wait until the program that writes it has closed it, then repeat; nothing was recorded",
    )
