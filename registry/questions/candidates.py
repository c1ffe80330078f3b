"""Which states of a device may answer, newest first, without ever loading them all.

The index on (device, standing, time of the state) gives judged states in order; SQL drops
those whose judgement is tainted or plainly superseded, Python decides the rest in chunks
that grow, so that the usual answer costs one small chunk.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, AnyRow, ask, ask_among
from registry.questions.currency import IN_FORCE, Taint, untainted
from registry.questions.freshness import Surroundings, breaking
from registry.questions.gate_sheets import Sheet, sheets
from registry.questions.standings import Asked, Decision, Judgement, decide, load_judgements
from registry.questions.states import State, load_states
from registry.records.volts import unpack

__all__ = ["Scales", "Scope", "Weighed", "count_newer", "judged", "newest", "walk"]

FIRST_CHUNK = 8
LARGEST_CHUNK = 4096

# Not named by an unwithdrawn later judgement: a cheap necessary condition; chains that
# run through a withdrawn judgement are settled by ``currency.heads``.
_NOT_SUPERSEDED = (
    "(SELECT l.record_no FROM link l WHERE l.target_no = s.no AND l.role = 'after'"
    " AND (SELECT z.at FROM standing z WHERE z.no = l.record_no) <= :as_of"
    f" AND (SELECT w.no FROM withdrawal w WHERE w.target_no = l.record_no AND {IN_FORCE} LIMIT 1) IS NULL"
    " LIMIT 1) IS NULL"
)

# A column of the judged state, by a scalar subquery for the reason given in ``currency``.
_OF_STATE = "(SELECT t.{} FROM tuning t WHERE t.no = s.tuning_no)"

# The state's own purpose answers for a judgement without one; an amended purpose is
# settled in Python, so such a state passes here.
_PURPOSE = (
    f"(s.purpose = :purpose OR (s.purpose IS NULL AND ({_OF_STATE.format('purpose')} = :purpose OR"
    " (SELECT a.no FROM amendment a WHERE a.target_no = s.tuning_no LIMIT 1) IS NOT NULL)))"
)


@dataclass(frozen=True)
class Scope:
    """Which states are asked about.

    Attributes:
        devices: keys of the device records that are one device.
        asked: for what they shall be good.
        as_of: microseconds; later records are not yet known.
        cooldowns: only states of these, None for all.
    """

    devices: tuple[int, ...]
    asked: Asked
    as_of: int = ALWAYS
    cooldowns: frozenset[int] | None = None


@dataclass(frozen=True)
class Weighed:
    """A state with the standing that counts, what broke it, and withdrawals it hangs on."""

    state: State
    decision: Decision
    judgements: tuple[Judgement, ...]
    broken: str | None
    taints: tuple[Taint, ...]


class Scales:
    """Decides on states, each once, a few statements for a group of them."""

    def __init__(self, connection: Connection, scope: Scope, around: Surroundings) -> None:
        self.connection = connection
        self.scope = scope
        self.around = around
        self._weighed: dict[int, Weighed] = {}
        self._sheets: dict[int, Sheet] = {}

    def weigh(self, tunings: Iterable[int]) -> list[Weighed]:
        """The states with these keys, in the order given."""
        wanted = list(tunings)
        missing = [no for no in wanted if no not in self._weighed]
        if missing:
            self._load(missing)
        return [self._weighed[no] for no in wanted]

    def whole(self, tunings: Sequence[int]) -> list[int]:
        """Those of the states that no lost gate broke, by a look at their volts alone.

        Weighing tells the same; this is for the case that one lost gate broke thousands.
        """
        lost = self.around.lost
        if not lost:
            return list(tunings)
        sql = "SELECT no, gate_sheet_no, moment, volts FROM tuning WHERE no IN :nos"
        rows = ask_among(self.connection, sql, tunings)
        new = {row.gate_sheet_no for row in rows} - self._sheets.keys()
        self._sheets |= sheets(self.connection, new)
        broken = set()
        for row in rows:
            volts = unpack(row.volts)
            for place, gate in self._lost_places(row.gate_sheet_no):
                if lost[gate].at > row.moment and not math.isnan(volts[place]):
                    broken.add(row.no)
        return [no for no in tunings if no not in broken]

    def _lost_places(self, sheet_no: int) -> list[tuple[int, str]]:
        order = self._sheets[sheet_no].order
        return [(order.index(gate), gate) for gate in self.around.lost if gate in order]

    def _load(self, tunings: list[int]) -> None:
        states = load_states(self.connection, tunings, self.scope.as_of)
        judgements, taints = load_judgements(self.connection, states.values(), self.scope.as_of)
        for no, state in states.items():
            found = judgements.get(no, ())
            decision = decide(found, state.purpose, self.scope.asked)
            broken = breaking(state, self.around)
            self._weighed[no] = Weighed(state, decision, found, broken, taints.get(no, ()))


def walk(scales: Scales, standing: str, also: Sequence[AnyRow] = ()) -> Iterator[Weighed]:
    """Unbroken states whose standing that counts is ``standing``, newest first.

    Args:
        scales: to decide with.
        standing: good, usable or poor.
        also: rows (no, moment) of the newest states; those newer than the first candidate
            are weighed with it, because they will be asked about next.
    """
    streams = [_of_device(scales, device, standing, also) for device in scales.scope.devices]
    yield from heapq.merge(*streams, key=lambda weighed: weighed.state.order, reverse=True)


def _of_device(scales: Scales, device: int, standing: str, also: Sequence[AnyRow]) -> Iterator[Weighed]:
    size, below, seen = FIRST_CHUNK, None, set[int]()
    while True:
        rows = judged(scales.connection, device, scales.scope, standing, limit=size, below=below)
        fresh = list(dict.fromkeys(row.tuning_no for row in rows if row.tuning_no not in seen))
        if below is None:
            first = rows[0].tuning_moment if rows else -ALWAYS
            scales.weigh(dict.fromkeys([*fresh, *(row.no for row in also if row.moment >= first)]))
        seen.update(fresh)
        for weighed in scales.weigh(fresh if below is None else scales.whole(fresh)):
            if weighed.decision.standing == standing and weighed.broken is None and not weighed.taints:
                yield weighed
        if len(rows) < size:
            return
        below = (rows[-1].tuning_moment, bytes(rows[-1].digest), rows[-1].no)
        size = min(size * 4, LARGEST_CHUNK)


def judged(
    connection: Connection,
    device: int,
    scope: Scope,
    standing: str,
    *,
    limit: int,
    below: tuple[int, bytes, int] | None = None,
    sound: bool = True,
) -> list[AnyRow]:
    """Judgements of one standing by time of their state, latest first.

    Args:
        connection: to read through.
        device, scope, standing: which ones.
        limit: how many rows at most.
        below: (moment, state digest, key) of the last row already seen.
        sound: leave out tainted and plainly superseded ones.
    """
    values: dict[str, Any] = {"device": device, "standing": standing, "as_of": scope.as_of, "limit": limit}
    values["latest"] = scope.as_of
    where = ["s.device_no = :device", "s.standing = :standing", "s.tuning_moment <= :latest"]
    where.append("s.at <= :as_of")
    seek = ""
    if below is not None:
        values["latest"], values["digest"], values["below"] = below
        seek = (
            " WHERE q.tuning_moment < :latest OR q.digest < :digest OR (q.digest = :digest AND q.no < :below)"
        )
    if sound:
        where += [untainted("s.no"), _NOT_SUPERSEDED]
    if scope.asked.purpose is not None:
        where.append(_PURPOSE)
        values["purpose"] = scope.asked.purpose
    where += _among("s.criteria_no", "criterion", scope.asked.criteria or None, values)
    where += _among(_OF_STATE.format("cooldown_no"), "cooldown", scope.cooldowns, values)
    inner = (
        f"SELECT s.no, s.tuning_no, s.tuning_moment, {_OF_STATE.format('digest')} AS digest"
        f" FROM standing s WHERE {' AND '.join(where)}"
    )
    sql = (
        f"SELECT q.no, q.tuning_no, q.tuning_moment, q.digest FROM ({inner}) q{seek}"
        " ORDER BY q.tuning_moment DESC, q.digest DESC, q.no DESC LIMIT :limit"
    )
    return ask(connection, sql, **values)


def newest(connection: Connection, scope: Scope, *, limit: int) -> list[AnyRow]:
    """Rows (no, digest, moment) of the newest states in scope, newest first."""
    rows: list[AnyRow] = []
    for device in scope.devices:
        where, values = _states(device, scope)
        sql = f"SELECT t.no, t.digest, t.moment FROM tuning t WHERE {where}"
        rows += ask(
            connection, f"{sql} ORDER BY t.moment DESC, t.digest DESC LIMIT :limit", limit=limit, **values
        )
    rows.sort(key=lambda row: (row.moment, bytes(row.digest)), reverse=True)
    return rows[:limit]


def count_newer(connection: Connection, scope: Scope, than: State | None) -> int:
    """How many states in scope are newer than ``than`` (all if None)."""
    count = 0
    for device in scope.devices:
        where, values = _states(device, scope)
        if than is not None:
            where += " AND t.moment >= :moment AND (t.moment > :moment OR t.digest > :digest)"
            values |= {"moment": than.moment, "digest": than.digest}
        count += ask(connection, f"SELECT count(*) FROM tuning t WHERE {where}", **values)[0][0]
    return count


def _states(device: int, scope: Scope) -> tuple[str, dict[str, Any]]:
    values: dict[str, Any] = {"device": device, "latest": scope.as_of}
    where = ["t.device_no = :device", "t.moment <= :latest"]
    where += _among("t.cooldown_no", "cooldown", scope.cooldowns, values)
    return " AND ".join(where), values


def _among(column: str, name: str, keys: frozenset[int] | None, values: dict[str, Any]) -> list[str]:
    """Condition that a column holds one of few keys, each bound by a name of its own."""
    if keys is None:
        return []
    if not keys:
        return ["1 = 0"]
    names = {f"{name}{index}": key for index, key in enumerate(sorted(keys))}
    values |= names
    return [f"{column} IN ({', '.join(f':{bound}' for bound in names)})"]
