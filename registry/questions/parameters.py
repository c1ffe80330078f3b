"""Which values of a quantity are on record, each with what is needed to judge it.

One row a result: the same analysis run again on another computer may differ in the last
bits and is one result, of which the one with the lowest id stands.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from operator import attrgetter
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, AnyRow, ask, ask_among
from registry.questions.currency import untainted
from registry.questions.devices import find_body
from registry.questions.stretches import History, history_of
from registry.records.instants import format_instant

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["Point", "points", "points_of", "values_of_states", "version_order"]


@dataclass(frozen=True, slots=True)
class Point:
    """One value.

    Attributes:
        value, standard_uncertainty: in ``unit``; value None where there is none (``why``).
        moment: microseconds of the measurement.
        stretch: number of the cold stretch it was taken in, None while warm.
        tuning: id of the state it was taken in, None for values from elsewhere.
        method, version, source_digest: the code; for values from elsewhere as given.
        conditions: what makes it a series of its own (``direction``).
        shared: source digest -> signed uncertainty it has in common with others.
        tainted: it hangs on a withdrawn record.
    """

    no: int
    id: str
    device: str
    quantity: str
    subject: str | None
    value: float | None
    standard_uncertainty: float | None
    unit: str
    degrees_of_freedom: float | None
    bound: str | None
    why: str | None
    moment: int
    cooldown: str | None
    stretch: int | None
    tuning: str | None
    method: str | None
    version: str | None
    source_digest: str | None
    analysis_no: int | None
    source: str | None
    conditions: Mapping[str, Any] = field(hash=False)
    shared: Mapping[str, float] = field(hash=False)
    tainted: bool

    @property
    def order(self) -> tuple[int, tuple[Any, ...], str]:
        """Sorts by time, then method version, then id."""
        return self.moment, version_order(self.version), self.id

    @property
    def series(self) -> tuple[str, str, str]:
        """Quantity, subject and conditions: what may stand on one line."""
        return self.quantity, self.subject or "", json.dumps(dict(self.conditions), sort_keys=True)

    def to_json(self) -> dict[str, Any]:
        """All members; times as text."""
        return {
            "id": self.id,
            "device": self.device,
            "quantity": self.quantity,
            "subject": self.subject,
            "value": self.value,
            "standard_uncertainty": self.standard_uncertainty,
            "unit": self.unit,
            "degrees_of_freedom": self.degrees_of_freedom,
            "bound": self.bound,
            "why": self.why,
            "at": format_instant(self.moment),
            "cooldown": self.cooldown,
            "stretch": self.stretch,
            "tuning": self.tuning,
            "method": self.method,
            "version": self.version,
            "source": self.source,
            "conditions": dict(self.conditions),
            "tainted": self.tainted,
        }


@lru_cache(maxsize=256)
def version_order(version: str | None) -> tuple[Any, ...]:
    """Sorts versions by their numbers, so that 10 comes after 9."""
    parts = re.split(r"(\d+)", version or "")
    return tuple((1, int(part), "") if part.isdecimal() else (0, 0, part) for part in parts if part)


_COLUMNS = (
    "SELECT p.no, p.digest, p.quantity, p.subject, p.value, p.standard_uncertainty, p.unit,"
    " p.degrees_of_freedom, p.bound, p.why, p.moment, p.analysis_no, p.source, p.conditions, p.shared,"
    " p.method AS told, CASE WHEN p.cooldown_no IS NOT NULL THEN p.cooldown_no ELSE"
    " (SELECT t.cooldown_no FROM tuning t WHERE t.no = p.tuning_no) END AS cooldown_no,"
    " r.digest AS tuning, a.method, a.version, a.source_digest,"
    f" CASE WHEN {untainted('p.no')} THEN 0 ELSE 1 END AS tainted"
    " FROM parameter p LEFT JOIN analysis a ON a.no = p.analysis_no"
    " LEFT JOIN record r ON r.no = p.tuning_no"
)


def points(
    reg: Registry,
    device: str,
    quantity: str | None = None,
    *,
    subject: str | None = None,
    as_of: int | None = None,
    with_tainted: bool = False,
) -> tuple[Point, ...]:
    """All values of a device by time, of one quantity or of all.

    Args:
        reg: an open registry.
        device: CHIP/NAME or id.
        quantity: name from the controlled list, None for all.
        subject: only of this subject, None for all.
        as_of: microseconds; values measured and withdrawals acted later are unknown.
        with_tainted: include values that hang on a withdrawn record, marked.

    Raises:
        LookupFailed: no such device.
    """
    limit = ALWAYS if as_of is None else as_of
    with reg.reading() as connection:
        body = find_body(connection, device, limit)
        history = history_of(connection, body, limit)
        found = points_of(connection, history, quantity, subject=subject, as_of=limit)
    return found if with_tainted else tuple(point for point in found if not point.tainted)


def points_of(
    connection: Connection,
    history: History,
    quantity: str | None = None,
    *,
    subject: str | None = None,
    as_of: int = ALWAYS,
) -> tuple[Point, ...]:
    """``points`` for a caller that has the device's history; tainted ones are marked."""
    rows: list[AnyRow] = []
    for device_no in history.body.nos:
        values: dict[str, Any] = {"device": device_no, "as_of": as_of}
        where = " WHERE p.device_no = :device AND p.moment <= :as_of"
        for name, wanted in (("quantity", quantity), ("subject", subject)):
            if wanted is not None:
                where += f" AND p.{name} = :{name}"
                values[name] = wanted
        rows += ask(connection, _COLUMNS + where, **values)
    return tuple(_one_each(rows, history))


def values_of_states(
    connection: Connection, history: History, tunings: Iterable[int], as_of: int = ALWAYS
) -> dict[str, tuple[Point, ...]]:
    """Current values by state id: of each series the latest sound one.

    Args:
        connection: to read through.
        history: of the states' device.
        tunings: keys of states.
        as_of: later values and withdrawals are unknown.
    """
    rows = ask_among(
        connection,
        _COLUMNS + " WHERE p.tuning_no IN :nos AND p.moment <= :as_of",
        tunings,
        as_of=as_of,
    )
    latest: dict[tuple[str, tuple[str, str, str]], Point] = {}
    for point in _one_each(rows, history):
        if not point.tainted and point.tuning is not None:
            latest[point.tuning, point.series] = point
    found: dict[str, list[Point]] = {}
    for (tuning, _), point in sorted(latest.items()):
        found.setdefault(tuning, []).append(point)
    return {tuning: tuple(group) for tuning, group in found.items()}


def _one_each(rows: Iterable[AnyRow], history: History) -> list[Point]:
    """Points by time, repeated results of one analysis left out."""
    labels = {stay.no: stay.label for stay in history.body.stays}
    found: dict[object, Point] = {}
    for row in rows:
        point = _point(row, history, labels)
        # ``row[13]``: conditions as stored, in canonical form.
        key = (row[11], row[2], row[3], row[13]) if row[11] is not None else point.id
        other = found.get(key)
        if other is None or (point.tainted, point.id) < (other.tainted, other.id):
            found[key] = point
    return sorted(found.values(), key=attrgetter("order"))


def _point(row: AnyRow, history: History, labels: Mapping[int, str]) -> Point:
    # Unpacked at once: of ten thousand rows each look-up by name would be felt.
    (no, digest, quantity, subject, value, u, unit, dof, bound, why, moment, analysis, source) = row[:13]
    (conditions, shared, told, cooldown, tuning, method, version, code, tainted) = row[13:]
    if method is None and told is not None:
        name, slash, rest = told.rpartition("/")
        method, version = (name, rest) if slash else (told, None)
    stretch = history.stretch_at(moment)
    return Point(
        no,
        digest.hex(),
        history.body.name,
        quantity,
        subject,
        value,
        u,
        unit,
        dof,
        bound,
        why,
        moment,
        labels.get(cooldown),
        None if stretch is None else stretch.number,
        None if tuning is None else tuning.hex(),
        method,
        version,
        code,
        analysis,
        source,
        {} if conditions is None else json.loads(conditions),
        {} if shared is None else json.loads(shared),
        bool(tainted),
    )
