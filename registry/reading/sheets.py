"""What do the tables say in which people describe a device and its wiring?

    gates.csv   gate,role,x_nm,y_nm,v_min,v_max,max_step,max_rate[,ramp_order]
    sites.csv   site,kind,gates[,carrier]
    pairs.csv   gate_a,gate_b,low,high                       volts of a minus b
    wiring.csv  line,gates,source,divider,offset,out_min,out_max,resolution
                [,kind,divider_u,filter_hz,attenuation_db,gain]

Names inside one cell are separated by spaces.  Further columns are kept as notes.  All
faults of a file are named together, each with its line and column.
"""

from __future__ import annotations

from collections.abc import Collection
from pathlib import Path

from registry.reading.rows import Cells, read_table
from registry.records.descriptions import CARRIERS, Gate, Line, PairLimit, Site

__all__ = ["read_gates", "read_pairs", "read_sites", "read_wiring"]

_GATE = ("gate", "role", "x_nm", "y_nm", "v_min", "v_max", "max_step", "max_rate")
_SITE = ("site", "kind", "gates")
_PAIR = ("gate_a", "gate_b", "low", "high")
_LINE = ("line", "gates", "source", "divider", "offset", "out_min", "out_max", "resolution")
_LINE_MORE = ("kind", "divider_u", "filter_hz", "attenuation_db", "gain")


def read_gates(path: Path) -> tuple[Gate, ...]:
    """The gates of a device from gates.csv; lengths in nm, volts at the gate, V/s.

    Raises:
        InputError: all faults of the file, each with line and column.
    """
    table = read_table(path, _GATE, ("ramp_order",))
    seen: dict[str, int] = {}

    def gate(row: Cells) -> Gate:
        name = row.name("gate")
        table.unique(seen, row, "gate", name)
        return Gate(
            gate=name,
            role=row.name("role"),
            x_nm=row.number("x_nm", "nm"),
            y_nm=row.number("y_nm", "nm"),
            v_min=row.number("v_min", "V"),
            v_max=row.number("v_max", "V"),
            max_step=row.number("max_step", "V", above=0.0),
            max_rate=row.number("max_rate", "V/s", above=0.0),
            ramp_order=row.optional_whole("ramp_order"),
            notes=table.notes(row),
        )

    return table.keep(gate)


def read_sites(path: Path, known_gates: Collection[str] | None = None) -> tuple[Site, ...]:
    """The dots, sensors and reservoirs of a device from sites.csv.

    Args:
        path: the file.
        known_gates: names of the device's gates if they are at hand; a gate that is not
            among them is a fault.

    Raises:
        InputError: all faults of the file, each with line and column.
    """
    table = read_table(path, _SITE, ("carrier",))
    seen: dict[str, int] = {}

    def site(row: Cells) -> Site:
        name = row.name("site")
        table.unique(seen, row, "site", name)
        gates = row.names("gates")
        for gate in gates:
            _known(row, "gates", gate, known_gates)
        return Site(
            site=name,
            kind=row.name("kind"),
            gates=gates,
            carrier=row.choice("carrier", CARRIERS, default="electron"),
            notes=table.notes(row),
        )

    return table.keep(site)


def read_pairs(path: Path, known_gates: Collection[str] | None = None) -> tuple[PairLimit, ...]:
    """Limits on the volts of one gate minus those of another, from pairs.csv, in V.

    Args:
        path: the file.
        known_gates: as in ``read_sites``.

    Raises:
        InputError: all faults of the file, each with line and column.
    """
    table = read_table(path, _PAIR)
    seen: dict[str, int] = {}

    def pair(row: Cells) -> PairLimit:
        one, other = row.name("gate_a"), row.name("gate_b")
        for column, gate in (("gate_a", one), ("gate_b", other)):
            _known(row, column, gate, known_gates)
        # The pair the other way round is the same pair.
        table.unique(seen, row, "gate_b", " and ".join(sorted((one, other))))
        return PairLimit(
            gate_a=one,
            gate_b=other,
            low=row.number("low", "V"),
            high=row.number("high", "V"),
            notes=table.notes(row),
        )

    return table.keep(pair)


def read_wiring(path: Path) -> tuple[Line, ...]:
    """The lines of a cooldown from wiring.csv; volts at the source except ``offset``.

    A line may serve several gates, and a gate may have a dc and a fast line.

    Raises:
        InputError: all faults of the file, each with line and column.
    """
    table = read_table(path, _LINE, _LINE_MORE)
    seen: dict[str, int] = {}

    def line(row: Cells) -> Line:
        name = row.name("line")
        table.unique(seen, row, "line", name)
        return Line(
            line=name,
            gates=row.names("gates", foreign=True),
            source=row.text("source") or "",
            divider=row.number("divider", above=0.0),
            offset=row.number("offset", "V"),
            out_min=row.number("out_min", "V"),
            out_max=row.number("out_max", "V"),
            resolution=row.number("resolution", "V", above=0.0),
            kind=row.choice("kind", ("dc", "fast"), default="dc"),
            divider_u=row.optional_number("divider_u"),
            filter_hz=row.optional_number("filter_hz", "Hz", above=0.0),
            attenuation_db=row.optional_number("attenuation_db", "dB"),
            gain=row.yes("gain"),
            notes=table.notes(row),
        )

    return table.keep(line)


def _known(row: Cells, column: str, gate: str, known_gates: Collection[str] | None) -> None:
    if known_gates is not None and gate and gate not in known_gates:
        row.fault(column, f"{gate!r} is no gate of this device; its gates are {' '.join(known_gates)}")
