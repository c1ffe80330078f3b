"""How the simulated laboratory is described to a registry: gates, sites, lines, moments.

The simulation has classes of its own (they know the truth); here they become what a
person would type into tables.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta

from registry.records.descriptions import Gate, Line, PairLimit, Site
from seed_demo.calendar import Stay
from seed_demo.devices import Device
from seed_demo.year import Judgement, PlannedState, Year, wiring_at

__all__ = ["gates_of", "instant", "lines_of", "pairs_of", "sites_of", "states_text"]

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


def instant(at: datetime) -> int:
    """Microseconds since 1970 UTC."""
    return (at - _EPOCH) // timedelta(microseconds=1)


def gates_of(device: Device) -> list[Gate]:
    """The gate sheet's electrodes, without what only the simulation knows."""
    return [
        Gate(
            gate=gate.name,
            role=gate.role,
            x_nm=gate.x_nm,
            y_nm=gate.y_nm,
            v_min=gate.v_min,
            v_max=gate.v_max,
            max_step=gate.max_step,
            max_rate=gate.max_rate,
            ramp_order=gate.ramp_order,
        )
        for gate in device.gates
    ]


def sites_of(device: Device) -> list[Site]:
    """Dots and sensors with their carrier."""
    return [Site(site.name, site.kind, site.gates, device.carrier) for site in device.sites]


def pairs_of(device: Device) -> list[PairLimit]:
    """Limits between two gates."""
    return [PairLimit(pair.gate_a, pair.gate_b, pair.low, pair.high) for pair in device.pairs]


def lines_of(year: Year, stay: Stay, at: datetime) -> list[Line]:
    """The whole wiring of a cooldown, as it was at a time."""
    return [
        Line(
            line=line.line,
            gates=(line.gate,),
            source=line.source,
            divider=line.divider,
            offset=line.offset,
            out_min=line.out_min,
            out_max=line.out_max,
            resolution=line.resolution,
            kind=line.kind,
            divider_u=line.divider_u,
            filter_hz=line.filter_hz,
        )
        for device in year.devices
        if device.chip == stay.chip
        for line in wiring_at(device, at)
    ]


def states_text(states: Sequence[PlannedState], judgements: Sequence[Judgement]) -> str:
    """Table of older states and their standings, in the columns that a table of states has."""
    judged = {judgement.state: judgement for judgement in judgements}
    gates = list(states[0].volts)
    out = io.StringIO()
    table = csv.writer(out, lineterminator="\n")
    table.writerow(("at", "cooldown", "purpose", "sites", "standing", "why", *gates))
    for state in states:
        verdict = judged.get(state.key)
        words = (verdict.standing, verdict.why) if verdict else ("", "")
        volts = (repr(state.volts[gate]) for gate in gates)
        moment = f"{state.at:%Y-%m-%dT%H:%M:%SZ}"
        table.writerow((moment, state.cooldown, state.purpose, " ".join(state.sites), *words, *volts))
    return out.getvalue()
