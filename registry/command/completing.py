"""Which names a shell may complete: devices and cooldowns of the registry in use.

A shell calls this between two key strokes, so whatever goes wrong means no suggestion.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import typer

from registry.errors import MillikeepError

if TYPE_CHECKING:
    from sqlalchemy import Connection

__all__ = ["cooldown_names", "device_names"]


def device_names(context: typer.Context, incomplete: str) -> list[str]:
    """CHIP/NAME of every device that begins with what was typed."""
    return _suggest(context, incomplete, _devices)


def cooldown_names(context: typer.Context, incomplete: str) -> list[str]:
    """Label of every cooldown that begins with what was typed."""
    return _suggest(context, incomplete, _cooldowns)


def _suggest(context: typer.Context, incomplete: str, names: Callable[[Connection], list[str]]) -> list[str]:
    from registry.command.printing import plain
    from registry.keeping.opening import open_registry

    where = context.find_root().params.get("where")
    try:
        with open_registry(where, read_only=True) as registry, registry.reading() as connection:
            found = names(connection)
    except MillikeepError:
        return []
    # A name that a terminal would obey, or a shell would split, is left to be typed.
    return sorted({name for name in found if name.startswith(incomplete) and name == plain(name)})


def _devices(connection: Connection) -> list[str]:
    from registry.keeping.naming import device_name
    from registry.questions.asking import ask

    return [device_name(connection, row.no) for row in ask(connection, "SELECT no FROM device")]


def _cooldowns(connection: Connection) -> list[str]:
    from registry.questions.asking import ask

    return [row.label for row in ask(connection, "SELECT label FROM cooldown")]
