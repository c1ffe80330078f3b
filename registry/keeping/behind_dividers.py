"""Running a method on volts at the gate where the file holds volts at the source.

The uncertainty of a divider enters by running the method again with that divider one
standard uncertainty larger: right for every quantity, whatever its formula.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

from registry.keeping.wirings import DeviceWiring
from registry.physics.methods import Method
from registry.physics.result import Given, Result
from registry.records.descriptions import Line
from registry.samples import Axis, Samples

__all__ = ["DividerPart", "run_at_gates"]

_LEFT_OUT = "the uncertainty of a divider is not in these values: the fit changes its form with it"


@dataclass(frozen=True)
class DividerPart:
    """What one line's divider contributes.

    Attributes:
        line: name of the line.
        parts: place among the quantities -> signed standard uncertainty.
    """

    line: str
    parts: Mapping[int, float]


def run_at_gates(
    chosen: Method, samples: Samples, given: Mapping[str, Given], wiring: DeviceWiring
) -> tuple[Result, tuple[DividerPart, ...]]:
    """Run a method on volts at the gates; also tell what each divider's uncertainty does.

    An axis at the source without a line on record stays as it is; the method says so.
    """
    lines = _source_lines(samples, wiring)
    result = chosen.run(_at_gates(samples, lines), given)
    if result.refused:
        return result, ()
    found = []
    for place, line in lines.items():
        if not line.divider_u:
            continue
        moved = replace(line, divider=line.divider + line.divider_u, gain=True)
        shifted = chosen.run(_at_gates(samples, lines | {place: moved}), given)
        if len(shifted.quantities) != len(result.quantities):
            result = replace(result, warnings=(*result.warnings, _LEFT_OUT))
            continue
        pairs = enumerate(zip(result.quantities, shifted.quantities, strict=True))
        parts = {
            at: other.value - own.value
            for at, (own, other) in pairs
            if own.value is not None and other.value is not None
        }
        found.append(DividerPart(line.line, parts))
    return result, tuple(found)


def _source_lines(samples: Samples, wiring: DeviceWiring) -> dict[int, Line]:
    """The line behind each axis that is at the source, by place of the axis."""
    lines = {}
    for place, axis in enumerate(samples.axes):
        if axis.level != "source":
            continue
        gates = wiring.by_line.get(axis.name, ())
        if axis.name in wiring.by_gate:
            lines[place] = wiring.by_gate[axis.name]
        elif len(gates) == 1:
            lines[place] = wiring.by_gate[gates[0]]
    return lines


def _at_gates(samples: Samples, lines: Mapping[int, Line]) -> Samples:
    axes = list(samples.axes)
    for place, line in lines.items():
        axis = axes[place]
        volts = axis.values / line.divider + line.offset
        name = line.gates[0] if axis.name == line.line and len(line.gates) == 1 else axis.name
        axes[place] = Axis(name, axis.unit, volts, "gate")
    return replace(samples, axes=tuple(axes))
