"""How the answer to "which state was last good?" reads: the state, what speaks for it, why no newer one."""

from __future__ import annotations

from typing import TYPE_CHECKING

from registry.command.printing import millivolts, moment, plain, table, wrap
from registry.command.recording import Shorten
from registry.records.measured import measured

if TYPE_CHECKING:
    from registry.questions.evidence import Evidence
    from registry.questions.last_good import LastGood
    from registry.questions.states import State

__all__ = ["last_good_lines"]


def last_good_lines(answer: LastGood, shorten: Shorten) -> tuple[str, ...]:
    """The page of ``last-good``."""
    lines = [plain(answer.device)]
    if answer.state is None:
        lines += wrap(answer.why_none or "no good state", "")
    else:
        lines += _chosen(answer, answer.state, shorten)
        lines += _evidence(answer.evidence, shorten)
        lines += _volts(answer)
    lines += _passed_over(answer, shorten)
    lines += _alternatives(answer, shorten)
    if answer.asks:
        lines += ["", "before the device is trusted"]
        for asked in answer.asks:
            lines += wrap(asked)
    return tuple(lines)


def _chosen(answer: LastGood, state: State, shorten: Shorten) -> list[str]:
    lines = [
        f"last good  {shorten(state.hex)}  {moment(state.time)}  cooldown {plain(answer.cooldown or '-')}",
        f"freshness  {plain(answer.freshness)}",
    ]
    if answer.judgement is not None:
        lines += wrap(answer.judgement.words, "standing   ")
    lines += [f"purpose    {plain(state.purpose)}"] if state.purpose else []
    lines += [f"sites      {plain(' '.join(state.sites))}"] if state.sites else []
    if state.occupation:
        lines.append("charges    " + "  ".join(f"{plain(s)} {n}" for s, n in state.occupation.items()))
    for judgement in answer.conflict:
        lines += wrap(f"conflict: {judgement.words}")
    return lines


def _evidence(evidence: tuple[Evidence, ...], shorten: Shorten) -> list[str]:
    if not evidence:
        return ["", "evidence: none was named"]
    rows = []
    for piece in evidence:
        value = (
            measured(piece.value, piece.standard_uncertainty, piece.unit or "1", piece.bound)
            if piece.quantity
            else "-"
        )
        source = piece.sources[0].file_name if piece.sources else (piece.source or "-")
        rows.append((shorten(piece.id), piece.quantity or piece.kind, piece.subject or "-", value, source))
    return ["", *table(("evidence", "what", "subject", "value", "from"), rows, wrap_last=True)]


def _volts(answer: LastGood) -> list[str]:
    rows = [(gate, millivolts(volts)) for gate, volts in answer.volts.items()]
    lines = ["", *table(("gate", "mV at the gate"), rows, right=(1,))]
    if answer.underived:
        lines += wrap(f"no wiring on record tells the volts at {' '.join(answer.underived)}")
    return lines


def _passed_over(answer: LastGood, shorten: Shorten) -> list[str]:
    if not answer.passed_over:
        return []
    lines = ["", "newer states passed over"]
    for state in answer.passed_over:
        lines += wrap(f"{shorten(state.id)}  {moment(state.at)}  {state.reason}")
    left = answer.passed_over_count - len(answer.passed_over)
    return lines + ([f"  and {left} more"] if left > 0 else [])


def _alternatives(answer: LastGood, shorten: Shorten) -> list[str]:
    if not answer.alternatives:
        return []
    rows = [
        (shorten(other.state.hex), moment(other.state.time), other.cooldown, other.standing, other.freshness)
        for other in answer.alternatives
    ]
    return ["", *table(("alternative", "at", "cooldown", "standing", "freshness"), rows, wrap_last=True)]
