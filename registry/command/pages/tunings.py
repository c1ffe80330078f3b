"""How tuning states read: a list of them, and one of them on a page."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from registry.command.printing import millivolts, moment, plain, setting, subjects, table, wrap
from registry.command.recording import Shorten
from registry.records.measured import measured

if TYPE_CHECKING:
    from registry.questions.tunings import TuningPage, TuningRow

__all__ = ["MOST_SHOWN", "list_lines", "page_lines"]

MOST_SHOWN = 200
"""States in the list; the JSON document holds them all."""


def list_lines(rows: Sequence[TuningRow], shorten: Shorten) -> tuple[str, ...]:
    """The page of ``tuning list``, newest first; a guessed time carries a ``~``."""
    if not rows:
        return ("no state is on record",)
    cells = [
        (
            shorten(row.id),
            f"{'~' if row.time_guessed else ''}{moment(row.at)}",
            row.cooldown or "-",
            row.stretch or "warm",
            "withdrawn" if row.withdrawn else (row.standing or "-"),
            row.purpose or "-",
        )
        for row in rows[:MOST_SHOWN]
    ]
    head = ("state", "at", "cooldown", "stretch", "standing", "purpose")
    lines = table(head, cells, right=(3,))
    if len(rows) > MOST_SHOWN:
        lines.append(f"and {len(rows) - MOST_SHOWN} older ones (--json lists them)")
    return tuple(lines)


def page_lines(page: TuningPage, shorten: Shorten) -> tuple[str, ...]:
    """The page of ``tuning show``: volts at the gate and at the source, in mV."""
    lines = _head(page, shorten)
    rows = [
        (
            volts.gate,
            volts.role,
            millivolts(volts.at_gate),
            millivolts(volts.at_source),
            volts.line or "-",
        )
        for volts in page.gates
    ]
    lines += ["", *table(("gate", "role", "mV at the gate", "mV at the source", "line"), rows, right=(2, 3))]
    lines += _values(page, shorten)
    if page.measurements:
        files = [
            (shorten(row.id), moment(row.at), row.kind or "-", row.file_name + _gone(row.withdrawn))
            for row in page.measurements
        ]
        lines += ["", *table(("measurement", "at", "kind", "file"), files)]
    return tuple(lines)


def _head(page: TuningPage, shorten: Shorten) -> list[str]:
    state = page.state
    guessed = " (guessed from the file's date)" if state.at is None else ""
    lines = [f"state      {shorten(state.hex)}  {moment(state.time)}{guessed}"]
    lines += [f"device     {plain(page.device)}", f"cooldown   {plain(page.cooldown or '-')}"]
    lines += wrap(f"since {page.stretch}" if page.stretch else "warm", "stretch    ")
    lines += [f"parent     {shorten(page.parent)}"] if page.parent else []
    lines += [f"purpose    {plain(state.purpose)}"] if state.purpose else []
    lines += [f"sites      {plain(' '.join(state.sites))}"] if state.sites else []
    if state.occupation:
        lines.append("charges    " + "  ".join(f"{plain(s)} {n}" for s, n in state.occupation.items()))
    lines += [f"set        {plain(name)} {setting(value)}" for name, value in state.settings.items()]
    lines.append(f"freshness  {plain(page.freshness)}")
    for judgement in page.judgements:
        lines += wrap(f"{judgement.words} ({moment(judgement.at)})", "standing   ")
    if not page.judgements:
        lines.append("standing   no standing yet")
    elif page.decision.reason not in (None, *(judgement.words for judgement in page.judgements)):
        lines += wrap(page.decision.reason, "           ")
    return lines + (wrap(page.withdrawn, "! ") if page.withdrawn else [])


def _values(page: TuningPage, shorten: Shorten) -> list[str]:
    if not page.parameters:
        return []
    about = subjects((point.subject, point.conditions) for point in page.parameters)
    rows = [
        (
            shorten(point.id),
            point.quantity,
            subject,
            measured(point.value, point.standard_uncertainty, point.unit, point.bound),
        )
        for point, subject in zip(page.parameters, about, strict=True)
    ]
    return ["", *table(("parameter", "quantity", "subject", "value"), rows)]


def _gone(withdrawn: bool) -> str:
    return " (withdrawn)" if withdrawn else ""
