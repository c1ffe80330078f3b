"""Which line serves which gate, and what volts are on its other side.

volts at the source = (volts at the gate - offset) x divider, by the wiring that is in
force in the cooldown at the moment asked for.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.currency import wiring_in_force
from registry.keeping.naming import Found, device_name, find_device
from registry.keeping.sheets_in_force import gates_of
from registry.records.descriptions import Line

__all__ = ["DeviceWiring", "devices_in", "lines_content", "wiring_of"]


@dataclass(frozen=True)
class DeviceWiring:
    """The wiring of one device at one moment.

    Attributes:
        no: key of the wiring record, None where none is on record.
        by_gate: the dc line of each gate; by_line: gates of this device on each line.
    """

    no: int | None
    by_gate: Mapping[str, Line]
    by_line: Mapping[str, tuple[str, ...]]

    def at_gate(self, gate: str, source_volts: float) -> float | None:
        """Volts at the gate, None where no line to it is on record."""
        line = self.by_gate.get(gate)
        return None if line is None else line.at_gate(source_volts)

    def at_source(self, gate: str, gate_volts: float) -> float | None:
        """Volts at the source before quantisation, None where no line is on record."""
        line = self.by_gate.get(gate)
        return None if line is None else line.at_source(gate_volts)


def wiring_of(connection: Connection, device_no: int, cooldown_no: int, at: int) -> DeviceWiring:
    """The wiring of a device in a cooldown at a moment."""
    no = wiring_in_force(connection, cooldown_no, at)
    if no is None:
        return DeviceWiring(None, {}, {})
    device = connection.execute(
        text("SELECT digest FROM record WHERE no = :no"), {"no": device_no}
    ).scalar_one()
    lines = json.loads(
        connection.execute(text("SELECT lines FROM wiring WHERE no = :no"), {"no": no}).scalar_one()
    )
    by_gate: dict[str, Line] = {}
    by_line: dict[str, tuple[str, ...]] = {}
    for content in lines:
        mine = tuple(gate["gate"] for gate in content["gates"] if gate["device"] == bytes(device).hex())
        if not mine:
            continue
        line = Line.from_content({**content, "gates": mine})
        by_line[line.line] = mine
        for gate in mine:
            # A gate may have a dc and a fast line; its standing volts come by the dc one.
            if line.kind == "dc" or gate not in by_gate:
                by_gate[gate] = line
    return DeviceWiring(no, by_gate, by_line)


def devices_in(connection: Connection, cooldown_no: int) -> list[Found]:
    """All devices on the chips of a cooldown, in order of recording."""
    rows = connection.execute(
        text(
            """SELECT r.no, r.kind, r.digest FROM device d JOIN record r ON r.no = d.no
            JOIN link l ON l.target_no = d.chip_no AND l.role = 'chips' AND l.record_no = :no ORDER BY d.no"""
        ),
        {"no": cooldown_no},
    )
    return [Found(row.no, row.kind, bytes(row.digest)) for row in rows]


def lines_content(
    connection: Connection, devices: Sequence[Found], lines: Sequence[Line], where: str
) -> tuple[list[dict[str, Any]], list[int]]:
    """The lines as kept in a wiring record, and the keys of the devices they serve.

    Raises:
        InputError: a line twice, a gate that is unknown or could be of several devices,
            two dc lines to one gate; all faults together.
    """
    gates = {device.no: set(gates_of(connection, device.no).names) for device in devices}
    by_no = {device.no: device for device in devices}
    faults: list[str] = []
    content: list[dict[str, Any]] = []
    served: set[int] = set()
    dc: dict[tuple[int, str], str] = {}
    for line in lines:
        targets: list[dict[str, str]] = []
        for typed in line.gates:
            try:
                device_no, gate = _target(connection, typed, gates)
            except InputError as error:
                faults.append(f"line {line.line}: {error.what} ({error.remedy})")
                continue
            targets.append({"device": by_no[device_no].hex, "gate": gate})
            served.add(device_no)
            if line.kind == "dc" and dc.setdefault((device_no, gate), line.line) != line.line:
                faults.append(f"gate {typed} hangs on two dc lines, {dc[device_no, gate]} and {line.line}")
        faults += _misleading(line, targets, {by_no[no].hex: names for no, names in gates.items()})
        content.append({**line.content(), "gates": sorted(targets, key=lambda t: (t["device"], t["gate"]))})
    names = [line.line for line in lines]
    faults += [f"the line {name} stands twice" for name in sorted({n for n in names if names.count(n) > 1})]
    if not lines:
        faults.append("there is no line")
    if faults:
        raise InputError(
            faults[0],
            where=where,
            remedy="correct the wiring; nothing was recorded",
            faults=tuple(faults[1:]),
        )
    return content, sorted(served)


def _misleading(line: Line, targets: Sequence[Mapping[str, str]], gates: Mapping[str, set[str]]) -> list[str]:
    """A line may have the name of a gate only if it serves that gate: volts are given by either name."""
    served = {target["device"] for target in targets}
    mine = {target["device"] for target in targets if target["gate"] == line.line}
    if any(line.line in gates[device] for device in served - mine):
        return [f"line {line.line} has the name of a gate that it does not serve"]
    return []


def _target(connection: Connection, typed: str, gates: Mapping[int, set[str]]) -> tuple[int, str]:
    """Which device's gate is meant by GATE or CHIP/DEVICE:GATE."""
    device_text, colon, gate = typed.rpartition(":")
    if colon:
        device = find_device(connection, device_text)
        if device.no not in gates or gate not in gates[device.no]:
            raise InputError(
                f"there is no gate {typed!r} in this cooldown", where="wiring", remedy="check both names"
            )
        return device.no, gate
    having = [no for no, names in gates.items() if gate in names]
    if len(having) == 1:
        return having[0], gate
    if not having:
        raise InputError(
            f"there is no gate {gate!r} in this cooldown", where="wiring", remedy="check the gate sheet"
        )
    listed = ", ".join(f"{device_name(connection, no)}:{gate}" for no in having)
    raise InputError(
        f"the gate {gate!r} could be of several devices", where="wiring", remedy=f"write one of {listed}"
    )
