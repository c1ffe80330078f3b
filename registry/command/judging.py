"""``millikeep criteria`` and ``judge``: what makes a state good, and whether one is."""

from __future__ import annotations

from enum import StrEnum
from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import At, Purpose, SheetPath, Sites, instant, words
from registry.command.outcome import Answer, ExitCode
from registry.command.recording import named, recorded, shortener
from registry.command.session import Session
from registry.command.tuning import TuningName
from registry.errors import InputError

__all__ = ["add_to", "app"]

app = group("Criteria: named lists of limits that make a state good.")


class Grade(StrEnum):
    """How a state is judged."""

    GOOD = "good"
    USABLE = "usable"
    POOR = "poor"


@command(app, "add", example="millikeep criteria add cold-dot criteria.toml")
def add(
    session: Session,
    name: Annotated[str, typer.Argument(metavar="NAME", help="A new name, or one whose limits change.")],
    file: SheetPath,
    at: At = None,
) -> Answer:
    """Record criteria from a TOML file.

    Newer criteria of the same name replace the older ones.

    \b
    [[require]]
    quantity = "electron_temperature"
    at_most = 150
    unit = "mK"

    Also at_least, subject, guard (k of the guard band, 2), scope (state, stretch or
    cooldown) and max_age_days.
    """
    from registry.keeping.judging import add_criteria
    from registry.reading.limit_lists import read_criteria

    limits = read_criteria(file)
    with session.registry() as registry:
        kept = add_criteria(registry, name, limits, at=instant(at))
        count = "1 limit" if len(limits) == 1 else f"{len(limits)} limits"
        return recorded(registry, kept, f"criteria {name}, {count}")


def judge(
    session: Session,
    tuning: TuningName,
    standing: Annotated[
        Grade | None, typer.Argument(metavar="[good|usable|poor]", help="Your judgement.")
    ] = None,
    by: Annotated[
        str | None, typer.Option("--by", metavar="CRITERIA", help="Let these criteria decide instead.")
    ] = None,
    why: Annotated[
        str | None, typer.Option("--why", metavar="TEXT", help="The reason; needed by hand.")
    ] = None,
    purpose: Purpose = None,
    sites: Sites = None,
    at: At = None,
) -> Answer:
    """Judge a state good, usable or poor, by hand or by criteria.

    Criteria decide with the uncertainty: pass is good, fail is poor, and where the values
    do not allow a decision nothing is recorded and the exit code is 1.
    """
    if (standing is None) == (by is None):
        raise InputError(
            "exactly one of a standing and --by is needed",
            where="judge",
            remedy="write `judge TUNING good --why TEXT` or `judge TUNING --by CRITERIA`",
        )
    if by is not None:
        return _judge_by(session, tuning, by, purpose, words(sites), instant(at))
    if why is None:
        raise InputError("the reason is missing", where="judge", remedy="add --why TEXT")
    assert standing is not None
    from registry.keeping.judging import judge as judge_state

    with session.registry() as registry:
        kept = judge_state(
            registry, tuning, standing.value, why=why, purpose=purpose, sites=words(sites), at=instant(at)
        )
        return recorded(registry, kept, f"{named(registry, tuning)} judged {standing.value}")


def _judge_by(
    session: Session, tuning: str, criteria: str, purpose: str | None, sites: tuple[str, ...], at: int | None
) -> Answer:
    from registry.command.pages.verdicts import verdict_lines
    from registry.questions.verdict import STANDING, judge_by

    with session.registry() as registry:
        verdict = judge_by(registry, tuning, criteria, purpose=purpose, sites=sites, at=at)
        standing = STANDING.get(verdict.outcome)
        lines = verdict_lines(verdict, standing, shortener(registry))
    code = ExitCode.BAD_NEWS if verdict.outcome == "undecided" else ExitCode.DONE
    messages = verdict.kept.notes if verdict.kept is not None else ()
    return Answer(verdict.to_json(), lines, code, messages)


def add_to(root: typer.Typer) -> None:
    """Add ``judge`` to the application."""
    command(
        root,
        "judge",
        example="millikeep judge latest good --why 'sensor sharp' --purpose readout\n"
        "millikeep judge latest --by cold-dot",
    )(judge)
