"""How an audit reads: what was looked at, then what was found and what to do."""

from __future__ import annotations

from typing import TYPE_CHECKING

from registry.command.printing import wrap

if TYPE_CHECKING:
    from registry.keeping.auditing import AuditReport

__all__ = ["audit_lines"]


def audit_lines(report: AuditReport) -> tuple[str, ...]:
    """The page of ``audit``."""
    lines = [
        f"records  {report.records}",
        f"files    {report.files}",
        f"journal  {report.journal} entries",
        f"root     {report.root}",
    ]
    for title, found in (("found", report.findings), ("worth knowing", report.remarks)):
        if found:
            lines += ["", f"{title}: {len(found)}"]
        for one in found:
            lines += [*wrap(f"{one.where}: {one.what}"), *wrap(f"-> {one.remedy}", "    ")]
    if not report.findings:
        lines += ["", "everything is as it was recorded"]
    return tuple(lines)
