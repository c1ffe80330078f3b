"""What a state is held to be: the judgements in force on it, and which of them counts.

A judgement without a purpose is for the state's own purpose, one without sites for the
state's own sites; a state without either is judged as a whole.  A person's word
that names no evidence no longer counts once every measurement it could rest on is
withdrawn.  Judgements on one
purpose and the same sites that did not see each other and differ are a conflict: both are
shown and the worse counts.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, AnyRow, ask_among, from_json
from registry.questions.currency import Taint, after_of, direct, heads, taints_of
from registry.questions.states import State
from registry.records.instants import format_instant

__all__ = ["Asked", "Decision", "Judged", "Judgement", "decide", "load_judgements", "taint_words"]

_RANK = {"poor": 0, "usable": 1, "good": 2}
_SHORT = 10


@dataclass(frozen=True)
class Judgement:
    """One judgement in force on a state (or one that only its evidence brings down).

    Attributes:
        purpose, sites: as effective, see the module; sites empty for the whole state.
        criteria, criteria_no: the criteria it was decided by, None for a person's word.
        taints: withdrawals its evidence hangs on; such a judgement does not count.
    """

    no: int
    digest: bytes
    tuning_no: int
    standing: str
    why: str | None
    purpose: str | None
    sites: frozenset[str]
    at: int
    person: str
    criteria: str | None = None
    criteria_no: int | None = None
    taints: tuple[Taint, ...] = ()

    @property
    def by(self) -> str:
        """The criteria's name, else the person's."""
        return self.person if self.criteria is None else self.criteria

    @property
    def words(self) -> str:
        """Standing, by whom, for what and why."""
        by = self.person if self.criteria is None else f"criteria {self.criteria} ({self.person})"
        purpose = f" for {self.purpose}" if self.purpose else ""
        sites = f" on {' '.join(sorted(self.sites))}" if self.sites else ""
        why = f": {self.why}" if self.why else ""
        return f"judged {self.standing}{purpose}{sites} by {by}{why}"

    def to_json(self) -> dict[str, Any]:
        """The judgement with its effective purpose and sites."""
        return {
            "id": self.digest.hex(),
            "standing": self.standing,
            "by": self.by,
            "person": self.person,
            "criteria": self.criteria,
            "why": self.why,
            "purpose": self.purpose,
            "sites": sorted(self.sites),
            "at": format_instant(self.at),
        }


@dataclass(frozen=True)
class Asked:
    """For what a state shall be good.

    Attributes:
        purpose: None for whatever the state is for.
        sites: all of these; empty for the whole state.
        criteria: keys of the criteria that must have judged it, empty for any judge.
        criteria_name: for messages.
    """

    purpose: str | None = None
    sites: frozenset[str] = frozenset()
    criteria: frozenset[int] = frozenset()
    criteria_name: str | None = None


@dataclass(frozen=True)
class Decision:
    """Which standing counts.

    Attributes:
        standing: None where no judgement in force answers.
        deciding: the judgement that counts.
        conflict: the judgements that disagree without having seen each other.
        reason: why the state is not good, in words; None when it is.
    """

    standing: str | None
    deciding: Judgement | None = None
    conflict: tuple[Judgement, ...] = field(default=())
    reason: str | None = None


@dataclass(frozen=True)
class Judged:
    """What a judgement is about: a state's key, and its own purpose and sites."""

    no: int
    purpose: str | None
    sites: tuple[str, ...]


def load_judgements(
    connection: Connection, about: Iterable[Judged | State], as_of: int = ALWAYS
) -> tuple[dict[int, tuple[Judgement, ...]], dict[int, tuple[Taint, ...]]]:
    """Judgements in force by state, oldest first, and the withdrawals states hang on.

    Tainted judgements are among them, marked as such.

    Args:
        connection: to read through.
        about: the states.
        as_of: judgements acted later are not yet known.
    """
    states = {state.no: state for state in about}
    rows = ask_among(
        connection,
        "SELECT s.no, s.digest, s.tuning_no, s.standing, s.why, s.purpose, s.sites, s.at, s.criteria_no,"
        " r.person, c.name AS criteria FROM standing s JOIN record r ON r.no = s.no"
        " LEFT JOIN criteria c ON c.no = s.criteria_no WHERE s.tuning_no IN :nos AND s.at <= :as_of",
        states,
        as_of=as_of,
    )
    every = [row.no for row in rows]
    taints = taints_of(connection, [*every, *states], as_of)
    several = len(every) > len({row.tuning_no for row in rows})
    current = heads(every, after_of(connection, every) if several else {}, direct(taints) & set(every))
    bare = [row for row in rows if row.no in current and row.criteria_no is None and row.no not in taints]
    marked = taints | _emptied(connection, bare, as_of)
    found: dict[int, list[Judgement]] = defaultdict(list)
    for row in rows:
        if row.no in current:
            found[row.tuning_no].append(_judgement(row, states[row.tuning_no], marked.get(row.no, ())))
    ordered = {no: tuple(sorted(group, key=lambda j: (j.at, j.digest))) for no, group in found.items()}
    return ordered, {no: gone for no, gone in taints.items() if no in states}


def _judgement(row: AnyRow, state: Judged | State, taints: tuple[Taint, ...]) -> Judgement:
    return Judgement(
        row.no,
        bytes(row.digest),
        row.tuning_no,
        row.standing,
        row.why,
        row.purpose or state.purpose,
        frozenset(from_json(row.sites, ()) or state.sites),
        row.at,
        row.person,
        row.criteria,
        row.criteria_no,
        taints,
    )


def _emptied(connection: Connection, rows: Sequence[AnyRow], as_of: int) -> dict[int, tuple[Taint, ...]]:
    """Judgements in a person's own words whose every measurement was withdrawn since.

    Such a judgement names no evidence; it was made in sight of what had been measured in
    the state by then.  One sound measurement keeps it up, and so does none at all.
    """
    hit = {
        row.tuning_no
        for row in ask_among(
            connection,
            "SELECT m.tuning_no FROM measurement m JOIN tainted x ON x.record_no = m.no"
            " WHERE m.tuning_no IN :nos",
            (row.tuning_no for row in rows),
        )
    }
    if not hit:
        return {}
    sql = "SELECT no, tuning_no, moment FROM measurement WHERE tuning_no IN :nos"
    measured = ask_among(connection, sql, hit)
    gone = taints_of(connection, (row.no for row in measured), as_of)
    emptied = {}
    for row in rows:
        seen = [m.no for m in measured if m.tuning_no == row.tuning_no and m.moment <= row.at]
        if seen and all(no in gone for no in seen):
            emptied[row.no] = tuple(
                sorted({t for no in seen for t in gone[no]}, key=lambda t: (t.at, t.target))
            )
    return emptied


def decide(judgements: Sequence[Judgement], own_purpose: str | None, asked: Asked) -> Decision:
    """Which standing a state has for what is asked (pure)."""
    relevant = [j for j in judgements if _concerns(j, asked)]
    sound = _for_purpose([j for j in relevant if not j.taints], own_purpose, asked)
    if not sound:
        return Decision(None, reason=_why_unjudged(judgements, relevant, asked))
    worst = min(_RANK[j.standing] for j in sound)
    deciding = max((j for j in sound if _RANK[j.standing] == worst), key=lambda j: (j.at, j.digest))
    conflict = _conflict(sound)
    if deciding.standing != "good":
        return Decision(deciding.standing, deciding, conflict, _why_worse(deciding, conflict))
    reason = _why_not_enough(sound, asked)
    if reason is not None:
        return Decision(None, deciding, conflict, reason)
    by_criteria = [j for j in sound if j.criteria_no in asked.criteria]
    return Decision("good", by_criteria[-1] if by_criteria else deciding, conflict)


def _concerns(judgement: Judgement, asked: Asked) -> bool:
    purpose = asked.purpose is None or judgement.purpose in (None, asked.purpose)
    return purpose and (not asked.sites or not judgement.sites or bool(judgement.sites & asked.sites))


def _for_purpose(sound: Sequence[Judgement], own_purpose: str | None, asked: Asked) -> list[Judgement]:
    """Those for one purpose: the asked one, else the state's own, else its best."""
    if asked.purpose is not None:
        return list(sound) if any(j.purpose == asked.purpose for j in sound) else []
    groups: dict[str | None, list[Judgement]] = defaultdict(list)
    for judgement in sound:
        groups[judgement.purpose].append(judgement)
    if not groups:
        return []
    if own_purpose in groups:
        return groups[own_purpose]
    return max(groups.items(), key=lambda item: (min(_RANK[j.standing] for j in item[1]), item[0] or ""))[1]


def _conflict(sound: Sequence[Judgement]) -> tuple[Judgement, ...]:
    groups: dict[tuple[str | None, frozenset[str]], list[Judgement]] = defaultdict(list)
    for judgement in sound:
        groups[judgement.purpose, judgement.sites].append(judgement)
    differing = (group for group in groups.values() if len({j.standing for j in group}) > 1)
    return tuple(judgement for group in differing for judgement in group)


def _why_worse(deciding: Judgement, conflict: tuple[Judgement, ...]) -> str:
    if deciding not in conflict:
        return deciding.words
    sides = "; ".join(judgement.words for judgement in conflict)
    return f"in conflict, judged without sight of each other, so the worse counts ({sides})"


def _why_unjudged(judgements: Sequence[Judgement], relevant: Sequence[Judgement], asked: Asked) -> str:
    tainted = [j for j in relevant if j.taints]
    if tainted:
        return f"{tainted[-1].words}; {taint_words(tainted[-1].taints[-1], 'its evidence')}"
    others = [j for j in judgements if not j.taints]
    if not others:
        return "no standing yet"
    if asked.purpose is not None and others[-1].purpose != asked.purpose:
        return f"other purpose: {others[-1].words}; asked for {asked.purpose}"
    return f"other sites: {others[-1].words}; asked for {' '.join(sorted(asked.sites))}"


def _why_not_enough(sound: Sequence[Judgement], asked: Asked) -> str | None:
    """Why good judgements do not answer: sites left out, or another judge."""
    if all(j.sites for j in sound):
        missing = asked.sites - frozenset[str]().union(*(j.sites for j in sound))
        if missing:
            return f"{sound[-1].words}; nothing is said about {' '.join(sorted(missing))}"
    if asked.criteria and not any(j.criteria_no in asked.criteria for j in sound):
        earlier = any(j.criteria == asked.criteria_name for j in sound)
        version = "the present version of " if earlier else ""
        return f"{sound[-1].words}, not by {version}criteria {asked.criteria_name}"
    return None


def taint_words(taint: Taint, what: str) -> str:
    """A withdrawal in words; ``what`` names the thing that hangs on it."""
    return (
        f"{what} was withdrawn by {taint.person}: {taint.why} ({taint.target_kind} {taint.target[:_SHORT]})"
    )
