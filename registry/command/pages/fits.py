"""How the run of a method reads: a table of values, its warnings, or why it refused."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from registry.command.printing import plain, subjects, table, wrap
from registry.command.recording import Shorten, recorded_line
from registry.records.measured import measured

if TYPE_CHECKING:
    from registry.keeping.deriving import Derived
    from registry.physics.result import Quantity, Result

__all__ = ["derived_document", "derived_lines", "result_document", "result_lines"]


def result_document(result: Result) -> dict[str, Any]:
    """The promised JSON document of ``fit``; every number in SI."""
    return {
        "method": result.method,
        "version": result.version,
        "source_digest": result.source_digest,
        "quantities": [_quantity(one) for one in result.quantities],
        "warnings": list(result.warnings),
        "refused": result.refused,
        "settings": dict(result.settings),
    }


def _quantity(one: Quantity) -> dict[str, Any]:
    return {
        "quantity": one.quantity,
        "subject": one.subject,
        "value": one.value,
        "standard_uncertainty": one.standard_uncertainty,
        "unit": one.unit,
        "bound": one.bound,
        "why": one.why,
        "degrees_of_freedom": one.degrees_of_freedom,
        "conditions": dict(one.conditions),
    }


def result_lines(result: Result) -> tuple[str, ...]:
    """The page of ``fit``."""
    lines = [f"{result.method} version {result.version}"]
    if result.refused is not None:
        lines += wrap(f"refused: {result.refused}")
    else:
        rows = [
            (one.quantity, subject, _value(one))
            for one, subject in zip(result.quantities, _about(result), strict=True)
        ]
        lines += table(("quantity", "subject", "value"), rows, wrap_last=True)
    for warning in result.warnings:
        lines += wrap(f"warning: {warning}", "")
    return tuple(lines)


def _about(result: Result) -> list[str]:
    return subjects((one.subject, one.conditions) for one in result.quantities)


def _value(one: Quantity) -> str:
    if one.value is None:
        return f"no value: {plain(one.why or 'no reason is given')}"
    return measured(one.value, one.standard_uncertainty, one.unit, one.bound)


def derived_document(runs: Sequence[Derived]) -> dict[str, Any]:
    """The document of ``derive``: that of ``fit`` with ids; several runs stand in a list."""
    documents = [derived_one(run) for run in runs]
    return documents[0] if len(documents) == 1 else {"analyses": documents}


def derived_one(run: Derived) -> dict[str, Any]:
    """One run with the id of the analysis and of each of its parameters."""
    document = result_document(run.result)
    for quantity, kept in zip(document["quantities"], run.parameters, strict=True):
        quantity["id"] = kept.hex
    return {"id": run.kept.hex, "new": run.kept.new, "measurement": run.measurement, **document}


def derived_lines(runs: Sequence[Derived], shorten: Shorten) -> tuple[str, ...]:
    """The page of ``derive``: each value with the id under which it is on record."""
    lines: list[str] = []
    for run in runs:
        result = run.result
        lines.append(recorded_line(shorten, run.kept, f"{result.method} version {result.version}"))
        if result.refused is not None:
            lines += wrap(f"refused: {result.refused}")
        else:
            rows = [
                (shorten(kept.hex), one.quantity, subject, _value(one))
                for kept, one, subject in zip(run.parameters, result.quantities, _about(result), strict=True)
            ]
            lines += table(("parameter", "quantity", "subject", "value"), rows, wrap_last=True)
        for warning in result.warnings:
            lines += wrap(f"warning: {warning}", "")
    return tuple(lines)
