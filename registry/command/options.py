"""Which options and arguments mean the same in every command, and how their texts are read."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from registry.command.completing import cooldown_names, device_names
from registry.errors import InputError

__all__ = [
    "At",
    "CooldownName",
    "DeviceName",
    "Given",
    "Note",
    "Purpose",
    "SheetPath",
    "Sites",
    "Why",
    "counts",
    "instant",
    "pairs",
    "words",
]

AT_HELP = "When it happened, as 2026-03-02T14:30:00Z or with an offset; now if not given."

DeviceName = Annotated[
    str,
    typer.Argument(
        metavar="DEVICE",
        help="CHIP/NAME, the bare name where only one device has it, or an id.",
        autocompletion=device_names,
    ),
]
CooldownName = Annotated[
    str,
    typer.Argument(metavar="COOLDOWN", help="Label or id of the cooldown.", autocompletion=cooldown_names),
]
At = Annotated[str | None, typer.Option("--at", metavar="TIME", help=AT_HELP)]
Why = Annotated[str, typer.Option("--why", metavar="TEXT", help="The reason, kept with the record.")]
Note = Annotated[str | None, typer.Option("--note", metavar="TEXT", help="A remark in your own words.")]
Purpose = Annotated[
    str | None, typer.Option("--purpose", metavar="TEXT", help="What the state is for, e.g. readout.")
]
Sites = Annotated[
    list[str] | None,
    typer.Option("--sites", metavar="SITES", help='Sites concerned, separated by spaces: --sites "D1 D2".'),
]
Given = Annotated[
    list[str] | None,
    typer.Option(
        "--given",
        metavar="NAME=VALUE",
        help="A number in SI units with its uncertainty (lever_arm=0.1±0.008, or +-), a word, "
        "or the id of a parameter. May be repeated.",
    ),
]
SheetPath = Annotated[Path, typer.Argument(metavar="FILE", help="The table, as described in the README.")]


def instant(text: str | None, option: str = "--at") -> int | None:
    """Microseconds since 1970 UTC of an option's time, None where it was not given."""
    if text is None:
        return None
    from registry.records.instants import parse_instant

    return parse_instant(text, where=option)


def words(texts: list[str] | None) -> tuple[str, ...]:
    """Names given by an option, whether repeated or separated by spaces."""
    return tuple(word for text in texts or () for word in text.split())


def pairs(texts: list[str] | None, option: str) -> dict[str, str]:
    """NAME=VALUE texts as a mapping.

    Raises:
        InputError: a text without ``=``, without name, or a name twice.
    """
    found: dict[str, str] = {}
    for text in texts or ():
        name, equals, value = (part.strip() for part in text.partition("="))
        if not equals or not name or not value:
            raise InputError(
                f"{text!r} is not NAME=VALUE", where=option, remedy="write the name, =, and the value"
            )
        if name in found:
            raise InputError(f"{name!r} is given twice", where=option, remedy="give each name once")
        found[name] = value
    return found


def counts(text: str | None, option: str) -> dict[str, int]:
    """``D1=1,D2=0`` as a mapping of site to number of charges.

    Raises:
        InputError: not of that form, or no whole number from 0.
    """
    found = pairs([part for part in (text or "").replace(",", " ").split() if part], option)
    for site, number in found.items():
        if not (number.isascii() and number.isdigit()):
            raise InputError(
                f"{number!r} charges at {site!r} is no whole number", where=option, remedy="write D1=1,D2=0"
            )
    return {site: int(number) for site, number in found.items()}
