"""What does an error of the operating system mean to the person at the keyboard?

Translates ``OSError`` into the errors of ``registry.errors``, the cause chained by the caller.
"""

from __future__ import annotations

import errno
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from registry.errors import InputError, RegistryError

__all__ = ["source_trouble", "store_faults", "store_trouble"]

_AGAIN = "what was recorded before is safe, and nothing of this act was kept"

_STORE: dict[int, tuple[str, str]] = {
    errno.ENOSPC: ("the disk is full", f"free some space there, then repeat; {_AGAIN}"),
    errno.EROFS: (
        "the disk is mounted read-only",
        f"mount it writable (after a disk fault, look at the system's log first), then repeat; {_AGAIN}",
    ),
    errno.EACCES: ("no permission to write", f"ask its owner for write permission, then repeat; {_AGAIN}"),
    errno.EIO: (
        "the disk reports a read or write fault",
        f"look at the system's log and check the disk and its cable, then repeat; {_AGAIN}",
    ),
    errno.ENOENT: ("the folder is not there", f"check that its disk is mounted, then repeat; {_AGAIN}"),
    errno.EMFILE: (
        "too many files are open",
        f"close other programs or raise the limit, then repeat; {_AGAIN}",
    ),
}
_STORE[errno.EPERM] = _STORE[errno.EACCES]
if hasattr(errno, "EDQUOT"):  # not on Windows
    _STORE[errno.EDQUOT] = (
        "the disk quota is used up",
        f"free some space or ask for a larger quota, then repeat; {_AGAIN}",
    )

_SOURCE: dict[int, tuple[str, str]] = {
    errno.ENOENT: ("there is no such file", "check the name and the folder"),
    errno.EACCES: ("no permission to read it", "ask its owner for read permission, or copy it first"),
    errno.EISDIR: ("it is a folder", "name the files in it"),
    errno.ELOOP: ("its links lead in a circle", "name the file itself"),
    errno.EIO: (
        "the disk reports a read fault",
        "look at the system's log, and try another copy of the file",
    ),
}
_SOURCE[errno.EPERM] = _SOURCE[errno.EACCES]
_SOURCE[errno.ENOTDIR] = _SOURCE[errno.ENOENT]


def store_trouble(error: OSError, root: Path) -> RegistryError:
    """The file store (or another folder of the registry) refused."""
    other = (error.strerror or str(error), f"check the disk, then repeat; {_AGAIN}")
    what, remedy = _STORE.get(error.errno or 0, other)
    where = f"{root} ({error.filename})" if error.filename else str(root)
    return RegistryError(what, where=where, remedy=remedy)


def source_trouble(error: OSError, path: Path) -> InputError:
    """A file that was to be taken in refused."""
    other = (f"it cannot be read: {error.strerror or error}", "check the file, then repeat")
    what, remedy = _SOURCE.get(error.errno or 0, other)
    return InputError(what, where=str(path), remedy=remedy)


@contextmanager
def store_faults(root: Path) -> Iterator[None]:
    """Within this block an ``OSError`` is the store's fault.

    Raises:
        RegistryError: in its place.
    """
    try:
        yield
    except OSError as error:
        raise store_trouble(error, root) from error
