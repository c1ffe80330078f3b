"""Where are the raw files, and what must hold before a row may name one?

A file is kept under its SHA-256, ``ab/cdef…``, read-only.  It is copied and hashed in one pass
to a temporary name on the same file system, forced to disk, renamed, and the folders that
changed are forced to disk too; only then does ``put`` return.  The original is never touched.
A copy that is there already is read again and compared before it is relied on.

What a row needs is the narrow ``Store``; ``FileStore`` is the one in a directory.
"""

from __future__ import annotations

import os
import stat
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from registry.errors import DamageError, MillikeepError, RegistryError
from registry.keeping.disk import Disk
from registry.keeping.intake import Intake, Taken, hash_file
from registry.keeping.troubles import store_trouble

__all__ = ["FileStore", "Store", "Stored"]

COPY_THREADS = 8
"""Small files spend their time waiting for the disk, so several wait at once."""


@dataclass(frozen=True, slots=True)
class Stored:
    """A file that is safely kept.

    Args:
        sha256: 64 hex digits.
        size: bytes.
        path: where it is kept.
        note: what a person should know (a damaged older copy was replaced), or None.
    """

    sha256: str
    size: int
    path: Path
    note: str | None = None


class Store(Protocol):
    """What records need of a place for raw files."""

    def put(self, path: Path) -> Stored:
        """Keep one file."""

    def put_many(self, paths: Sequence[Path], threads: int = COPY_THREADS) -> list[Stored | MillikeepError]:
        """Keep many files, each for itself."""

    def put_bytes(self, data: bytes) -> Stored:
        """Keep what is in memory."""

    def open_path(self, sha256: str) -> Path:
        """A path from which the file can be read."""

    def verify(self, sha256: str) -> int:
        """Read the file again and compare."""

    def __iter__(self) -> Iterator[str]:
        """The SHA-256 of every file, sorted."""


class FileStore:
    """Raw files in a directory.

    Args:
        root: the directory; made at the first ``put``, its parent must exist.
        disk: the operating system, or a test's stand-in.
    """

    def __init__(self, root: Path, *, disk: Disk | None = None) -> None:
        self.root = root
        self._disk = disk or Disk()
        self._intake = Intake(root, self._disk, self._target)

    def close(self) -> None:
        """Let go of the folder for temporary files."""
        self._intake.close()

    def sweep(self) -> int:
        """Remove what interrupted programs left half copied; returns how many files."""
        return self._intake.sweep()

    def put(self, path: Path) -> Stored:
        """Keep a copy of a file.

        Raises:
            InputError: the file cannot be read, is no plain file, or changed meanwhile.
            RegistryError: the store cannot be written; nothing is left behind.
        """
        return self._one(lambda: self._intake.take(path))

    def put_bytes(self, data: bytes) -> Stored:
        """Keep bytes from memory.

        Raises:
            RegistryError: the store cannot be written; nothing is left behind.
        """
        return self._one(lambda: self._intake.take_bytes(data))

    def put_many(self, paths: Sequence[Path], threads: int = COPY_THREADS) -> list[Stored | MillikeepError]:
        """Keep many files, each for itself: the answer has a copy or an error for each path.

        Copies and syncs in threads, then renames, then syncs each changed folder once.
        """

        def take(path: Path) -> Taken | MillikeepError:
            try:
                return self._intake.take(path)
            except MillikeepError as error:
                return error

        with ThreadPoolExecutor(max(1, min(threads, len(paths)))) as pool:
            return self._place_all(list(pool.map(take, paths)))

    def open_path(self, sha256: str) -> Path:
        """Path of a kept file, for reading only; its content is not checked here.

        Raises:
            DamageError: it is not there.
        """
        path = self._target(sha256)
        try:
            present = stat.S_ISREG(path.stat().st_mode)
        except FileNotFoundError:
            present = False
        except OSError as error:
            raise store_trouble(error, self.root) from error
        if not present:
            raise _missing(sha256, path)
        return path

    def verify(self, sha256: str) -> int:
        """Read a kept file and compare it with its name; returns its size in bytes.

        Raises:
            DamageError: it is missing, unreadable, or its bytes have changed.
        """
        path = self.open_path(sha256)
        try:
            found, size = hash_file(self._disk, path)
        except OSError as error:
            raise _damaged(sha256, path, f"cannot be read ({error.strerror})") from error
        if found != sha256:
            raise _damaged(sha256, path, f"has changed: its {size} bytes now hash to {found[:10]}…")
        return size

    def __iter__(self) -> Iterator[str]:
        """The SHA-256 of every kept file, sorted; what has no such name is passed over."""
        for folder in self._folders():
            names = (entry.name for entry in _listed(folder) if _hex(entry.name, 62))
            yield from (folder.name + name for name in sorted(names))

    def strays(self) -> Iterator[Path]:
        """Files and folders among the kept files that no digest names."""
        for folder in self._folders():
            for entry in _listed(folder):
                if not (_hex(entry.name, 62) and entry.is_file(follow_symlinks=False)):
                    yield folder / entry.name

    # --- the steps of keeping a file ---

    def _one(self, take: Callable[[], Taken]) -> Stored:
        outcome = self._place_all([take()])[0]
        if isinstance(outcome, MillikeepError):
            raise outcome
        return outcome

    def _place_all(self, outcomes: Sequence[Taken | MillikeepError]) -> list[Stored | MillikeepError]:
        """Rename what was copied, then sync every folder that a name in the answer relies on."""
        placed = [self._placed(each) if isinstance(each, Taken) else each for each in outcomes]
        folders = {each.path.parent for each in placed if isinstance(each, Stored)}
        faults = {folder: self._synced(folder) for folder in sorted(folders)}
        whole = self._synced(self.root) if folders else None
        answer: list[Stored | MillikeepError] = []
        for each in placed:
            fault = whole or faults[each.path.parent] if isinstance(each, Stored) else None
            if fault and isinstance(each, Stored):
                self._intake.doubtful.add(each.path.parent)
            answer.append(fault or each)
        return answer

    def _placed(self, taken: Taken) -> Stored | MillikeepError:
        target = self._target(taken.sha256)
        if taken.kept:
            self._intake.discard(taken.temporary)
        else:
            try:
                self._disk.make_folder(target.parent)
                self._disk.move(taken.temporary, target)
            except OSError as error:
                self._intake.discard(taken.temporary)
                return store_trouble(error, self.root)
        return Stored(taken.sha256, taken.size, target, taken.note)

    def _synced(self, folder: Path) -> RegistryError | None:
        try:
            self._disk.sync_folder(folder)
        except OSError as error:
            return store_trouble(error, self.root)
        return None

    def _target(self, sha256: str) -> Path:
        if not _hex(sha256, 64):
            raise DamageError(
                f"{sha256[:80]!r} is no SHA-256",
                where=str(self.root),
                remedy="run `millikeep audit`: the record that names it has been changed",
            )
        return self.root / sha256[:2] / sha256[2:]

    def _folders(self) -> list[Path]:
        """The folders ``00`` to ``ff`` that exist, sorted."""
        try:
            entries = [entry for entry in _listed(self.root) if _hex(entry.name, 2) and entry.is_dir()]
        except FileNotFoundError:
            return []
        return sorted(Path(entry.path) for entry in entries)


def _listed(folder: Path) -> list[os.DirEntry[str]]:
    with os.scandir(folder) as entries:
        return list(entries)


def _hex(name: str, length: int) -> bool:
    return len(name) == length and all(letter in "0123456789abcdef" for letter in name)


def _missing(sha256: str, path: Path) -> DamageError:
    return DamageError(
        f"raw file {sha256[:10]} is missing",
        where=str(path),
        remedy="check that the file store's disk is mounted; else `millikeep admit` the original again, "
        "or copy the file from a backup",
    )


def _damaged(sha256: str, path: Path, what: str) -> DamageError:
    return DamageError(
        f"raw file {sha256[:10]} {what}",
        where=str(path),
        remedy="`millikeep admit` the original again (the damaged copy is then replaced), "
        "or copy the file from a backup",
    )
