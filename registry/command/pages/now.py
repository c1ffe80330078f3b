"""How the present of a device reads at two in the morning: one page, the worst first."""

from __future__ import annotations

from typing import TYPE_CHECKING

from registry.command.printing import millivolts, moment, plain, table, wrap
from registry.command.recording import Shorten
from registry.records.measured import measured

if TYPE_CHECKING:
    from registry.questions.now import Now

__all__ = ["now_lines"]


def now_lines(page: Now, shorten: Shorten) -> tuple[str, ...]:
    """The page of ``now``."""
    lines = [f"{plain(page.device)}  at {moment(page.at)}"]
    lines += _cold(page)
    lines += _state(page, shorten)
    if page.asks:
        lines += ["", "before the device is trusted"]
        for asked in page.asks:
            lines += wrap(asked)
    lines += _gates(page)
    lines += _differences(page)
    lines += _stale(page, shorten)
    return tuple(lines)


def _cold(page: Now) -> list[str]:
    if page.cooldown is None:
        return ["cooldown   none is open"]
    lines = [f"cooldown   {plain(page.cooldown.label)} in {plain(page.cooldown.cryostat)}"]
    if page.stretch is None:
        return [*lines, "stretch    warm"]
    return lines + wrap(f"{page.stretch.number}, since {page.stretch.opening}", "stretch    ")


def _state(page: Now, shorten: Shorten) -> list[str]:
    if page.state is None:
        return ["state      none is on record"]
    lines = [f"state      {shorten(page.state.hex)}  {moment(page.state.time)}"]
    lines += [f"purpose    {plain(page.state.purpose)}"] if page.state.purpose else []
    if page.judgement is not None:
        lines += wrap(page.judgement.words, "standing   ")
    elif page.reason is not None:
        lines += wrap(page.reason, "standing   ")
    lines.append(f"freshness  {plain(page.freshness)}")
    best = page.last_good
    if best.state is None:
        return lines + wrap(best.why_none or "none", "last good  ")
    if best.state.no == page.state.no:
        return [*lines, "last good  this state"]
    cooldown = f"cooldown {plain(best.cooldown or '-')}"
    lines.append(f"last good  {shorten(best.state.hex)}  {moment(best.state.time)}  {cooldown}")
    return lines + wrap(best.freshness, "           ")


def _gates(page: Now) -> list[str]:
    if not page.unhealthy:
        return ["", "no gate is known to be unwell"]
    lines = ["", "gates that are not well"]
    for finding in page.unhealthy:
        lines += wrap(f"{finding.words}{f': {finding.note}' if finding.note else ''}")
    return lines


def _differences(page: Now) -> list[str]:
    rows = [
        (gate.gate, millivolts(gate.a), millivolts(gate.b), millivolts(gate.difference, sign=True))
        for gate in page.differences
    ]
    if not rows:
        return []
    head = ("gate", "last good mV", "latest mV", "difference mV")
    return ["", *table(head, rows, right=(1, 2, 3))]


def _stale(page: Now, shorten: Shorten) -> list[str]:
    """Values that no longer hold, those that ended together under one line."""
    ended: dict[str, list[tuple[str, str, str, str]]] = {}
    for stale in page.stale:
        point = stale.point
        value = measured(point.value, point.standard_uncertainty, point.unit, point.bound)
        row = (shorten(point.id), point.quantity, point.subject or "-", value)
        ended.setdefault(stale.since, []).append(row)
    lines: list[str] = []
    for since, rows in ended.items():
        lines += ["", *wrap(f"no longer hold, since {since}", "")]
        lines += [f"  {line}" for line in table(("parameter", "quantity", "subject", "value"), rows)]
    return lines
