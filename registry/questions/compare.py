"""How two tuning states of a device differ: volts, values, and what stood around them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection

from registry.errors import InputError
from registry.keeping.naming import find_tuning
from registry.questions.devices import Body, body_of
from registry.questions.differences import Difference, difference_of
from registry.questions.parameters import Point, values_of_states
from registry.questions.states import State, load_states, volts_at_gate, wiring_of
from registry.questions.stretches import History, history_of
from registry.questions.wirings import Wiring, wirings

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = [
    "Comparison",
    "Context",
    "GateDifference",
    "ParameterDifference",
    "compare",
    "compare_states",
    "gate_differences",
]


@dataclass(frozen=True)
class GateDifference:
    """Volts at one gate in both states, in V; None where not recorded.

    Attributes:
        difference: b - a.
        repeatability_units: the difference over the gate's stretch-to-stretch
            repeatability; None where that is not known.
    """

    gate: str
    a: float | None
    b: float | None
    difference: float | None
    repeatability_units: float | None = None

    def to_json(self) -> dict[str, Any]:
        """All members, in V."""
        return {
            "gate": self.gate,
            "a": self.a,
            "b": self.b,
            "difference": self.difference,
            "repeatability_units": self.repeatability_units,
        }


@dataclass(frozen=True)
class ParameterDifference:
    """One series in both states; a side is None where the state has no such value."""

    quantity: str
    subject: str | None
    unit: str
    conditions: Mapping[str, Any]
    a: Point | None
    b: Point | None
    difference: Difference

    def to_json(self) -> dict[str, Any]:
        """Values of both sides, ``difference`` = b - a with its uncertainty."""
        values: dict[str, Any] = {
            "quantity": self.quantity,
            "subject": self.subject,
            "unit": self.unit,
            "conditions": dict(self.conditions),
        }
        for side, point in (("a", self.a), ("b", self.b)):
            values[side] = point.value if point else None
            values[f"{side}_standard_uncertainty"] = point.standard_uncertainty if point else None
            values[f"{side}_id"] = point.id if point else None
        return values | {
            "difference": self.difference.value,
            "standard_uncertainty": self.difference.standard_uncertainty,
            "e_n": self.difference.e_n,
        }


@dataclass(frozen=True)
class Context:
    """One thing around the states that differs: its kind, name, and how it was for each."""

    kind: str
    what: str
    a: Any = None
    b: Any = None

    def to_json(self) -> dict[str, Any]:
        """All members."""
        return {"kind": self.kind, "what": self.what, "a": self.a, "b": self.b}


@dataclass(frozen=True)
class Comparison:
    """The answer; ``underived`` names states' gates whose volts are known at the source only."""

    a: State
    b: State
    gates: tuple[GateDifference, ...]
    parameters: tuple[ParameterDifference, ...]
    context: tuple[Context, ...]
    notes: tuple[str, ...]

    def to_json(self) -> dict[str, Any]:
        """The promised document, and notes."""
        return {
            "a": self.a.hex,
            "b": self.b.hex,
            "gates": [gate.to_json() for gate in self.gates],
            "parameters": [parameter.to_json() for parameter in self.parameters],
            "context": [context.to_json() for context in self.context],
            "notes": list(self.notes),
        }


def compare(reg: Registry, a: str, b: str) -> Comparison:
    """Compare two states of one device.

    Args:
        reg: an open registry.
        a, b: ids, ``latest``, ``previous``, or CHIP/NAME:latest.

    Raises:
        LookupFailed: no such state.
        InputError: they belong to different devices.
    """
    with reg.reading() as connection:
        first, second = find_tuning(connection, a), find_tuning(connection, b)
        states = load_states(connection, (first.no, second.no))
        return compare_states(connection, states[first.no], states[second.no])


def compare_states(connection: Connection, a: State, b: State) -> Comparison:
    """``compare`` for states already loaded.

    Raises:
        InputError: they belong to different devices.
    """
    body = body_of(connection, a.device_no)
    if b.device_no not in body.nos:
        raise InputError(
            f"{b.hex[:10]} is a state of {body_of(connection, b.device_no).name}, not of {body.name}",
            where="compare",
            remedy="choose two states of one device",
        )
    history = history_of(connection, body)
    known = wirings(connection, body, {a.cooldown_no, b.cooldown_no})
    sides = (wiring_of(a, known), wiring_of(b, known))
    gates = gate_differences(a, b, *sides)
    values = values_of_states(connection, history, (a.no, b.no))
    parameters = _parameters(values.get(a.hex, ()), values.get(b.hex, ()))
    context = (
        *_surroundings(a, b, body, history),
        *_wiring(sides, gates),
        *_described(a, b),
        *_between(a, b, history),
        *_methods(parameters),
    )
    return Comparison(a, b, gates, parameters, context, tuple(_notes(a, b, sides)))


def gate_differences(
    a: State, b: State, wiring_a: Wiring | None, wiring_b: Wiring | None
) -> tuple[GateDifference, ...]:
    """Volts at the gates of both states, in gate-sheet order (pure)."""
    volts_a, volts_b = volts_at_gate(a, wiring_a), volts_at_gate(b, wiring_b)
    found = []
    for gate in dict.fromkeys((*a.sheet.order, *b.sheet.order)):
        x, y = volts_a.get(gate), volts_b.get(gate)
        found.append(GateDifference(gate, x, y, None if x is None or y is None else y - x))
    return tuple(found)


def _parameters(a: tuple[Point, ...], b: tuple[Point, ...]) -> tuple[ParameterDifference, ...]:
    first, second = ({point.series: point for point in side} for side in (a, b))
    found = []
    for series in sorted(first.keys() | second.keys()):
        x, y = first.get(series), second.get(series)
        one = x or y
        if one is not None:
            found.append(
                ParameterDifference(
                    one.quantity, one.subject, one.unit, one.conditions, x, y, difference_of(x, y)
                )
            )
    return tuple(found)


def _surroundings(a: State, b: State, body: Body, history: History) -> Iterator[Context]:
    stays = [body.stay(state.cooldown_no) for state in (a, b)]
    labels = [stay.label if stay else None for stay in stays]
    if a.cooldown_no != b.cooldown_no:
        yield Context("cooldown", "cooldown", *labels)
        if stays[0] and stays[1] and stays[0].cryostat != stays[1].cryostat:
            yield Context("cooldown", "cryostat", stays[0].cryostat, stays[1].cryostat)
    stretches = [history.stretch_at(state.moment) for state in (a, b)]
    if stretches[0] != stretches[1]:
        words = [f"stretch {s.number}, since {s.opening}" if s else "warm" for s in stretches]
        yield Context("stretch", "cold stretch", *words)


def _wiring(
    sides: tuple[Wiring | None, Wiring | None], gates: tuple[GateDifference, ...]
) -> Iterator[Context]:
    a, b = sides
    if (a and a.no) != (b and b.no):
        yield Context("wiring", "wiring in force", a.words if a else None, b.words if b else None)
    for gate in gates:
        lines = [side.gates.get(gate.gate) if side else None for side in sides]
        if lines[0] is None or lines[1] is None:
            continue
        for name in ("divider", "offset", "line", "source"):
            x, y = getattr(lines[0], name), getattr(lines[1], name)
            if x != y:
                yield Context("divider" if name == "divider" else "wiring", f"{name} of {gate.gate}", x, y)


def _described(a: State, b: State) -> Iterator[Context]:
    if a.sheet.no != b.sheet.no:
        yield Context("gate sheet", "gate sheet", a.sheet.digest.hex(), b.sheet.digest.hex())
    for name in sorted(a.settings.keys() | b.settings.keys()):
        x, y = a.settings.get(name), b.settings.get(name)
        if x != y:
            yield Context("setting", name, x, y)
    for site in sorted(a.occupation.keys() | b.occupation.keys()):
        m, n = a.occupation.get(site), b.occupation.get(site)
        if m != n:
            yield Context("occupation", site, m, n)
    if a.purpose != b.purpose:
        yield Context("purpose", "purpose", a.purpose, b.purpose)
    if set(a.sites) != set(b.sites):
        yield Context("sites", "sites", sorted(a.sites), sorted(b.sites))
    if a.level != b.level:
        yield Context("level", "level of the recorded volts", a.level, b.level)


def _between(a: State, b: State, history: History) -> Iterator[Context]:
    low, high = sorted((a.moment, b.moment))
    for event in history.events:
        if low < event.at <= high:
            note = f" ({event.note})" if event.note else ""
            yield Context("event", f"{event.words}{note}, which {_EFFECT_WORDS[event.effect]}")


_EFFECT_WORDS = {
    "begins": "begins a stretch if the device had warmed",
    "resets": "resets the device",
    "partly-resets": "partly resets the device",
    "jump": "is a jump inside a stretch",
    "breaks": "breaks states that use the gate",
    "asks-wiring": "asks for a wiring",
    "informs": "informs",
}


def _methods(parameters: tuple[ParameterDifference, ...]) -> Iterator[Context]:
    seen = set()
    for parameter in parameters:
        if parameter.a is None or parameter.b is None:
            continue
        codes = [
            f"{p.method or 'unknown'} {p.version or ''}".strip() + _source(p)
            for p in (parameter.a, parameter.b)
        ]
        if codes[0] != codes[1] and (parameter.quantity, *codes) not in seen:
            seen.add((parameter.quantity, *codes))
            yield Context("method", f"method of {parameter.quantity}", *codes)


def _source(point: Point) -> str:
    return f" (source {point.source_digest[:10]})" if point.source_digest else ""


def _notes(a: State, b: State, sides: tuple[Wiring | None, Wiring | None]) -> Iterator[str]:
    yield "repeatability_units are empty: each gate's stretch-to-stretch repeatability is not worked out here"
    for state, wiring in zip((a, b), sides, strict=True):
        missing = [gate for gate in state.observed if gate not in volts_at_gate(state, wiring)]
        if missing:
            yield (
                f"{state.hex[:10]} was recorded at the source and no wiring tells the volts at "
                f"{len(missing)} gates ({' '.join(missing[:5])}{' ...' if len(missing) > 5 else ''})"
            )
