"""``millikeep create``, ``migrate``, ``audit``, ``stamp`` and ``backup``: the registry itself."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from registry.command.declaring import command
from registry.command.outcome import Answer, ExitCode
from registry.command.session import Session, progress

__all__ = ["add_beginning", "add_care"]


def create(
    session: Session,
    where: Annotated[
        str | None,
        typer.Argument(
            metavar="[WHERE]", help="A directory or postgresql:// URL; else what --registry names."
        ),
    ] = None,
    files: Annotated[
        Path | None,
        typer.Option(
            "--files", metavar="DIR", help="Where measured files are kept; inside the registry's directory."
        ),
    ] = None,
) -> Answer:
    """Make a new, empty registry.

    Without a place the user's own data directory is taken; that one is also made on first
    use without this command.
    """
    from registry.keeping.opening import create as create_registry

    with create_registry(where or session.where, files=files, person=session.person) as registry:
        return Answer({"registry": registry.where}, (f"registry made at {registry.where}",))


def migrate(session: Session) -> Answer:
    """Bring a registry of an older version up to date.

    A backup is made first. Digests, ids and the journal stay as they are.
    """
    from registry.keeping.backups import migrate as migrate_registry

    report = migrate_registry(session.where)
    document = {
        "from_version": report.from_version,
        "to_version": report.to_version,
        "backup": None if report.backup is None else str(report.backup),
    }
    if report.from_version == report.to_version:
        return Answer(document, (f"already at version {report.to_version}",))
    lines = [f"from version {report.from_version} to {report.to_version}"]
    if report.backup is not None:
        lines.append(f"the registry as it was: {report.backup}")
    return Answer(document, tuple(lines))


def audit(session: Session) -> Answer:
    """Read every record and file again and check the digests.

    The exit code is 1 if anything was found.
    """
    from registry.command.pages.audits import audit_lines
    from registry.keeping.auditing import audit as audit_registry

    with session.registry_to_ask() as registry, progress("audit") as moved:
        report = audit_registry(registry, progress=moved)
    code = ExitCode.BAD_NEWS if report.findings else ExitCode.DONE
    return Answer(report.to_json(), audit_lines(report), code)


def stamp(session: Session) -> Answer:
    """Print one line for the paper notebook that seals the registry.

    Whoever holds the line can show later that nothing before it was changed or removed.
    """
    from registry.keeping.stamping import stamp as stamp_registry

    with session.registry() as registry:
        made = stamp_registry(registry)
    return Answer(made.to_json(), (made.line(),))


def backup(
    session: Session,
    out: Annotated[Path, typer.Argument(metavar="OUT", help="A directory that does not exist yet.")],
) -> Answer:
    """Copy the registry while others go on working in it.

    Copying a registry's directory by other means while it is in use damages the copy.
    """
    from registry.keeping.backups import backup as back_up

    with session.registry_to_ask() as registry, progress("backup") as moved:
        made = back_up(registry, out, progress=moved)
    return Answer({"backup": str(made)}, (f"backup made at {made}",))


def add_beginning(app: typer.Typer) -> None:
    """Add what comes before everything else."""
    command(
        app, "create", example="millikeep create ~/lab-registry\nmillikeep --registry ~/lab-registry create"
    )(create)


def add_care(app: typer.Typer) -> None:
    """Add what keeps a registry sound."""
    command(app, "audit", example="millikeep audit")(audit)
    command(app, "stamp", example="millikeep stamp")(stamp)
    command(app, "backup", example="millikeep backup /mnt/archive/registry-2026-03-02")(backup)
    command(app, "migrate", example="millikeep migrate")(migrate)
