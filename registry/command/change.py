"""``millikeep amend``, ``withdraw`` and ``attach``: additions to what is on record.

Nothing recorded is ever changed or removed; these add a record that says so.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from registry.command.declaring import command
from registry.command.options import At, Why, instant, pairs
from registry.command.outcome import Answer
from registry.command.recording import named, recorded
from registry.command.session import Session

__all__ = ["RecordName", "add_to"]

RecordName = Annotated[
    str, typer.Argument(metavar="RECORD", help="The id of any record, or its first 6 or more characters.")
]


def amend(
    session: Session,
    record: RecordName,
    change: Annotated[str, typer.Argument(metavar="FIELD=VALUE", help="A field and its new value.")],
    why: Why,
    at: At = None,
) -> Answer:
    """Give a field another value; the old one stays on record.

    Two amendments that did not know of each other are both shown until one names both.
    """
    from registry.keeping.changing import amend as amend_record

    ((field, value),) = pairs([change], "FIELD=VALUE").items()
    with session.registry() as registry:
        kept = amend_record(registry, record, field, value, why=why, at=instant(at))
        return recorded(registry, kept, f"{field} of {named(registry, record)} amended")


def withdraw(session: Session, record: RecordName, why: Why, at: At = None) -> Answer:
    """Take a record back, and with it all that hangs on it.

    Nothing is removed: it is left out of every answer, and the answers say so.

    A withdrawal made by mistake can itself be withdrawn.
    """
    from registry.keeping.changing import withdraw as withdraw_record

    with session.registry() as registry:
        kept = withdraw_record(registry, record, why=why, at=instant(at))
        return recorded(registry, kept, f"{named(registry, record)} withdrawn")


def attach(
    session: Session,
    record: RecordName,
    file: Annotated[Path, typer.Argument(metavar="FILE", help="A photograph, a page of notes, a log.")],
) -> Answer:
    """Keep a file of any kind with a record."""
    from registry.keeping.changing import attach as attach_file

    with session.registry() as registry:
        kept = attach_file(registry, record, file)
        return recorded(registry, kept, f"{file.name} attached to {named(registry, record)}")


def add_to(app: typer.Typer) -> None:
    """Add the three commands to the application."""
    command(app, "amend", example="millikeep amend 6f3a90c14e note='bonded again' --why 'was missing'")(amend)
    command(app, "withdraw", example="millikeep withdraw 6f3a90c14e --why 'cable was unplugged'")(withdraw)
    command(app, "attach", example="millikeep attach 6f3a90c14e microscope.jpg")(attach)
