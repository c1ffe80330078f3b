"""Which limits of a gate sheet a set of volts crosses; pure."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from registry.records.descriptions import Gate, PairLimit

__all__ = ["limit_violations"]


def limit_violations(
    at_gates: Mapping[str, float], gates: Sequence[Gate], pairs: Sequence[PairLimit]
) -> list[str]:
    """One sentence for each limit crossed, with gate, value and limit.

    Args:
        at_gates: gate -> V at the gate; gates left out are not checked.
        gates: with ``v_min`` and ``v_max``; pairs: signed differences.
    """
    crossed = []
    for gate in gates:
        value = at_gates.get(gate.gate)
        if value is not None and value > gate.v_max:
            crossed.append(f"{gate.gate} at {value:.6g} V is above its limit of {gate.v_max:.6g} V")
        elif value is not None and value < gate.v_min:
            crossed.append(f"{gate.gate} at {value:.6g} V is below its limit of {gate.v_min:.6g} V")
    for pair in pairs:
        if pair.gate_a in at_gates and pair.gate_b in at_gates:
            difference = at_gates[pair.gate_a] - at_gates[pair.gate_b]
            if not pair.low <= difference <= pair.high:
                crossed.append(
                    f"{pair.gate_a} minus {pair.gate_b} is {difference:.6g} V, outside "
                    f"{pair.low:.6g} V to {pair.high:.6g} V"
                )
    return crossed
