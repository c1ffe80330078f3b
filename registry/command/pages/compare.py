"""How a comparison of two states reads: volts first, then values, then what stood around them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from registry.command.printing import millivolts, moment, plain, setting, subjects, table, wrap
from registry.command.recording import Shorten
from registry.records.measured import measured

if TYPE_CHECKING:
    from registry.questions.compare import Comparison, Context, ParameterDifference
    from registry.questions.parameters import Point

__all__ = ["compare_lines"]


def compare_lines(answer: Comparison, shorten: Shorten) -> tuple[str, ...]:
    """The page of ``compare``; differences are b - a, volts at the gates in mV."""
    lines = [f"{name}  {shorten(state.hex)}  {moment(state.time)}" for name, state in _sides(answer)]
    lines += ["", *_gates(answer)]
    lines += _parameters(answer)
    if answer.context:
        lines += ["", "what else differs"]
        for context in answer.context:
            lines += wrap(_context(context))
    for note in answer.notes:
        lines += ["", *wrap(note, "")]
    return tuple(lines)


def _sides(answer: Comparison) -> tuple[tuple[str, Any], ...]:
    return ("a", answer.a), ("b", answer.b)


def _gates(answer: Comparison) -> list[str]:
    moved = [gate for gate in answer.gates if gate.difference != 0.0]
    still = len(answer.gates) - len(moved)
    rows = [
        (gate.gate, millivolts(gate.a), millivolts(gate.b), millivolts(gate.difference, sign=True))
        for gate in moved
    ]
    lines = table(("gate", "a mV", "b mV", "b - a mV"), rows, right=(1, 2, 3)) if rows else []
    return lines + ([f"{still} gates are at the same volts in both"] if still else [])


def _parameters(answer: Comparison) -> list[str]:
    if not answer.parameters:
        return ["", "no parameter is on record for either state"]
    rows: list[tuple[str, str, str, str]] = []
    about = subjects((one.subject, one.conditions) for one in answer.parameters)
    for one, subject in zip(answer.parameters, about, strict=True):
        if one.a is None or one.b is None:
            only = f"only {'b' if one.a is None else 'a'}"
            rows.append((one.quantity, subject, only, _value(one.a or one.b)))
            continue
        rows += [(one.quantity, subject, "a", _value(one.a)), ("", "", "b", _value(one.b))]
        rows.append(("", "", "b - a", _difference(one)))
    return ["", *table(("quantity", "subject", "", "value"), rows, wrap_last=True)]


def _difference(one: ParameterDifference) -> str:
    if one.difference.value is None:
        return "-"
    shown = measured(one.difference.value, one.difference.standard_uncertainty, one.unit)
    return shown if one.difference.e_n is None else f"{shown}, E_n {one.difference.e_n:.2f}"


def _value(point: Point | None) -> str:
    if point is None:
        return "-"
    if point.value is None:
        return f"no value: {point.why or 'no reason is on record'}"
    return measured(point.value, point.standard_uncertainty, point.unit, point.bound)


def _context(context: Context) -> str:
    if context.a is None and context.b is None:
        return context.what
    what = f"charges of {context.what}" if context.kind == "occupation" else context.what
    return f"{what}: {_side(context.a)} -> {_side(context.b)}"


def _side(value: Any) -> str:
    if value is None:
        return "none"
    if isinstance(value, Mapping) and "value" in value:
        return setting(value)
    if isinstance(value, list | tuple):
        return " ".join(str(one) for one in value) or "none"
    return plain(value)
