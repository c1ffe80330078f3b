"""``millikeep now``, ``find``, ``last-good``, ``compare``, ``lineage``: the questions."""

from __future__ import annotations

from typing import Annotated

import typer

from registry.command.change import RecordName
from registry.command.declaring import command
from registry.command.options import DeviceName, Purpose, Sites, instant, words
from registry.command.outcome import Answer, ExitCode
from registry.command.recording import shortener
from registry.command.session import Session

__all__ = ["add_to"]


def now(session: Session, device: DeviceName) -> Answer:
    """Show how a device stands at this moment, on one page.

    Cooldown, stretch, state and standing, what differs from the last good state, what is
    stale, and which gates are not well.
    """
    from registry.command.pages.now import now_lines
    from registry.questions.now import now as ask_now

    with session.registry_to_ask() as registry:
        page = ask_now(registry, device)
        return Answer(page.to_json(), now_lines(page, shortener(registry)))


def find(
    session: Session,
    text: Annotated[list[str], typer.Argument(metavar="TEXT", help="Part of a label, note, name or id.")],
) -> Answer:
    """Find records by labels, notes, purposes, file names and ids."""
    from registry.command.pages.hits import hit_lines
    from registry.questions.find import find as ask_find

    wanted = " ".join(text)
    with session.registry_to_ask() as registry:
        hits = ask_find(registry, wanted)
        return Answer(
            {"hits": [hit.to_json() for hit in hits]},
            hit_lines(hits, wanted, shortener(registry, (hit.id for hit in hits))),
        )


def last_good(
    session: Session,
    device: DeviceName,
    by: Annotated[
        str | None, typer.Option("--by", metavar="CRITERIA", help="Good by these criteria, not by hand.")
    ] = None,
    purpose: Purpose = None,
    sites: Sites = None,
    as_of: Annotated[
        str | None, typer.Option("--as-of", metavar="TIME", help="As it was at that time.")
    ] = None,
    before: Annotated[
        str | None, typer.Option("--before", metavar="COOLDOWN", help="Only states of earlier cooldowns.")
    ] = None,
) -> Answer:
    """Name the newest good state, and say why no newer.

    The exit code is 1 if there is none.
    """
    from registry.command.pages.last_good import last_good_lines
    from registry.questions.last_good import last_good as ask_last_good

    with session.registry_to_ask() as registry:
        answer = ask_last_good(
            registry,
            device,
            criteria=by,
            purpose=purpose,
            sites=words(sites),
            as_of=instant(as_of, "--as-of"),
            before=before,
        )
        code = ExitCode.BAD_NEWS if answer.state is None else ExitCode.DONE
        return Answer(answer.to_json(), last_good_lines(answer, shortener(registry)), code)


def compare(
    session: Session,
    a: Annotated[str, typer.Argument(metavar="A", help="A state: an id, latest, CHIP/NAME:latest.")],
    b: Annotated[str, typer.Argument(metavar="B", help="The other state; differences are b - a.")],
) -> Answer:
    """Compare two states: volts, parameters, and what else differs."""
    from registry.command.pages.compare import compare_lines
    from registry.questions.compare import compare as ask_compare

    with session.registry_to_ask() as registry:
        answer = ask_compare(registry, a, b)
        return Answer(answer.to_json(), compare_lines(answer, shortener(registry)))


def lineage(
    session: Session,
    record: RecordName,
    down: Annotated[bool, typer.Option("--down", help="What hangs on the record instead.")] = False,
) -> Answer:
    """Show what a number was made from, or what hangs on it.

    Up to the SHA-256 of the file and of the method's code. With --down: what falls if this record is wrong.
    """
    from registry.command.pages.lineage import MOST_SHOWN, lineage_lines
    from registry.questions.lineage import lineage as ask_lineage

    with session.registry_to_ask() as registry:
        answer = ask_lineage(registry, record, down=down)
        return Answer(
            answer.to_json(),
            lineage_lines(answer, shortener(registry, (node.id for node in answer.nodes[:MOST_SHOWN]))),
        )


def add_to(app: typer.Typer) -> None:
    """Add the questions to the application."""
    command(app, "now", example="millikeep now W3-07/A")(now)
    command(
        app,
        "last-good",
        example="millikeep last-good W3-07/A\nmillikeep last-good W3-07/A --purpose readout --before CD12",
    )(last_good)
    command(app, "compare", example="millikeep compare previous latest")(compare)
    command(app, "lineage", example="millikeep lineage 6f3a90c14e")(lineage)
    command(app, "find", example="millikeep find 'night power cut'")(find)
