"""How the demo comes to stand in a directory: measured files beside a registry of them.

It is built beside its place and moved there when it is whole, so that an interrupted
building leaves nothing that looks like a demo.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from registry.errors import LookupFailed, MillikeepError, RegistryError
from registry.keeping.naming import find_device
from registry.keeping.opening import create, open_registry
from seed_demo.catalogue import devices
from seed_demo.entering import enter_year
from seed_demo.folder import write_folder
from seed_demo.year import Year, build_year

__all__ = ["DEFAULT_PLACE", "PERSON", "DemoReport", "build_demo"]

DEFAULT_PLACE = "millikeep-demo"
"""Directory made where none is named, in the directory of the person who asks."""
PERSON = "Ilse"
"""The invented person who keeps the demo's registry."""

_REGISTRY, _MEASURED = "registry", "measured"

Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class DemoReport:
    """Where the demo stands.

    Attributes:
        where: the directory; registry, measured: the two directories in it.
        new: False if it stood there already.
    """

    where: Path
    registry: Path
    measured: Path
    new: bool


def build_demo(
    where: str | os.PathLike[str] | None = None,
    *,
    progress: Progress | None = None,
    year: Year | None = None,
) -> DemoReport:
    """Make the invented laboratory's files and a registry with its year.

    Args:
        where: a new or empty directory, or one in which a demo stands already, which is
            left as it is; None means ``millikeep-demo`` in the present directory.
        progress: called with (steps done, steps in all).
        year: the plan; None means the whole year.

    Raises:
        RegistryError: the directory holds something else or cannot be written.
        InputError: the computer's clock stands before the end of the invented year.
    """
    place = Path(where if where is not None else DEFAULT_PLACE).expanduser()
    report = DemoReport(place, place / _REGISTRY, place / _MEASURED, new=True)
    try:
        if place.exists() and any(place.iterdir()):
            _refuse_other(report)
            return DemoReport(place, report.registry, report.measured, new=False)
        place.parent.mkdir(parents=True, exist_ok=True)
        unfinished = Path(tempfile.mkdtemp(prefix=f".{place.name}-", dir=place.parent))
    except OSError as error:
        raise _unwritable(place, error) from error
    try:
        # One level deeper, because the temporary directory itself is closed to others.
        whole = unfinished / place.name
        _fill(whole, build_year() if year is None else year, progress)
        whole.replace(place)
    except OSError as error:
        raise _unwritable(place, error) from error
    finally:
        shutil.rmtree(unfinished, ignore_errors=True)
    return report


def _fill(folder: Path, year: Year, progress: Progress | None) -> None:
    """Write the files, then enter them: two steps a file."""
    count = len(year.files)

    def entered(done: int, of: int) -> None:
        if progress is not None:
            progress(of + done, 2 * of)

    def written(done: int, of: int) -> None:
        if progress is not None:
            progress(done, 2 * count)

    write_folder(year, folder / _MEASURED, progress=written)
    with create(folder / _REGISTRY, person=PERSON) as reg:
        enter_year(reg, year, folder / _MEASURED, progress=entered)


def _refuse_other(report: DemoReport) -> None:
    """Refuse a directory that holds anything but a demo.

    Raises:
        RegistryError: it does.
    """
    try:
        if not report.measured.is_dir():
            raise LookupFailed("no measured files", where=str(report.measured), remedy="make them")
        with open_registry(report.registry, read_only=True) as reg, reg.reading() as connection:
            for device in devices():
                find_device(connection, device.path)
    except MillikeepError as error:
        raise RegistryError(
            f"the directory is not empty, and what is in it is no demo ({error.what})",
            where=str(report.where),
            remedy="name a new directory: 'millikeep demo WHERE'; nothing was changed",
        ) from error


def _unwritable(place: Path, error: OSError) -> RegistryError:
    return RegistryError(
        f"the demo cannot be made there: {error.strerror or error}",
        where=str(place),
        remedy="name a directory that you may write to: 'millikeep demo WHERE'",
    )
