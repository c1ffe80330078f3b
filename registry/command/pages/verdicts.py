"""How a verdict by criteria reads: the outcome, then each limit with its value and reason."""

from __future__ import annotations

from typing import TYPE_CHECKING

from registry.command.printing import wrap
from registry.command.recording import Shorten, recorded_line

if TYPE_CHECKING:
    from registry.questions.verdict import Verdict

__all__ = ["verdict_lines"]


def verdict_lines(verdict: Verdict, standing: str | None, shorten: Shorten) -> tuple[str, ...]:
    """The page of ``judge --by``; ``standing`` is what was recorded, None where nothing was."""
    state = shorten(verdict.tuning)
    if verdict.kept is None:
        lines = [f"undecided: {verdict.name} does not decide on {state}; nothing was recorded"]
    else:
        lines = [recorded_line(shorten, verdict.kept, f"{state} judged {standing} by {verdict.name}")]
    for check in verdict.checks:
        lines += wrap(f"{check.ruling.outcome}: {check.ruling.sentence}")
    return tuple(lines)
