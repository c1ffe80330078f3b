"""Is everything in the registry still what was recorded, down to the last byte?

Looks and never mends.  The parts are in ``audited_records``, ``audited_journal``,
``audited_taint``, ``audited_files`` and ``engines.checks``.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from sqlalchemy import text

from registry.errors import MillikeepError
from registry.keeping import head
from registry.keeping.audited_files import audit_files
from registry.keeping.audited_journal import JournalAudit
from registry.keeping.audited_records import audit_records
from registry.keeping.audited_taint import audit_taint
from registry.keeping.engines.checks import database_checks
from registry.keeping.findings import Course, Finding, Progress
from registry.keeping.handle import Registry

__all__ = ["AuditReport", "Finding", "audit"]

_COUNTS = (
    "SELECT count(*) FROM record",
    "SELECT count(*) FROM journal",
    "SELECT count(DISTINCT sha256) FROM raw_file",
)


@dataclass(frozen=True)
class AuditReport:
    """What an audit found.

    Args:
        records: records in the registry.
        files: raw files that were read again.
        journal: entries in the journal.
        root: hex root over them, as computed from the entries.
        findings: damage; an empty list is the good answer.
        remarks: what is harmless but worth knowing (files that no record names).
    """

    records: int
    files: int
    journal: int
    root: str
    findings: tuple[Finding, ...]
    remarks: tuple[Finding, ...] = ()

    @property
    def sound(self) -> bool:
        """No damage was found."""
        return not self.findings

    def to_json(self) -> dict[str, object]:
        """For ``--json``."""
        return {
            "records": self.records,
            "files": self.files,
            "journal": self.journal,
            "root": self.root,
            "findings": [each.to_json() for each in self.findings],
            "remarks": [each.to_json() for each in self.remarks],
        }


def audit(registry: Registry, *, progress: Progress | None = None) -> AuditReport:
    """Read everything again and compare it with its digests.

    Cost: every row is hashed once (some 50 microseconds each) and every file read once.

    Args:
        registry: open, for reading is enough.
        progress: called with (done, total).
    """
    course = Course(progress)
    # Before the snapshot: a witness read later could be ahead of it.
    witnesses = _witnesses(registry, course)
    journal = JournalAudit(course, witnesses)
    records = files = 0
    try:
        with registry.reading() as connection:
            with course.part(connection, "the database"):
                course.total = sum(int(connection.execute(text(sql)).scalar_one()) for sql in _COUNTS)
            for where, check in database_checks(connection):
                with course.part(connection, where):
                    for what, place in check(connection):
                        course.find(what, where=place)
            journal.run(connection)
            records = audit_records(connection, course)
            audit_taint(connection, course)
        files = audit_files(registry, course)
    except MillikeepError as error:
        course.find(error.what, where=error.where, remedy=error.remedy)
    edge = journal.frontier
    return AuditReport(records, files, edge.size, edge.root().hex(), course.findings, course.remarks)


def _witnesses(registry: Registry, course: Course) -> Mapping[str, Sequence[head.Head]]:
    """Both notes of each head file; a file with no whole note at all is a finding."""
    paths: list[Path] = [registry.files.root / head.HEAD_NAME]
    if registry.head_path is not None:
        paths.insert(0, registry.head_path)
    witnesses: dict[str, Sequence[head.Head]] = {}
    for path in paths:
        notes = [each for each in head.slots(path) if each is not None]
        if not notes and path.is_file() and path.stat().st_size:
            course.find(
                "the witness of what was last acknowledged is damaged",
                where=str(path),
                remedy="nothing is lost by itself, but missing entries would not be noticed: if the rest "
                "of this audit is clean, remove the file; the next act writes it anew",
            )
        witnesses[str(path)] = notes
    return witnesses
