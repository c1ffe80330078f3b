"""``millikeep cooldown``: stays in a cryostat and what happened in them."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import At, CooldownName, Note, instant, pairs, words
from registry.command.outcome import Answer
from registry.command.recording import recorded
from registry.command.session import Session
from registry.errors import InputError

app = group("Cooldowns: stays in a cryostat, and what happened in them.")


@command(
    app,
    "begin",
    example="millikeep cooldown begin CD12 --cryostat Fridge2 --chip W3-07 \\\n"
    "    --wiring wiring.csv --at 2026-03-02T08:00:00Z",
)
def begin(
    session: Session,
    label: Annotated[str, typer.Argument(metavar="LABEL", help="A name for this cooldown.")],
    cryostat: Annotated[str, typer.Option("--cryostat", metavar="NAME", help="Which cryostat.")],
    chip: Annotated[
        list[str],
        typer.Option("--chip", metavar="CHIP", help="A chip that is cooled; repeat it for several."),
    ],
    wiring: Annotated[
        Path | None,
        typer.Option(
            "--wiring",
            metavar="WIRING.CSV",
            help="Lines: line,gates,source,divider,offset,out_min,out_max,resolution"
            "[,kind,divider_u,filter_hz,attenuation_db,gain].",
        ),
    ] = None,
    board: Annotated[str | None, typer.Option("--board", metavar="TEXT", help="Sample board.")] = None,
    at: At = None,
) -> Answer:
    """Begin a cooldown.

    An open cooldown of the same chip is closed by it, and the command says so. Volts at
    the source = (volts at the gate - offset) x divider.
    """
    from registry.keeping.cooling import begin_cooldown
    from registry.reading.sheets import read_wiring

    lines = read_wiring(wiring) if wiring else None
    with session.registry() as registry:
        kept = begin_cooldown(
            registry, label, cryostat=cryostat, chips=words(chip), wiring=lines, board=board, at=instant(at)
        )
        return recorded(registry, kept, f"cooldown {label} in {cryostat}")


@command(
    app,
    "mark",
    example="millikeep cooldown mark CD12 power-loss --at 2026-03-09T02:10:00Z\n"
    "millikeep cooldown mark CD12 charge-jump --site D1 --detail shift=0.004",
)
def mark(
    session: Session,
    label: CooldownName,
    event: Annotated[
        str, typer.Argument(metavar="EVENT", help="What happened; `millikeep events` lists the kinds.")
    ],
    at: At = None,
    until: Annotated[str | None, typer.Option("--until", metavar="TIME", help="When it ended.")] = None,
    kelvin: Annotated[
        float | None, typer.Option("--kelvin", metavar="T", help="Highest temperature reached, in K.")
    ] = None,
    device: Annotated[
        str | None, typer.Option("--device", metavar="DEVICE", help="Only this device; all if not given.")
    ] = None,
    gate: Annotated[str | None, typer.Option("--gate", metavar="GATE", help="The gate concerned.")] = None,
    site: Annotated[str | None, typer.Option("--site", metavar="SITE", help="The site concerned.")] = None,
    volts: Annotated[
        Path | None, typer.Option("--volts", metavar="VOLTS.CSV", help="Volts at the gates: gate,volts.")
    ] = None,
    detail: Annotated[
        list[str] | None,
        typer.Option(
            "--detail", metavar="NAME=VALUE", help="A further fact, numbers in SI. May be repeated."
        ),
    ] = None,
    note: Note = None,
) -> Answer:
    """Record an event: warm-up, power loss, charge jump and so on."""
    from registry.keeping.cooling import mark_event

    with session.registry() as registry:
        kept = mark_event(
            registry,
            label,
            event,
            at=instant(at),
            until=instant(until, "--until"),
            kelvin=kelvin,
            device=device,
            gate=gate,
            site=site,
            volts=_gate_volts(volts),
            details={name: _number_or_text(text) for name, text in pairs(detail, "--detail").items()},
            note=note,
        )
        return recorded(registry, kept, f"{event} in {label}")


def _gate_volts(path: Path | None) -> dict[str, float] | None:
    if path is None:
        return None
    from registry.reading.setpoints import read_volts

    volts, header = read_volts(path)
    if header != "gate":
        raise InputError(
            "holds volts of lines", where=str(path), remedy="give the volts at the gates: gate,volts"
        )
    return volts


def _number_or_text(text: str) -> float | str:
    try:
        return float(text)
    except ValueError:
        return text
