"""``millikeep gate``: findings on single gates."""

from __future__ import annotations

from enum import StrEnum
from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import At, DeviceName, Note, instant
from registry.command.outcome import Answer
from registry.command.recording import recorded
from registry.command.session import Session

app = group("Gates: dated findings on their health.")


class Health(StrEnum):
    """What a gate was found to be."""

    OK = "ok"
    LEAKY = "leaky"
    SHORTED = "shorted"
    FLOATING = "floating"
    GROUNDED = "grounded"
    NO_RESPONSE = "no-response"


@command(app, "mark", example="millikeep gate mark W3-07/A P2 leaky --above 1.4 --note '1 nA at 1.5 V'")
def mark(
    session: Session,
    device: DeviceName,
    gate: Annotated[str, typer.Argument(metavar="GATE", help="Name of the gate in the gate sheet.")],
    health: Annotated[Health, typer.Argument(metavar="HEALTH", help=" | ".join(Health))],
    to_gate: Annotated[
        str | None, typer.Option("--to", metavar="GATE", help="The other gate, for shorted.")
    ] = None,
    above: Annotated[
        float | None, typer.Option("--above", metavar="V", help="Volts at the gate from which it leaks.")
    ] = None,
    at: At = None,
    note: Note = None,
) -> Answer:
    """Record what a gate was found to be.

    A grounded, shorted or unresponsive gate breaks the states that use it, until a later
    finding says ok.
    """
    from registry.keeping.describing import mark_gate

    with session.registry() as registry:
        kept = mark_gate(
            registry, device, gate, health.value, to_gate=to_gate, above_v=above, at=instant(at), note=note
        )
        return recorded(registry, kept, f"gate {gate} of {device}: {health.value}")
