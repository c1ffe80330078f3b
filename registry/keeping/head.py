"""Which journal size and root were last acknowledged, by a witness outside the database?

A lost write-ahead log, a cut-off file or an old copy of the database looks sound from inside.
The small file ``head`` beside it keeps the size and root of the journal in two slots of plain
text, written in turn after each commit, each with a check sum; so one slot is whole at any
moment.  It is not forced to disk: it may lag behind the journal, and never leads it.
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Callable
from dataclasses import dataclass
from hashlib import sha256
from pathlib import Path

from registry.errors import DamageError

__all__ = ["HEAD_NAME", "Head", "check", "read", "slots", "write"]

HEAD_NAME = "head"
"""Name of the file beside the database, and of its copy in the file store."""

_SIZE_DIGITS = 20
_CHECK_DIGITS = 16
_SLOT_BYTES = _SIZE_DIGITS + 1 + 64 + 1 + _CHECK_DIGITS + 1
_SLOTS = 2


@dataclass(frozen=True, slots=True)
class Head:
    """A size of the journal and its root (32 bytes)."""

    size: int
    root: bytes


def write(path: Path, head: Head) -> bool:
    """Note a committed size and root; tells whether the note was written.

    Call it after the commit.  A newer note is kept (two processes may come in either order),
    and a disk that refuses leaves the older note: what was committed stays committed.
    """
    with contextlib.suppress(OSError):
        present = slots(path)
        newest = _newest(present)
        if newest is not None and newest.size >= head.size:
            return False
        place = 0 if newest is None or present[0] != newest else 1
        handle = os.open(path, os.O_RDWR | os.O_CREAT | getattr(os, "O_BINARY", 0), 0o644)
        try:
            os.lseek(handle, place * _SLOT_BYTES, os.SEEK_SET)
            return os.write(handle, _encoded(head)) == _SLOT_BYTES
        finally:
            os.close(handle)
    return False


def read(path: Path) -> Head | None:
    """The newest whole note, or None where there is none."""
    return _newest(slots(path))


def slots(path: Path) -> tuple[Head | None, Head | None]:
    """Both notes, None for one that is damaged or was never written."""
    try:
        data = path.read_bytes()
    except OSError:
        data = b""
    first, second = (_decoded(data[n * _SLOT_BYTES : (n + 1) * _SLOT_BYTES]) for n in range(_SLOTS))
    return first, second


def check(head: Head | None, size: int, root_at: Callable[[int], bytes], *, where: str) -> None:
    """Compare the witness with a journal of ``size`` entries whose root at any size is known.

    Raises:
        DamageError: acknowledged entries are missing, or the journal is another one.
    """
    if head is None:
        return
    if head.size > size:
        raise DamageError(
            f"{head.size - size} acknowledged entries are missing (the head file has seen "
            f"{head.size}, the journal holds {size})",
            where=where,
            remedy="copy the registry's folder aside, with its -wal and -shm files if there are any, "
            "then restore the newest backup; if this is an older backup on purpose, remove the file "
            f"`{HEAD_NAME}` beside it and those entries are given up",
        )
    if root_at(head.size) != head.root:
        raise DamageError(
            f"the first {head.size} entries of the journal are not those that were acknowledged",
            where=where,
            remedy="the journal was changed, or the database or the file "
            f"`{HEAD_NAME}` belongs to another registry: run `millikeep audit`, then restore a backup",
        )


def _newest(present: tuple[Head | None, Head | None]) -> Head | None:
    whole = [each for each in present if each is not None]
    return max(whole, key=lambda each: each.size, default=None)


def _encoded(head: Head) -> bytes:
    body = f"{head.size:0{_SIZE_DIGITS}d} {head.root.hex()}"
    return f"{body} {_check_sum(body)}\n".encode("ascii")


def _decoded(slot: bytes) -> Head | None:
    """The note in a slot; anything that would not be written just so is damaged."""
    try:
        size, root, _ = slot.decode("ascii").split(" ")
        head = Head(int(size), bytes.fromhex(root))
    except ValueError:
        return None
    return head if _encoded(head) == slot else None


def _check_sum(body: str) -> str:
    return sha256(body.encode("ascii")).hexdigest()[:_CHECK_DIGITS]
