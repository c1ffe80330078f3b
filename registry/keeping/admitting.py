"""How measured files enter the registry: checked, copied, and tied to a tuning state.

Each file stands alone: one that cannot be taken does not keep the others out.  The copy
is in the file store, durable, before the record that names it is committed.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from sqlalchemy import Connection, text

from registry.errors import InputError, MillikeepError
from registry.keeping.assigning import Assignment, assign
from registry.keeping.deriving import Derived, derive_samples
from registry.keeping.filestore import Stored
from registry.keeping.handle import Registry
from registry.keeping.naming import NOT_WITHDRAWN, Found, amended, find_tuning
from registry.keeping.writing import Kept, Writer, refuse_future
from registry.physics.catalogue import FACTS
from registry.reading.entry import read_file
from registry.reading.finished import FileState, check_finished
from registry.reading.layout import Layout, load_layout
from registry.samples import Samples

__all__ = ["Admission", "Admitted", "Failed", "admit"]

# Files of one transaction: others get their turn to write in between.
BATCH = 500

Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class Admitted:
    """A file that is a measurement now.

    Attributes:
        file: as given; kept: the measurement (``new`` False if the file was known).
        derived: analyses that were asked for.
        notes: what had to be decided, and why something was not derived.
    """

    file: Path
    kept: Kept
    derived: tuple[Derived, ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class Failed:
    """A file that was not taken, and why."""

    file: Path
    why: MillikeepError


@dataclass(frozen=True)
class Admission:
    """What became of all files."""

    measurements: tuple[Admitted, ...]
    failed: tuple[Failed, ...]


@dataclass(frozen=True)
class _Read:
    """A file that was read and found sound."""

    file: Path
    samples: Samples
    state: FileState


@dataclass(frozen=True)
class _Wishes:
    """What the caller said about all files."""

    tuning: str | None
    kind: str | None
    at: int | None
    layout: Stored | None


def admit(
    registry: Registry,
    files: Sequence[str | os.PathLike[str]],
    *,
    tuning: str | None = None,
    kind: str | None = None,
    layout: str | os.PathLike[str] | None = None,
    derive: bool = False,
    at: int | None = None,
    progress: Progress | None = None,
) -> Admission:
    """Admit measured files.

    Args:
        registry: open for writing.
        files: paths; the originals are never touched.
        tuning: state they were taken in; None means the volts that the file tells (a
            state is recorded from them), else the latest state of the one device whose
            cooldown was open then.
        kind: a method's name or a free word; layout: describes files that do not
            describe themselves.
        derive: also run the method that the layout or the kind names.
        at: when they were taken; None means the time in the file, else the file's date,
            which is marked as a guess.
        progress: called with (files done, files in all).

    Returns:
        All that were taken (a repeated file with its old record) and all that failed.

    Raises:
        InputError: the layout or ``tuning`` is wrong: nothing was admitted.
    """
    paths = [Path(file) for file in files]
    parsed = load_layout(Path(layout)) if layout is not None else None
    if tuning is not None:
        with registry.reading() as connection:
            tuning = find_tuning(connection, tuning).hex
    stored_layout = registry.files.put(Path(layout)) if layout is not None else None
    wishes = _Wishes(tuning, kind, at, stored_layout)
    admitted: list[Admitted] = []
    failed: list[Failed] = []
    for start in range(0, len(paths), BATCH):
        batch = paths[start : start + BATCH]
        sound = list(_read_all(batch, parsed, failed))
        for item, outcome in _keep_all(registry, sound, wishes, failed):
            admitted.append(_derived(registry, item, outcome) if derive else outcome)
        if progress is not None:
            progress(min(start + BATCH, len(paths)), len(paths))
    order = {path: place for place, path in reversed(list(enumerate(paths)))}
    return Admission(
        tuple(sorted(admitted, key=lambda one: order[one.file])),
        tuple(sorted(failed, key=lambda one: order[one.file])),
    )


def _read_all(paths: Sequence[Path], layout: Layout | None, failed: list[Failed]) -> Iterator[_Read]:
    for path in paths:
        try:
            state = check_finished(path)
            yield _Read(path, read_file(path, layout), state)
        except MillikeepError as error:
            failed.append(Failed(path, error))


def _keep_all(
    registry: Registry, sound: Sequence[_Read], wishes: _Wishes, failed: list[Failed]
) -> list[tuple[_Read, Admitted]]:
    """Copy the files, then record them in one transaction; each fails for itself."""
    copies = registry.files.put_many([item.file for item in sound])
    kept: list[tuple[_Read, Admitted]] = []
    with registry.writing() as writer:
        layout_no = None
        if wishes.layout is not None:
            layout_no = writer.keep("raw_file", sha256=wishes.layout.sha256, size=wishes.layout.size).no
        for item, copy in zip(sound, copies, strict=True):
            try:
                if isinstance(copy, MillikeepError):
                    raise copy
                _refuse_changed(item, copy)
                with writer.part():
                    outcome = _keep_one(writer, item, copy, wishes, layout_no)
                kept.append((item, outcome))
            except MillikeepError as error:
                failed.append(Failed(item.file, error))
    return kept


def _refuse_changed(item: _Read, copy: Stored) -> None:
    if check_finished(item.file) != item.state or copy.size != item.state.size:
        raise InputError(
            "the file changed while it was being admitted",
            where=str(item.file),
            remedy="wait until its program has finished writing, then admit it again",
        )


def _keep_one(writer: Writer, item: _Read, copy: Stored, wishes: _Wishes, layout_no: int | None) -> Admitted:
    samples = item.samples
    known = _known(writer.connection, copy.sha256, wishes.tuning)
    if known is not None:
        return Admitted(item.file, known, notes=("this file was admitted before",))
    at = wishes.at if wishes.at is not None else samples.taken_at_us
    if at is not None:
        refuse_future(at, writer.entered, str(item.file))
    guess = min(item.state.mtime_ns // 1000, writer.entered)
    raw = writer.keep("raw_file", sha256=copy.sha256, size=copy.size)
    chosen = assign(writer, item.file.name, samples, wishes.tuning, at=at, guess=guess, raw_file=raw.no)
    moment, notes = _moment(chosen, at, guess)
    kept = writer.keep(
        "measurement",
        links={"tuning": chosen.tuning.no, "raw_file": raw.no, "layout": layout_no},
        kind=wishes.kind or samples.kind,
        shape=samples.shape,
        axes=[
            {"name": axis.name, "unit": axis.unit, "level": axis.level, "n": int(axis.values.size)}
            for axis in samples.axes
        ],
        signals=[{"name": signal.name, "unit": signal.unit} for signal in samples.signals],
        at=at,
        moment=moment,
        file_name=item.file.name,
    )
    return Admitted(item.file, kept, notes=(*samples.notes, *chosen.notes, *notes))


def _moment(chosen: Assignment, at: int | None, guess: int) -> tuple[int, tuple[str, ...]]:
    """When it was taken, for sorting; a guess is never before the state it was taken in."""
    if at is not None:
        return at, ()
    return max(guess, chosen.moment), ("its time is a guess from the file's date",)


def _known(connection: Connection, sha256: str, tuning: str | None) -> Kept | None:
    """The measurement of this very file, unless it is to belong to another state now."""
    rows = connection.execute(
        text(
            f"""SELECT m.no, r.digest, t.digest AS tuning FROM measurement m JOIN record r ON r.no = m.no
            JOIN raw_file f ON f.no = m.raw_file_no JOIN record t ON t.no = m.tuning_no
            WHERE f.sha256 = :sha256 AND {NOT_WITHDRAWN.format(no="m.no")} ORDER BY m.no"""
        ),
        {"sha256": sha256},
    ).all()
    for row in rows:
        if tuning is None or bytes(row.tuning).hex() == tuning:
            return Kept(row.no, bytes(row.digest), new=False)
    return None


def _derived(registry: Registry, item: _Read, outcome: Admitted) -> Admitted:
    """Run the method that the file's layout or kind names; a failure becomes a note."""
    asked = item.samples.derive or {}
    kind = asked.get("method") or _kind(registry, outcome.kept.no)
    if not isinstance(kind, str) or kind not in FACTS:
        note = (
            f"nothing was derived: {kind!r} is no method" if kind else "nothing was derived: no kind is given"
        )
        return replace(outcome, notes=(*outcome.notes, note))
    measurement = Found(outcome.kept.no, "measurement", outcome.kept.digest)
    try:
        derived = derive_samples(registry, kind, measurement, item.samples)
    except MillikeepError as error:
        note = f"nothing was derived: {error.what} ({error.remedy})"
        return replace(outcome, notes=(*outcome.notes, note))
    return replace(outcome, derived=(derived,))


def _kind(registry: Registry, no: int) -> str | None:
    with registry.reading() as connection:
        kind = connection.execute(
            text("SELECT kind FROM measurement WHERE no = :no"), {"no": no}
        ).scalar_one()
        return amended(connection, no, "kind") or (None if kind is None else str(kind))
