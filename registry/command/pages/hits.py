"""How the places where a word was found read: one line each."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from registry.command.printing import plain, table
from registry.command.recording import Shorten

if TYPE_CHECKING:
    from registry.questions.find import Hit

__all__ = ["hit_lines"]


def hit_lines(hits: Sequence[Hit], wanted: str, shorten: Shorten) -> tuple[str, ...]:
    """The page of ``find``."""
    if not hits:
        return (f"{plain(wanted)!r} was found nowhere",)
    rows = []
    for hit in hits:
        marks = ", ".join(
            word for word, true in (("amended", hit.amended), ("withdrawn", hit.withdrawn)) if true
        )
        told = f"{hit.text} ({marks})" if marks else hit.text
        rows.append((shorten(hit.id), hit.kind.replace("_", " "), hit.field.replace("_", " "), told))
    return tuple(table(("id", "kind", "where", "text"), rows, wrap_last=True))
