"""``millikeep chip``: chips, the dies that carry devices."""

from __future__ import annotations

from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import Note
from registry.command.outcome import Answer
from registry.command.recording import recorded
from registry.command.session import Session

app = group("Chips: the dies that carry devices.")


@command(app, "add", example="millikeep chip add W3-07 --wafer W3 --die 07 --material 'Si/SiGe'")
def add(
    session: Session,
    label: Annotated[str, typer.Argument(metavar="LABEL", help="The chip's name in your laboratory.")],
    wafer: Annotated[
        str | None, typer.Option("--wafer", metavar="TEXT", help="Wafer it was cut from.")
    ] = None,
    lot: Annotated[str | None, typer.Option("--lot", metavar="TEXT", help="Lot of the wafer.")] = None,
    die: Annotated[str | None, typer.Option("--die", metavar="TEXT", help="Die on the wafer.")] = None,
    material: Annotated[str | None, typer.Option("--material", metavar="TEXT", help="Layer system.")] = None,
    note: Note = None,
) -> Answer:
    """Record a chip.

    A chip is known by wafer, lot, die and its first label; all of them can be amended
    later without losing what hangs on the chip.
    """
    from registry.keeping.describing import add_chip

    with session.registry() as registry:
        kept = add_chip(registry, label, wafer=wafer, lot=lot, die=die, material=material, note=note)
        return recorded(registry, kept, f"chip {label}")
