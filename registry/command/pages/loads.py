"""How the loading of a table reads: how many rows, how many of them new."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from registry.keeping.loading import Loaded

__all__ = ["load_lines"]


def load_lines(loaded: Loaded, what: str, *, dry_run: bool) -> tuple[str, ...]:
    """The lines of ``tuning load`` and ``parameter load``; ``what`` names the rows."""
    lines = [
        f"{loaded.rows} rows read, no fault",
        f"{loaded.new} {what} {'would be' if dry_run else 'were'} recorded",
    ]
    lines += [f"{loaded.already} were on record already"] if loaded.already else []
    lines += [f"{loaded.standings} of them with a standing"] if loaded.standings else []
    return tuple(lines)
