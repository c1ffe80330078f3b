"""Is every raw file still there, byte for byte?"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from typing import Any

from sqlalchemy import text

from registry.errors import DamageError, RegistryError
from registry.keeping.filestore import FileStore
from registry.keeping.findings import Course
from registry.keeping.handle import Registry

__all__ = ["audit_files"]

WORKERS = 2
"""Hashing leaves Python's lock free, so two threads use two cores; more would fight for the disk."""

PAGE = 1000
"""Rows a read, so that hours of hashing hold no read transaction open."""

_Fault = str | DamageError | RegistryError | None
_Work = tuple[str, Future[_Fault]]

_PAGE = text(
    "SELECT sha256, min(size), max(size) FROM raw_file WHERE sha256 > :after "
    "GROUP BY sha256 ORDER BY sha256 LIMIT :page"
)


def audit_files(registry: Registry, course: Course) -> int:
    """Hash every file that a record names; returns how many there are."""
    count = 0
    with ThreadPoolExecutor(WORKERS) as pool:
        under_way: deque[_Work] = deque()
        for sha256, size in _named(registry, course):
            under_way.append((sha256, pool.submit(_fault, registry.files, sha256, size)))
            count += 1
            if len(under_way) > 4 * WORKERS:
                _take(under_way, course)
        while under_way:
            _take(under_way, course)
    _remark_superfluous(registry, course)
    return count


def _take(under_way: deque[_Work], course: Course) -> None:
    sha256, future = under_way.popleft()
    fault = future.result()
    if isinstance(fault, str):
        course.find(fault, where=f"table raw_file, sha256 {sha256}")
    elif fault is not None:
        course.find(fault.what, where=fault.where, remedy=fault.remedy)
    course.step()


def _fault(files: FileStore, sha256: str, size: int) -> _Fault:
    """What is wrong with one file; runs in a thread."""
    try:
        found = files.verify(sha256)
    except (DamageError, RegistryError) as error:
        return error
    return None if found == size else f"raw file {sha256[:10]} is recorded with {size} bytes and has {found}"


def _named(registry: Registry, course: Course) -> Iterator[tuple[str, int]]:
    """(sha256, size) of every raw file on record, sorted, in short reads."""
    after = ""
    while True:
        rows: Sequence[Any] = ()
        with registry.reading() as connection, course.part(connection, "table raw_file"):
            rows = connection.execute(_PAGE, {"after": after, "page": PAGE}).all()
        for sha256, least, most in rows:
            if not isinstance(sha256, str):
                return  # a damaged page; the check of records names the row
            yield sha256, least
            if most != least:
                yield sha256, most
        if not rows:
            return
        after = rows[-1][0]


def _remark_superfluous(registry: Registry, course: Course) -> None:
    """Files no record names: left by an act that was interrupted, or still under way."""
    named = (sha256 for sha256, _ in _named(registry, course))
    current = next(named, None)
    for sha256 in registry.files:
        while current is not None and current < sha256:
            current = next(named, None)
        if current != sha256:
            course.remark(
                f"file {sha256[:10]} belongs to no record",
                where=str(registry.files.root / sha256[:2] / sha256[2:]),
                remedy="nothing is lost: admitting was interrupted or is under way; admitting the same "
                "file again uses it",
            )
    for path in registry.files.strays():
        course.remark(
            "this is no file of the store",
            where=str(path),
            remedy="millikeep did not put it there; move it elsewhere if nobody needs it here",
        )
