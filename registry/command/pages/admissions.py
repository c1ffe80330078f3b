"""How the admission of files reads: what is on record now, and what failed and why."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from registry.command.pages.fits import derived_lines, derived_one
from registry.command.printing import error_document, error_lines
from registry.command.recording import Shorten, recorded_line

if TYPE_CHECKING:
    from registry.keeping.admitting import Admission

__all__ = ["admission_document", "admission_lines", "failure_lines"]


def admission_document(admission: Admission) -> dict[str, Any]:
    """The promised JSON document of ``admit``."""
    return {
        "measurements": [
            {
                "id": one.kept.hex,
                "file": str(one.file),
                "new": one.kept.new,
                "notes": list(one.notes),
                "analyses": [derived_one(run) for run in one.derived],
            }
            for one in admission.measurements
        ],
        "failed": [
            {"file": str(one.file), "why": one.why.what, **error_document(one.why)}
            for one in admission.failed
        ],
    }


def admission_lines(admission: Admission, shorten: Shorten) -> tuple[str, ...]:
    """One line a file, and the values derived from it below."""
    lines: list[str] = []
    for one in admission.measurements:
        lines.append(recorded_line(shorten, one.kept, str(one.file)))
        lines += [f"  {line}" for line in derived_lines(one.derived, shorten)]
    return tuple(lines)


def failure_lines(admission: Admission) -> tuple[str, ...]:
    """What goes to stderr: notes on what was decided in reading, and each file that failed."""
    lines = [f"{one.file}: {note}" for one in admission.measurements for note in one.notes]
    for failed in admission.failed:
        lines += [f"not admitted: {failed.file}", *(f"  {line}" for line in error_lines(failed.why))]
    return tuple(lines)
