"""How a device stands at this moment: the page for a person at the cryostat at night."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, ask, spoken
from registry.questions.candidates import Scales, Scope
from registry.questions.compare import GateDifference, gate_differences
from registry.questions.currency import untainted
from registry.questions.devices import Body, Stay, find_body
from registry.questions.freshness import Freshness, Surroundings, freshness
from registry.questions.happenings import Happening
from registry.questions.healths import Finding
from registry.questions.last_good import LastGood, last_good_of
from registry.questions.parameters import Point, points_of
from registry.questions.standings import Asked, Judgement
from registry.questions.states import State, wiring_of
from registry.questions.stretches import History, Stretch, cooldown_end
from registry.questions.surroundings import surroundings_of
from registry.records.instants import format_instant, now_us
from registry.records.quantities import QUANTITIES

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["Now", "Stale", "now"]

_LIVES_LONGER = "device"


@dataclass(frozen=True)
class Stale:
    """The latest value of a series that no longer holds, and since what, in words."""

    point: Point
    since: str

    def to_json(self) -> dict[str, Any]:
        """Quantity, subject, value, and since what it is stale."""
        return {
            "id": self.point.id,
            "quantity": self.point.quantity,
            "subject": self.point.subject,
            "value": self.point.value,
            "standard_uncertainty": self.point.standard_uncertainty,
            "unit": self.point.unit,
            "at": format_instant(self.point.moment),
            "stale_since": self.since,
        }


@dataclass(frozen=True)
class Now:
    """The page.

    Attributes:
        at: microseconds, when it was asked.
        cooldown: the open one, None between two; ``stretch``: None while warm.
        state: the newest state that is not withdrawn; None if there is none.
        judgement: what counts on it; ``reason``: why it is not good, or no standing.
        differences: gates whose volts differ from the last good state's, b being now.
        stale: latest values that no longer hold.
        unhealthy: gates with any finding but ok.
        asks: what should be done before the device is trusted.
    """

    device: str
    at: int
    cooldown: Stay | None
    stretch: Stretch | None
    state: State | None
    judgement: Judgement | None
    reason: str | None
    freshness: Freshness | None
    last_good: LastGood
    differences: tuple[GateDifference, ...]
    stale: tuple[Stale, ...]
    unhealthy: tuple[Finding, ...]
    asks: tuple[str, ...]

    def to_json(self) -> dict[str, Any]:
        """The page as one document."""
        return {
            "device": self.device,
            "at": format_instant(self.at),
            "cooldown": self.cooldown.label if self.cooldown else None,
            "cryostat": self.cooldown.cryostat if self.cooldown else None,
            "stretch": self.stretch.to_json() if self.stretch else None,
            "state": self._state_json(),
            "standing": self.judgement.standing if self.judgement else None,
            "by": self.judgement.by if self.judgement else None,
            "reason": self.reason,
            "freshness": str(self.freshness) if self.freshness else None,
            "last_good": self._last_good_json(),
            "differences": [gate.to_json() for gate in self.differences],
            "stale": [value.to_json() for value in self.stale],
            "unhealthy": [finding.to_json() for finding in self.unhealthy],
            "asks": list(self.asks),
        }

    def _state_json(self) -> dict[str, Any] | None:
        if self.state is None:
            return None
        return {
            "id": self.state.hex,
            "at": self.state.time,
            "purpose": self.state.purpose,
            "sites": list(self.state.sites),
            "occupation": dict(self.state.occupation),
        }

    def _last_good_json(self) -> dict[str, Any] | None:
        best = self.last_good
        if best.state is None:
            return None
        return {
            "id": best.state.hex,
            "at": best.state.time,
            "cooldown": best.cooldown,
            "freshness": str(best.freshness),
        }


def now(reg: Registry, device: str, *, at: int | None = None) -> Now:
    """The present of a device: stretch, state, standing, what differs, what is stale.

    Args:
        reg: an open registry.
        device: CHIP/NAME or id.
        at: microseconds for which to answer, with what was known then; None means now.

    Raises:
        LookupFailed: no such device.
    """
    moment = now_us() if at is None else at
    limit = ALWAYS if at is None else at
    with reg.reading() as connection:
        body = find_body(connection, device, limit)
        around = surroundings_of(connection, body, limit)
        scales = Scales(connection, Scope(body.nos, Asked(), limit), around)
        best = last_good_of(body, scales)
        newest = _newest(connection, scales.scope)
        weighed = scales.weigh((newest,))[0] if newest is not None else None
        stale = _stale(connection, around.history, limit)
    return Now(
        body.name,
        moment,
        _open_stay(body, around),
        around.history.stretch_at(moment),
        weighed.state if weighed else None,
        weighed.decision.deciding if weighed else None,
        weighed.decision.reason if weighed else None,
        freshness(weighed.state, around) if weighed else None,
        best,
        _differences(best.state, weighed.state if weighed else None, around),
        stale,
        tuple(sorted((f for f in around.latest.values() if f.health != "ok"), key=lambda f: f.gate)),
        best.asks,
    )


def _open_stay(body: Body, around: Surroundings) -> Stay | None:
    if not body.stays:
        return None
    last = body.stays[-1]
    end, _ = cooldown_end(last, body.stays, around.history.events)
    return last if end is None else None


def _newest(connection: Connection, scope: Scope) -> int | None:
    """Key of the newest state that hangs on no withdrawn record."""
    found = []
    for device in scope.devices:
        found += ask(
            connection,
            "SELECT t.no, t.moment, t.digest FROM tuning t WHERE t.device_no = :device AND t.moment <= :as_of"
            f" AND {untainted('t.no')} ORDER BY t.moment DESC, t.digest DESC LIMIT 1",
            device=device,
            as_of=scope.as_of,
        )
    return max(found, key=lambda row: (row.moment, bytes(row.digest))).no if found else None


def _differences(
    best: State | None, present: State | None, around: Surroundings
) -> tuple[GateDifference, ...]:
    if best is None or present is None or best.no == present.no:
        return ()
    gates = gate_differences(
        best, present, wiring_of(best, around.wirings), wiring_of(present, around.wirings)
    )
    return tuple(gate for gate in gates if gate.a != gate.b)


def _stale(connection: Connection, history: History, as_of: int) -> tuple[Stale, ...]:
    """Of each series the latest value, if something ended its life since."""
    added = {row.name: row.valid_until for row in ask(connection, "SELECT name, valid_until FROM quantity")}
    latest = {p.series: p for p in points_of(connection, history, as_of=as_of) if not p.tainted}
    found = []
    for _, point in sorted(latest.items()):
        kind = QUANTITIES.get(point.quantity)
        valid_until = kind.valid_until if kind else added.get(point.quantity, "stretch")
        since = _ended(point, valid_until, history)
        if since is not None and point.value is not None:
            found.append(Stale(point, since))
    return tuple(found)


def _ended(point: Point, valid_until: str, history: History) -> str | None:
    """The first event after a value that ends its life, in words; None while it holds."""
    if valid_until == _LIVES_LONGER:
        return None
    ends = [
        (stay.at, f"begin of cooldown {stay.label} at {spoken(stay.at)}")
        for stay in history.body.stays
        if stay.at > point.moment
    ]
    ends += [
        (event.at, event.words)
        for event in history.events
        if event.at > point.moment and _ends_life(event, point.subject, valid_until)
    ]
    return min(ends)[1] if ends else None


def _ends_life(event: Happening, subject: str | None, valid_until: str) -> bool:
    if event.warms_to_room:
        return True
    if valid_until == "cooldown":
        return False
    if event.stresses_one_gate:
        return subject is None or event.gate == subject
    if event.effect == "jump":
        return valid_until == "jump" and (event.site is None or subject in (None, event.site))
    return event.effect in ("resets", "partly-resets")
