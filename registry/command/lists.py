"""``millikeep methods``, ``quantities`` and ``events``: what this program knows."""

from __future__ import annotations

from enum import StrEnum
from typing import Annotated, Any

import typer

from registry.command.declaring import command, group, with_example
from registry.command.outcome import Answer
from registry.command.printing import table, wrap
from registry.command.recording import recorded
from registry.command.session import Session
from registry.errors import RegistryError

__all__ = ["add_to", "quantities_app"]


class ValidUntil(StrEnum):
    """What ends the life of a value."""

    JUMP = "jump"
    STRETCH = "stretch"
    COOLDOWN = "cooldown"
    DEVICE = "device"


def methods(session: Session) -> Answer:
    """List the methods, what may be given to each, what it returns."""
    from registry.physics.catalogue import FACTS

    lines: list[str] = []
    for facts in FACTS.values():
        lines += [f"{facts.name}  version {facts.version}", *wrap(facts.title)]
        lines += wrap("returns " + ", ".join(facts.quantities))
        for given in facts.givens:
            unit = f" [{given.unit}]" if given.unit else ""
            allowed = f" ({' | '.join(given.words)})" if given.words else ""
            lines += wrap(f"--given {given.name}=…{unit}{allowed}: {given.meaning}")
        lines.append("")
    return Answer({"methods": [_method(facts) for facts in FACTS.values()]}, tuple(lines[:-1]))


def _method(facts: Any) -> dict[str, Any]:
    return {
        "method": facts.name,
        "version": facts.version,
        "title": facts.title,
        "main_quantity": facts.main_quantity,
        "quantities": [{"quantity": name, "unit": unit} for name, unit in facts.quantities.items()],
        "given": [
            {"name": one.name, "unit": one.unit or None, "meaning": one.meaning, "words": list(one.words)}
            for one in facts.givens
        ],
    }


def events(session: Session) -> Answer:
    """List the kinds of event, and what each does to earlier states."""
    from registry.records.events import EVENTS

    rows = [(kind.name, kind.effect, kind.meaning) for kind in EVENTS.values()]
    document = {
        "events": [
            {"event": kind.name, "effect": kind.effect, "meaning": kind.meaning, "needs": list(kind.needs)}
            for kind in EVENTS.values()
        ]
    }
    return Answer(document, tuple(table(("event", "effect", "meaning"), rows, wrap_last=True)))


quantities_app = group("The quantities with unit and meaning; add your own.")


@quantities_app.callback(invoke_without_command=True, epilog=with_example("millikeep quantities"))
def quantities(
    context: typer.Context,
    _as_json: Annotated[bool, typer.Option("--json", help="Print one JSON document.")] = False,
) -> Answer | None:
    """List the quantities with unit and meaning, or add your own."""
    if context.invoked_subcommand is not None:
        return None
    return list_quantities(context.ensure_object(Session))


def list_quantities(session: Session) -> Answer:
    """The controlled list, and what the laboratory of this registry added to it."""
    from registry.records.quantities import QUANTITIES

    added, messages = _added(session)
    rows = [(kind.name, kind.unit, kind.valid_until, kind.meaning) for kind in QUANTITIES.values()]
    names = ("quantity", "unit", "valid_until", "meaning")
    document = [dict(zip(names, row, strict=True)) for row in (*rows, *added)]
    lines = table(("quantity", "unit", "valid until", "meaning"), [*rows, *added], wrap_last=True)
    return Answer({"quantities": document}, tuple(lines), messages=messages)


def _added(session: Session) -> tuple[list[tuple[str, str, str, str]], tuple[str, ...]]:
    """What the laboratory added; where no registry can be asked, nothing, and that is said."""
    from registry.questions.asking import ask

    try:
        with session.registry_to_ask() as registry, registry.reading() as connection:
            rows = ask(connection, "SELECT name, unit, valid_until, meaning FROM quantity ORDER BY no")
    except RegistryError as error:
        return [], (f"without the quantities of your own: {error.where}: {error.what}",)
    return [(row.name, row.unit, row.valid_until, row.meaning or "") for row in rows], ()


@command(
    quantities_app,
    "add",
    example="millikeep quantities add pair_splitting --unit eV \\\n"
    "    --valid-until stretch --meaning 'splitting of the pair'",
)
def add(
    session: Session,
    name: Annotated[str, typer.Argument(metavar="NAME", help="In snake_case.")],
    unit: Annotated[str, typer.Option("--unit", metavar="U", help="Unit of its values, e.g. V, eV, 1.")],
    valid_until: Annotated[ValidUntil, typer.Option("--valid-until", help="What ends the life of a value.")],
    meaning: Annotated[
        str | None, typer.Option("--meaning", metavar="TEXT", help="What it is, in one line.")
    ] = None,
) -> Answer:
    """Add a quantity to the controlled list of this registry."""
    from registry.keeping.describing import add_quantity

    with session.registry() as registry:
        kept = add_quantity(registry, name, unit=unit, valid_until=valid_until.value, meaning=meaning)
        return recorded(registry, kept, f"quantity {name} in {unit}, valid until {valid_until.value}")


def add_to(app: typer.Typer) -> None:
    """Add the lists to the application."""
    command(app, "methods", example="millikeep methods")(methods)
    command(app, "events", example="millikeep events")(events)
