"""Which state of a device was last good, why, and why not a newer one."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from itertools import islice
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection

from registry.errors import LookupFailed
from registry.keeping.naming import find_cooldown
from registry.questions.asking import ALWAYS, AnyRow, ask
from registry.questions.candidates import Scales, Scope, Weighed, count_newer, judged, newest, walk
from registry.questions.currency import current_heads
from registry.questions.devices import Body, find_body
from registry.questions.evidence import Evidence, evidence_of
from registry.questions.freshness import Freshness, Surroundings, asks_of, freshness
from registry.questions.gate_sheets import sheet_in_force
from registry.questions.standings import Asked, Judgement, taint_words
from registry.questions.states import State, volts_at_gate, wiring_of
from registry.questions.surroundings import surroundings_of

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["Alternative", "LastGood", "PassedOver", "last_good", "last_good_of"]

MOST_PASSED_OVER = 20
MOST_ALTERNATIVES = 5


@dataclass(frozen=True)
class PassedOver:
    """A newer state that does not answer, with the reason in words."""

    id: str
    at: str
    reason: str

    def to_json(self) -> dict[str, object]:
        """Id, time and reason."""
        return {"id": self.id, "at": self.at, "reason": self.reason}


@dataclass(frozen=True)
class Alternative:
    """Another state that could be brought back."""

    state: State
    standing: str
    cooldown: str
    by: str
    freshness: Freshness

    def to_json(self) -> dict[str, object]:
        """The state in short, its standing and freshness."""
        return {
            "id": self.state.hex,
            "cooldown": self.cooldown,
            "at": self.state.time,
            "purpose": self.state.purpose,
            "standing": self.standing,
            "by": self.by,
            "freshness": str(self.freshness),
        }


@dataclass(frozen=True)
class LastGood:
    """The answer, with what speaks for it and against newer states.

    Attributes:
        state: None when no good state is left; then ``why_none`` says why.
        cooldown: label of the state's cooldown.
        volts: gate -> volts at the gate; ``underived``: gates whose volts are known at the
            source only, because no wiring was on record.
        judgement: the one that counts; ``conflict``: judgements that disagree.
        passed_over: at most 20 newer states, newest first; ``passed_over_count`` of all.
        asks: what should be done before the device is trusted.
    """

    device: str
    state: State | None = None
    cooldown: str | None = None
    volts: dict[str, float] = field(default_factory=dict, hash=False)
    underived: tuple[str, ...] = ()
    judgement: Judgement | None = None
    conflict: tuple[Judgement, ...] = ()
    evidence: tuple[Evidence, ...] = ()
    freshness: Freshness | None = None
    passed_over: tuple[PassedOver, ...] = ()
    passed_over_count: int = 0
    alternatives: tuple[Alternative, ...] = ()
    asks: tuple[str, ...] = ()
    why_none: str | None = None

    def to_json(self) -> dict[str, Any]:
        """The promised document; keys beyond the promise follow it."""
        return {
            "device": self.device,
            "state": self._state_json(),
            "standing": self.judgement.standing if self.judgement else None,
            "by": self.judgement.by if self.judgement else None,
            "evidence": [piece.to_json() for piece in self.evidence],
            "freshness": str(self.freshness) if self.freshness else None,
            "passed_over": [state.to_json() for state in self.passed_over],
            "alternatives": [other.to_json() for other in self.alternatives],
            "passed_over_count": self.passed_over_count,
            "judgement": self.judgement.to_json() if self.judgement else None,
            "conflict": [judgement.to_json() for judgement in self.conflict],
            "asks": list(self.asks),
            "why_none": self.why_none,
        }

    def _state_json(self) -> dict[str, Any] | None:
        if self.state is None:
            return None
        return {
            "id": self.state.hex,
            "cooldown": self.cooldown,
            "at": self.state.time,
            "purpose": self.state.purpose,
            "volts": self.volts,
            "sites": list(self.state.sites),
            "occupation": dict(self.state.occupation),
            "settings": dict(self.state.settings),
            "time_guessed": self.state.at is None,
            "underived": list(self.underived),
        }


def last_good(
    reg: Registry,
    device: str,
    *,
    criteria: str | None = None,
    purpose: str | None = None,
    sites: Sequence[str] = (),
    as_of: int | None = None,
    before: str | None = None,
) -> LastGood:
    """The newest state that is held good, on evidence that stands, and that nothing broke.

    Args:
        reg: an open registry.
        device: CHIP/NAME, or a prefix of its id.
        criteria: name or id of criteria that must have judged it (their present version).
        purpose: what it shall be good for; None: what each state is for.
        sites: sites it shall be good for; empty: the whole state.
        as_of: microseconds; judgements, withdrawals and events acted later are unknown.
        before: a cooldown; only states of cooldowns that began earlier.

    Raises:
        LookupFailed: the device, criteria or cooldown is not there, or is ambiguous.
    """
    limit = ALWAYS if as_of is None else as_of
    with reg.reading() as connection:
        body = find_body(connection, device, limit)
        asked = Asked(purpose, frozenset(sites), *_criteria(connection, criteria, limit))
        scope = Scope(body.nos, asked, limit, _earlier(connection, body, before))
        scales = Scales(connection, scope, surroundings_of(connection, body, limit))
        return last_good_of(body, scales)


def last_good_of(body: Body, scales: Scales) -> LastGood:
    """``last_good`` for a caller that has loaded the device's surroundings already."""
    connection, scope, around = scales.connection, scales.scope, scales.around
    latest = newest(connection, scope, limit=MOST_PASSED_OVER)
    best = list(islice(walk(scales, "good", latest), 1 + MOST_ALTERNATIVES))
    chosen, others = (best[0] if best else None), best[1:]
    if len(others) < MOST_ALTERNATIVES:
        others += islice(walk(scales, "usable"), MOST_ALTERNATIVES - len(others))
    passed, count = _passed_over(scales, latest, chosen.state if chosen else None)
    answer = LastGood(
        body.name,
        passed_over=passed,
        passed_over_count=count,
        alternatives=tuple(_alternative(other, body, around) for other in others),
        asks=_asks(connection, body, scales, [row.moment for row in latest[:1]]),
    )
    if chosen is None:
        return replace(answer, why_none=_why_none(body, passed, count))
    state, judgement = chosen.state, chosen.decision.deciding
    stay = body.stay(state.cooldown_no)
    volts = volts_at_gate(state, wiring_of(state, around.wirings))
    return replace(
        answer,
        state=state,
        cooldown=stay.label if stay else None,
        volts=volts,
        underived=tuple(gate for gate in state.observed if gate not in volts),
        judgement=judgement,
        conflict=chosen.decision.conflict,
        evidence=evidence_of(connection, judgement.no) if judgement else (),
        freshness=freshness(state, around),
    )


def _criteria(connection: Connection, text: str | None, as_of: int) -> tuple[frozenset[int], str | None]:
    """Keys of the criteria meant: all current ones of a name, or one by its id."""
    if text is None:
        return frozenset(), None
    rows = ask(
        connection, "SELECT no FROM criteria WHERE name = :name AND at <= :as_of", name=text, as_of=as_of
    )
    if rows:
        current = current_heads(connection, (row.no for row in rows), as_of)
        if not current:
            raise LookupFailed(
                f"the criteria {text!r} are withdrawn",
                where="--by",
                remedy="add them anew, or ask without --by",
            )
        return frozenset(current), text
    # Here, because it brings the writing side with it, which this question does without.
    from registry.questions.verdict import find_criteria

    found = find_criteria(connection, text)
    name = ask(connection, "SELECT name FROM criteria WHERE no = :no", no=found.no)[0].name
    return frozenset({found.no}), name


def _earlier(connection: Connection, body: Body, before: str | None) -> frozenset[int] | None:
    """Cooldowns of the device that began before one, which may be of another device."""
    if before is None:
        return None
    own = [stay.at for stay in body.stays if stay.label == before]
    if len(own) == 1:
        limit = own[0]
    else:
        found = find_cooldown(connection, before)
        limit = ask(connection, "SELECT at FROM cooldown WHERE no = :no", no=found.no)[0].at
    return frozenset(stay.no for stay in body.stays if stay.at < limit)


def _asks(connection: Connection, body: Body, scales: Scales, read_back: list[int]) -> tuple[str, ...]:
    sheet = None
    if any(event.asks_health for event in scales.around.history.events):
        sheet, _ = sheet_in_force(connection, body, scales.scope.as_of)
    return asks_of(scales.around, sheet, read_back)


def _alternative(weighed: Weighed, body: Body, around: Surroundings) -> Alternative:
    stay = body.stay(weighed.state.cooldown_no)
    deciding = weighed.decision.deciding
    return Alternative(
        weighed.state,
        weighed.decision.standing or "",
        stay.label if stay else "",
        deciding.by if deciding else "",
        freshness(weighed.state, around),
    )


def _passed_over(
    scales: Scales, latest: Sequence[AnyRow], chosen: State | None
) -> tuple[tuple[PassedOver, ...], int]:
    """Newer states with reasons; of many, those once held good are not crowded out."""
    nos = [row.no for row in latest if chosen is None or (row.moment, bytes(row.digest)) > chosen.order]
    count = len(nos)
    if count == MOST_PASSED_OVER:
        count = count_newer(scales.connection, scales.scope, chosen)
        once = {row.tuning_no for row in _once_good(scales, chosen)} - set(nos)
        nos = nos[: MOST_PASSED_OVER - len(once)] + sorted(once)
    weighed = sorted(scales.weigh(nos), key=lambda item: item.state.order, reverse=True)
    return tuple(PassedOver(item.state.hex, item.state.time, _reason(item)) for item in weighed), count


def _once_good(scales: Scales, chosen: State | None) -> list[AnyRow]:
    """Newest judgements "good" that no longer count, on states newer than the chosen one."""
    most = MOST_PASSED_OVER // 2
    rows = [
        row
        for device in scales.scope.devices
        for row in judged(scales.connection, device, scales.scope, "good", limit=most, sound=False)
        if chosen is None or (row.tuning_moment, bytes(row.digest)) > chosen.order
    ]
    rows.sort(key=lambda row: (row.tuning_moment, bytes(row.digest)), reverse=True)
    return rows[:most]


def _reason(weighed: Weighed) -> str:
    if weighed.taints:
        direct = [taint for taint in weighed.taints if taint.direct]
        if direct:
            return taint_words(direct[-1], "the state")
        return taint_words(weighed.taints[-1], "what the state rests on")
    if weighed.decision.reason is not None:
        return weighed.decision.reason
    return f"broken by {weighed.broken}"


def _why_none(body: Body, passed: tuple[PassedOver, ...], count: int) -> str:
    if not count:
        return f"no state of {body.name} is on record for what was asked"
    judged_once = [state for state in passed if state.reason != "no standing yet"]
    if not judged_once:
        states = "the one state" if count == 1 else f"none of the {count} states"
        return f"{states} of {body.name} has {'no' if count == 1 else 'a'} standing yet"
    reasons = "; ".join(f"{state.id[:10]} {state.reason}" for state in judged_once[:3])
    more = f"; and {len(judged_once) - 3} more" if len(judged_once) > 3 else ""
    return f"no good state of {body.name} is left: {reasons}{more}"
