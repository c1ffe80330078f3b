"""``millikeep device``: gated structures on a chip and their gate sheets."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import At, DeviceName, Why, instant
from registry.command.outcome import Answer
from registry.command.recording import recorded
from registry.command.session import Session
from registry.errors import InputError

app = group("Devices: gated structures, their gates, sites and limits.")

GATES_HELP = "Gates: gate,role,x_nm,y_nm,v_min,v_max,max_step,max_rate[,ramp_order]; volts at the gate."
SITES_HELP = "Dots, sensors, reservoirs: site,kind,gates[,carrier]."
PAIRS_HELP = "Limits on volts of a minus b: gate_a,gate_b,low,high."
SitesFile = Annotated[Path | None, typer.Option("--sites", metavar="SITES.CSV", help=SITES_HELP)]
PairsFile = Annotated[Path | None, typer.Option("--pairs", metavar="PAIRS.CSV", help=PAIRS_HELP)]


@command(app, "add", example="millikeep device add W3-07/A --gates gates.csv --sites sites.csv")
def add(
    session: Session,
    device: Annotated[str, typer.Argument(metavar="CHIP/NAME", help="A chip on record, and a name on it.")],
    gates: Annotated[Path, typer.Option("--gates", metavar="GATES.CSV", help=GATES_HELP)],
    sites: SitesFile = None,
    pairs: PairsFile = None,
    family: Annotated[
        str | None,
        typer.Option("--family", metavar="NAME", help="Devices of one design; they learn from each other."),
    ] = None,
    at: At = None,
) -> Answer:
    """Record a device with its gates, sites and limits."""
    from registry.keeping.describing import add_device
    from registry.reading.sheets import read_gates, read_pairs, read_sites

    sheet = read_gates(gates)
    known = [gate.gate for gate in sheet]
    with session.registry() as registry:
        kept = add_device(
            registry,
            device,
            gates=sheet,
            sites=read_sites(sites, known) if sites else (),
            pairs=read_pairs(pairs, known) if pairs else (),
            family=family,
            at=instant(at),
        )
        return recorded(registry, kept, f"device {device}, {len(sheet)} gates")


@command(
    app,
    "revise",
    example="millikeep device revise W3-07/A --gates gates.csv --why 'P2 leaks'",
)
def revise(
    session: Session,
    device: DeviceName,
    why: Why,
    gates: Annotated[Path | None, typer.Option("--gates", metavar="GATES.CSV", help=GATES_HELP)] = None,
    sites: SitesFile = None,
    pairs: PairsFile = None,
    at: At = None,
) -> Answer:
    """Record a new gate sheet of a device.

    The parts you do not give stay as they are. States recorded before keep the gate sheet
    they were recorded with.
    """
    from registry.keeping.describing import revise_device
    from registry.reading.sheets import read_gates, read_pairs, read_sites

    if gates is None and sites is None and pairs is None:
        raise InputError(
            "nothing to revise is given", where="device revise", remedy="give --gates, --sites or --pairs"
        )
    with session.registry() as registry:
        kept = revise_device(
            registry,
            device,
            gates=read_gates(gates) if gates else None,
            sites=read_sites(sites) if sites else None,
            pairs=read_pairs(pairs) if pairs else None,
            why=why,
            at=instant(at),
        )
        return recorded(registry, kept, f"gate sheet of {device}")
