"""How a tuning state fares against criteria, and recording that as its standing."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import LookupFailed
from registry.keeping.currency import heads
from registry.keeping.handle import Registry
from registry.keeping.naming import Found, find_record, find_tuning
from registry.keeping.writing import Kept
from registry.questions.asking import ask_among, from_json
from registry.questions.devices import body_of
from registry.questions.parameters import Point, points_of
from registry.questions.stretches import History, history_of
from registry.records.descriptions import Requirement
from registry.records.instants import now_us
from registry.records.verdicts import Outcome, Ruling, rule

__all__ = ["Check", "Verdict", "find_criteria", "judge_by", "verdict"]

DAY_US = 86_400_000_000
# What an outcome makes of a state; undecided makes nothing.
STANDING = {"pass": "good", "fail": "poor"}


@dataclass(frozen=True)
class Check:
    """One requirement and the value it was held against.

    Attributes:
        point: the value, None where there is none in scope.
        ruling: outcome, conformance probability and reason.
    """

    requirement: Requirement
    point: Point | None
    ruling: Ruling

    def to_json(self) -> dict[str, Any]:
        """Requirement, value and ruling."""
        point = self.point
        return {
            "requirement": self.requirement.content(),
            "parameter": None if point is None else point.id,
            "value": None if point is None else point.value,
            "standard_uncertainty": None if point is None else point.standard_uncertainty,
            "outcome": self.ruling.outcome,
            "probability": self.ruling.probability,
            "sentence": self.ruling.sentence,
        }


@dataclass(frozen=True)
class Verdict:
    """What criteria say of a state.

    Attributes:
        tuning, criteria: full ids; name: of the criteria.
        outcome: fail if one check fails, else undecided if one is, else pass.
        kept: the standing recorded, None where undecided or only asked.
    """

    tuning: str
    criteria: str
    name: str
    outcome: Outcome
    checks: tuple[Check, ...]
    kept: Kept | None = None

    def to_json(self) -> dict[str, Any]:
        """The verdict with all its checks; ``id`` of the standing or null."""
        return {
            "id": None if self.kept is None else self.kept.hex,
            "tuning": self.tuning,
            "criteria": self.criteria,
            "name": self.name,
            "outcome": self.outcome,
            "standing": STANDING.get(self.outcome),
            "checks": [check.to_json() for check in self.checks],
        }


def find_criteria(connection: Connection, typed: str) -> Found:
    """The criteria in force under a name, or those with an id.

    Raises:
        LookupFailed: none, or several of one name that did not see each other.
    """
    current = heads(connection, "criteria", "x.name = :name", {"name": typed})
    rows = ask_among(connection, "SELECT no, kind, digest FROM record WHERE no IN :nos", current)
    if len(rows) == 1:
        return Found(rows[0].no, rows[0].kind, bytes(rows[0].digest))
    if len(rows) > 1:
        listed = ", ".join(sorted(bytes(row.digest).hex()[:10] for row in rows))
        raise LookupFailed(
            f"{typed!r} is {listed}: two lists that did not see each other",
            where="criteria",
            remedy="record the list that holds with 'millikeep criteria add', or give an id",
        )
    try:
        return find_record(connection, typed, ("criteria",))
    except LookupFailed as error:
        names = sorted(set(connection.execute(text("SELECT name FROM criteria")).scalars()))
        raise LookupFailed(
            f"there are no criteria {typed!r}",
            where="criteria",
            remedy=f"known: {', '.join(names)}" if names else "add some with 'millikeep criteria add'",
        ) from error


def verdict(registry: Registry, tuning: str, criteria: str, *, at: int | None = None) -> Verdict:
    """What criteria say of a state; records nothing.

    Args:
        registry: open.
        tuning: id, ``latest`` ...; criteria: name or id.
        at: moment of the judgement, for greatest ages; None means now.

    Raises:
        LookupFailed: no such state or criteria.
    """
    with registry.reading() as connection:
        found = find_tuning(connection, tuning)
        rules = find_criteria(connection, criteria)
        return _verdict(connection, found, rules, now_us() if at is None else at)


def judge_by(
    registry: Registry,
    tuning: str,
    criteria: str,
    *,
    purpose: str | None = None,
    sites: Sequence[str] = (),
    at: int | None = None,
) -> Verdict:
    """Judge a state by criteria: pass is recorded as good, fail as poor, undecided not at all.

    The values that decided are the standing's evidence: withdrawing one shows at once.

    Raises:
        LookupFailed: no such state or criteria.
        InputError: an unknown site, or a time before the state.
    """
    from dataclasses import replace

    from registry.keeping.judging import keep_standing

    with registry.writing() as writer:
        answer = verdict(registry, tuning, criteria, at=at)
        if answer.outcome == "undecided":
            return answer
        connection = writer.connection
        state = find_record(connection, answer.tuning, ("tuning",))
        rules = find_record(connection, answer.criteria, ("criteria",))
        kept = keep_standing(
            writer,
            state,
            STANDING[answer.outcome],
            why="; ".join(check.ruling.sentence for check in answer.checks),
            purpose=purpose,
            sites=sites,
            criteria=rules.no,
            evidence=[check.point.no for check in answer.checks if check.point is not None],
            at=at,
        )
        return replace(answer, kept=kept)


def _verdict(connection: Connection, tuning: Found, criteria: Found, at: int) -> Verdict:
    row = connection.execute(
        text("SELECT name, requirements FROM criteria WHERE no = :no"), {"no": criteria.no}
    ).one()
    state = connection.execute(
        text("SELECT device_no, cooldown_no, moment FROM tuning WHERE no = :no"), {"no": tuning.no}
    ).one()
    history = history_of(connection, body_of(connection, state.device_no))
    checks = []
    for content in from_json(row.requirements, []):
        requirement = Requirement.from_content(content)
        point = _point(connection, history, requirement, tuning, state.moment, at)
        values = (
            (None, None, None, None)
            if point is None
            else (point.value, point.standard_uncertainty, point.degrees_of_freedom, point.bound)
        )
        checks.append(Check(requirement, point, rule(requirement, *values)))
    outcomes = {check.ruling.outcome for check in checks}
    outcome: Outcome = "fail" if "fail" in outcomes else "undecided" if "undecided" in outcomes else "pass"
    return Verdict(tuning.hex, criteria.hex, row.name, outcome, tuple(checks))


def _point(
    connection: Connection, history: History, requirement: Requirement, tuning: Found, moment: int, at: int
) -> Point | None:
    """The latest sound value in the requirement's scope."""
    stretch = history.stretch_at(moment)
    found = None
    for point in points_of(connection, history, requirement.quantity, subject=requirement.subject):
        inside = {
            "state": point.tuning == tuning.hex,
            "stretch": stretch is not None and point.stretch == stretch.number,
            "cooldown": stretch is not None and point.cooldown == stretch.stay.label,
        }[requirement.scope]
        old = requirement.max_age_days is not None and at - point.moment > requirement.max_age_days * DAY_US
        usable = point.value is not None and not point.tainted and point.subject == requirement.subject
        if inside and usable and not old and point.moment <= at:
            found = point
    return found
