"""What a command says after it recorded something: the id, and whether it is new."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TYPE_CHECKING, Any

from registry.command.outcome import Answer

if TYPE_CHECKING:
    from registry.keeping.handle import Registry
    from registry.keeping.writing import Kept

__all__ = ["Shorten", "named", "recorded", "recorded_line", "shortener"]

Shorten = Callable[[str], str]
"""From a full id to the shortest prefix that is unique in the registry."""


def shortener(registry: Registry, many: Iterable[str] = ()) -> Shorten:
    """A function that shortens ids of this registry, while it is open.

    Args:
        registry: where the records are.
        many: ids that are known to be needed; they are shortened at once.
    """
    from registry.command.short_ids import short_ids

    with registry.reading() as connection:
        known = short_ids(connection, many)

    def shorten(full: str) -> str:
        if full not in known:
            with registry.reading() as connection:
                known.update(short_ids(connection, [full]))
        return known[full]

    return shorten


def named(registry: Registry, typed: str) -> str:
    """The short id of a record that was typed as an id, or of a state typed as a word."""
    from registry.keeping.naming import find_record, find_tuning, is_word

    with registry.reading() as connection:
        found = find_tuning(connection, typed) if is_word(typed) else find_record(connection, typed)
    return shortener(registry)(found.hex)


def recorded(registry: Registry, kept: Kept, what: str, **more: Any) -> Answer:
    """The answer of a command that recorded one thing; its notes go to stderr.

    Args:
        registry: where it was recorded; tells the shortest unique prefix of the id.
        kept: the record.
        what: in words, e.g. ``chip W3``.
        more: further members of the JSON document.
    """
    document = {"id": kept.hex, "new": kept.new, "notes": list(kept.notes), **more}
    return Answer(document, (recorded_line(shortener(registry), kept, what),), messages=kept.notes)


def recorded_line(shorten: Shorten, kept: Kept, what: str) -> str:
    """``6f3a90c14e  chip W3``, with "already recorded" where it is not new."""
    return f"{shorten(kept.hex)}  {what}{'' if kept.new else ' (already recorded)'}"
