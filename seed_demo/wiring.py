"""Which source drives which gate of the demo laboratory, through which divider.

Each device has one line a gate.  In spring a rewiring gives the plungers of the double
dot other dividers.  No device model and no files here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from seed_demo.devices import Device, FloatArray

__all__ = ["Line", "line_of", "lines", "rewired_lines"]

# 20 bits over +-10 V.
_GRID = 20.0 / 2**20


@dataclass(frozen=True)
class Line:
    """One line from a source to a gate.

    volts at the source = (volts at the gate - offset) x divider, on the resolution grid.

    Attributes:
        line, source: names; ``gate`` is written CHIP/DEVICE:GATE.
        divider, divider_u: ratio and its standard uncertainty.
        offset: V at the gate with the source at 0 V.
        out_min, out_max, resolution: of the source, V.
        kind: ``dc``.
        filter_hz: corner of the low-pass filter.
    """

    line: str
    gate: str
    source: str
    divider: float
    divider_u: float
    offset: float = 0.0
    out_min: float = -10.0
    out_max: float = 10.0
    resolution: float = _GRID
    kind: str = "dc"
    filter_hz: float = 40.0

    def at_source(self, volts: FloatArray | float) -> FloatArray:
        """Volts on the source's panel for ``volts`` at the gate, on the grid."""
        wanted = (np.asarray(volts, dtype=np.float64) - self.offset) * self.divider
        return np.round(wanted / self.resolution) * self.resolution

    def at_gate(self, source_volts: FloatArray | float) -> FloatArray:
        """Volts at the gate for volts on the panel."""
        return np.asarray(source_volts, dtype=np.float64) / self.divider + self.offset

    def settled(self, volts: FloatArray | float) -> FloatArray:
        """Volts at the gate that the source can really give, nearest to ``volts``."""
        return self.at_gate(self.at_source(volts))


def lines(device: Device, dividers: Mapping[str, float] | None = None) -> tuple[Line, ...]:
    """Lines of one device: divider 4 everywhere, except for the gates in ``dividers``."""
    changed = dividers or {}
    made = []
    for number, gate in enumerate(device.gates, 1):
        divider = changed.get(gate.name, 4.0)
        made.append(
            Line(
                line=f"{device.name}-{number:02d}",
                gate=f"{device.path}:{gate.name}",
                source=f"{device.name}-rack:{number}",
                divider=divider,
                divider_u=0.002 * divider,
            )
        )
    return tuple(made)


def rewired_lines(device: Device) -> tuple[Line, ...]:
    """Lines after the rewiring: the plungers have divider 5 for a finer grid."""
    return lines(device, {gate.name: 5.0 for gate in device.gates if gate.role == "plunger"})


def line_of(wiring: tuple[Line, ...], device: Device, gate: str) -> Line:
    """Return the line that drives ``gate`` of ``device``."""
    wanted = f"{device.path}:{gate}"
    return next(line for line in wiring if line.gate == wanted)
