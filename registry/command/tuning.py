"""``millikeep tuning``: gate voltage sets with their context."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import At, DeviceName, Purpose, SheetPath, Sites, counts, instant, words
from registry.command.outcome import Answer
from registry.command.recording import named, recorded, shortener
from registry.command.session import Session, progress
from registry.errors import InputError

app = group("Tuning states: gate voltage sets with their context.")

TuningName = Annotated[
    str,
    typer.Argument(
        metavar="TUNING", help="An id, latest, previous, or CHIP/NAME:latest for one device of several."
    ),
]


class Level(StrEnum):
    """Where volts were read."""

    GATE = "gate"
    SOURCE = "source"


@command(
    app,
    "record",
    example="millikeep tuning record W3-07/A --volts volts.csv --purpose readout \\\n"
    "    --sites 'D1 S1' --occupation D1=1",
)
def record(
    session: Session,
    device: DeviceName,
    volts: Annotated[
        Path,
        typer.Option(
            "--volts", metavar="VOLTS.CSV", help="gate,volts at the gates; or line,volts at the source."
        ),
    ],
    cooldown: Annotated[
        str | None,
        typer.Option("--cooldown", metavar="COOLDOWN", help="Which cooldown; the open one if not given."),
    ] = None,
    level: Annotated[
        Level | None,
        typer.Option("--level", help="Where the volts were read; gate if the table names gates."),
    ] = None,
    parent: Annotated[
        str | None, typer.Option("--from", metavar="TUNING", help="The state this one was tuned from.")
    ] = None,
    purpose: Purpose = None,
    sites: Sites = None,
    occupation: Annotated[
        str | None, typer.Option("--occupation", metavar="SITE=N,…", help="Charges: D1=1,D2=0.")
    ] = None,
    settings: Annotated[
        Path | None,
        typer.Option(
            "--settings", metavar="SETTINGS.CSV", help="Bias, field, temperature …: name,value,unit."
        ),
    ] = None,
    at: At = None,
) -> Answer:
    """Record the volts a device has now, or had at --at.

    Volts are kept as they were read; the other level is derived through the wiring.
    """
    from registry.keeping.tunings import record_tuning
    from registry.reading.setpoints import read_settings, read_volts

    by_name, header = read_volts(volts)
    if header == "line" and level is Level.GATE:
        raise InputError(
            "a table of lines holds volts at the source",
            where=str(volts),
            remedy="leave --level out, or write gate,volts",
        )
    read_at = Level.SOURCE if header == "line" else (level or Level.GATE)
    with session.registry() as registry:
        kept = record_tuning(
            registry,
            device,
            by_name,
            cooldown=cooldown,
            level=read_at.value,
            parent=parent,
            purpose=purpose,
            sites=words(sites),
            occupation=counts(occupation, "--occupation"),
            settings=read_settings(settings) if settings else {},
            at=instant(at),
        )
        what = f"state of {device}, {len(by_name)} volts at the {read_at.value}"
        return recorded(registry, kept, what)


@command(app, "revisit", example="millikeep tuning revisit latest --at 2026-03-05T09:00:00Z")
def revisit(session: Session, tuning: TuningName, at: At = None) -> Answer:
    """Record that the device is at a known state's volts again.

    That is a state of its own; the earlier state becomes its parent.
    """
    from registry.keeping.tunings import revisit_tuning

    with session.registry() as registry:
        which = named(registry, tuning)
        kept = revisit_tuning(registry, tuning, at=instant(at))
        return recorded(registry, kept, f"{which} revisited")


@command(
    app,
    "load",
    example="millikeep tuning load W3-07/A old-states.csv --dry-run\n"
    "millikeep tuning load W3-07/A old-states.csv",
)
def load(
    session: Session,
    device: DeviceName,
    table: SheetPath,
    dry_run: Annotated[bool, typer.Option("--dry-run", help="Check everything, record nothing.")] = False,
) -> Answer:
    """Record many states from one table.

    Columns: at,cooldown[,purpose,sites,standing,why] and one for each gate. All faults of
    the table are named together, and with a fault nothing is recorded.
    """
    from registry.command.pages.loads import load_lines
    from registry.keeping.loading import load_tunings

    with session.registry() as registry, progress("states") as moved:
        loaded = load_tunings(registry, device, table, dry_run=dry_run, progress=moved)
    document = {
        "rows": loaded.rows,
        "new": loaded.new,
        "already": loaded.already,
        "standings": loaded.standings,
        "dry_run": dry_run,
    }
    return Answer(document, load_lines(loaded, "states", dry_run=dry_run), messages=loaded.notes)


@command(app, "list", example="millikeep tuning list W3-07/A")
def list_states(session: Session, device: DeviceName) -> Answer:
    """List a device's states, newest first, with standing and purpose."""
    from registry.command.pages.tunings import MOST_SHOWN, list_lines
    from registry.questions.tunings import list_tunings

    with session.registry_to_ask() as registry:
        rows = list_tunings(registry, device)
        return Answer(
            {"states": [row.to_json() for row in rows]},
            list_lines(rows, shortener(registry, (row.id for row in rows[:MOST_SHOWN]))),
        )


@command(app, "show", example="millikeep tuning show latest")
def show(session: Session, tuning: TuningName) -> Answer:
    """Show one state: volts at gate and source, settings, standing."""
    from registry.command.pages.tunings import page_lines
    from registry.questions.tunings import show_tuning

    with session.registry_to_ask() as registry:
        page = show_tuning(registry, tuning)
        return Answer(page.to_json(), page_lines(page, shortener(registry)))
