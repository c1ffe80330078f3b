"""What a remembered state is worth now: ready, stale since EVENT, broken by EVENT.

Pure functions over what ``stretches``, ``healths`` and ``wirings`` loaded.  Only what
happened after the state was taken counts: a state found good on a gate already known as
shorted is not broken by that finding.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Literal

from registry.questions.asking import spoken
from registry.questions.gate_sheets import Sheet
from registry.questions.happenings import Happening
from registry.questions.healths import Finding, lost_gates, present
from registry.questions.states import State, volts_at_gate, wiring_of
from registry.questions.stretches import History
from registry.questions.wirings import Wirings

__all__ = ["Freshness", "Surroundings", "asks_of", "freshness"]


_AGEING = frozenset({"resets", "partly-resets", "jump", "asks-wiring"})
_DOUBTFUL = frozenset({"floating", "leaky"})


@dataclass(frozen=True)
class Freshness:
    """How a state stands towards the present.

    Attributes:
        kind: ready, stale or broken.
        by: the first event or finding that made it so, in words; None when ready.
    """

    kind: Literal["ready", "stale", "broken"]
    by: str | None = None

    def __str__(self) -> str:
        if self.kind == "ready":
            return "ready"
        return f"stale since {self.by}" if self.kind == "stale" else f"broken by {self.by}"


@dataclass(frozen=True)
class Surroundings:
    """All that happened to a device, as known at one time."""

    history: History
    findings: tuple[Finding, ...]
    wirings: Wirings

    @cached_property
    def latest(self) -> Mapping[str, Finding]:
        """The present finding on each gate."""
        return present(self.findings)

    @cached_property
    def lost(self) -> Mapping[str, Finding]:
        """Gates that no longer do what a state asks of them."""
        return lost_gates(self.latest)

    @cached_property
    def breaking_events(self) -> tuple[Happening, ...]:
        """Events that break states."""
        return tuple(event for event in self.history.events if event.effect == "breaks")

    @cached_property
    def ageing_events(self) -> tuple[Happening, ...]:
        """Events after which a state may no longer be what it was."""
        return tuple(event for event in self.history.events if event.effect in _AGEING)

    @cached_property
    def doubts(self) -> tuple[Finding, ...]:
        """Present findings that make a gate doubtful without losing it."""
        return tuple(finding for finding in self.latest.values() if finding.health in _DOUBTFUL)


def freshness(state: State, around: Surroundings) -> Freshness:
    """Judge one state against everything that happened after it."""
    broken = breaking(state, around)
    if broken is not None:
        return Freshness("broken", broken)
    first = min(_ageing(state, around), default=None)
    return Freshness("ready") if first is None else Freshness("stale", first[1])


def breaking(state: State, around: Surroundings) -> str | None:
    """The finding or event after which the state cannot be set any more, in words."""
    since = [
        (finding.at, finding.words)
        for gate, finding in around.lost.items()
        if finding.at > state.moment and gate in state.observed
    ]
    since += [
        (event.at, event.words)
        for event in around.breaking_events
        if event.at > state.moment
        and (event.gate is None or (event.gate in state.observed and not _mended(event, around.latest)))
    ]
    return min(since)[1] if since else None


def _mended(event: Happening, latest: Mapping[str, Finding]) -> bool:
    finding = latest.get(event.gate or "")
    return finding is not None and finding.health == "ok" and finding.at > event.at


def _ageing(state: State, around: Surroundings) -> Iterator[tuple[int, str]]:
    """Everything after which the same volts no longer give the same device."""
    for stay in around.history.body.stays:
        if stay.at > state.moment:
            yield stay.at, f"begin of cooldown {stay.label} at {spoken(stay.at)}"
    for event in around.ageing_events:
        if event.at > state.moment and _ages(event, state, around.wirings):
            yield event.at, event.words
    later = [finding for finding in around.doubts if finding.at > state.moment]
    volts = volts_at_gate(state, wiring_of(state, around.wirings)) if later else {}
    for finding in later:
        if _doubtful(finding, volts):
            yield finding.at, finding.words


def _ages(event: Happening, state: State, wirings: Wirings) -> bool:
    match event.effect:
        case "resets" | "partly-resets":
            return not event.stresses_one_gate or event.gate in state.observed
        case "jump":
            return event.site is None or not state.sites or event.site in state.sites
        case "asks-wiring":
            return not wirings.recorded_since(event.cooldown_no, event.at)
        case _:
            return False


def _doubtful(finding: Finding, volts: Mapping[str, float]) -> bool:
    """A gate that floats, or leaks at the volts the state puts on it."""
    if finding.gate not in volts:
        return False
    if finding.health == "floating":
        return True
    limit = 0.0 if finding.above_v is None else finding.above_v
    return abs(volts[finding.gate]) >= abs(limit)


def asks_of(around: Surroundings, sheet: Sheet | None, read_back: Collection[int]) -> tuple[str, ...]:
    """What should be done before the device is trusted, in words, oldest cause first.

    Args:
        around: what happened to it.
        sheet: its gates.
        read_back: moments at which its volts were recorded.
    """
    asks: list[str] = []
    for event in around.history.events:
        if event.effect == "asks-wiring" and not around.wirings.recorded_since(event.cooldown_no, event.at):
            asks.append(f"record the wiring in force since {event.words}")
        if event.loses_volts and not any(moment > event.at for moment in read_back):
            asks.append(f"read the present volts back: they are unknown since {event.words}")
        if event.asks_health and sheet is not None:
            known = {finding.gate for finding in around.findings if finding.at >= event.at}
            unchecked = [gate for gate in sheet.order if gate not in known]
            if unchecked:
                asks.append(f"check {len(unchecked)} of {len(sheet.order)} gates since {event.words}")
    return tuple(asks)
