"""``millikeep demo``: an invented laboratory to look around in."""

from __future__ import annotations

import os
from typing import Annotated

import typer

from registry.cautions import CAUTIONS
from registry.command.declaring import command
from registry.command.outcome import Answer
from registry.command.printing import wrap
from registry.command.session import Session, progress

__all__ = ["add_to"]


def demo(
    session: Session,
    where: Annotated[
        str | None,
        typer.Argument(metavar="[WHERE]", help="A new directory, or a demo; ./millikeep-demo if not given."),
    ] = None,
) -> Answer:
    """Make a registry with a year of an invented laboratory.

    Devices and files are simulated; nothing in them is real. What the registry then
    answers is told, with commands to type next. Asked again, it tells the same again.
    """
    # Threads cost small fits more than they bring; it counts only before numpy is loaded.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    from registry.keeping.opening import open_registry
    from seed_demo.story import build_demo, commands, story_lines

    with progress("a year") as moved:
        report = build_demo(where, progress=moved)
    with open_registry(report.registry, person=session.person, read_only=True) as registry:
        told = story_lines(registry)
        document = {
            "registry": str(report.registry),
            "measured": str(report.measured),
            "new": report.new,
            "try": commands(registry),
            "story": told,
            "cautions": list(CAUTIONS),
        }
        place = f"{report.where} holds the registry and, in measured, the files it was made from"
        return Answer(document, (*wrap(place, ""), *told))


def add_to(app: typer.Typer) -> None:
    """Add the command to the application."""
    command(app, "demo", example="millikeep demo try-me")(demo)
