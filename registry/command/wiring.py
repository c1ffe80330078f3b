"""``millikeep wiring``: which line serves which gate in a cooldown."""

from __future__ import annotations

from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import At, CooldownName, SheetPath, Why, instant
from registry.command.outcome import Answer
from registry.command.recording import recorded
from registry.command.session import Session
from registry.errors import InputError

app = group("Wiring: which line serves which gate, through which divider.")


@command(
    app,
    "revise",
    example="millikeep wiring revise CD12 wiring.csv --why 'new dividers' \\\n"
    "    --since 2026-03-11T16:00:00Z\n"
    "millikeep wiring revise CD12 wiring.csv --correct --why 'L3 was mistyped'",
)
def revise(
    session: Session,
    cooldown: CooldownName,
    table: SheetPath,
    why: Why,
    since: Annotated[
        str | None, typer.Option("--since", metavar="TIME", help="From when the lines were like this.")
    ] = None,
    correct: Annotated[
        bool, typer.Option("--correct", help="The wiring on record was wrong from its beginning.")
    ] = False,
    at: At = None,
) -> Answer:
    """Record changed wiring, or correct it.

    With --since TIME cables were changed then; with --correct the table on record was
    wrong. Either way the other level of every state's volts is derived anew.
    """
    if (since is not None) == correct:
        raise InputError(
            "exactly one of --since and --correct is needed",
            where="wiring revise",
            remedy="give --since TIME if cables were changed, --correct if the table was wrong",
        )
    from registry.keeping.cooling import revise_wiring
    from registry.reading.sheets import read_wiring

    lines = read_wiring(table)
    with session.registry() as registry:
        kept = revise_wiring(
            registry,
            cooldown,
            lines,
            since=instant(since, "--since"),
            correct=correct,
            why=why,
            at=instant(at),
        )
        return recorded(registry, kept, f"wiring of {cooldown}, {len(lines)} lines")
