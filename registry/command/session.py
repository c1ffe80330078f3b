"""What holds for one run of the command: which registry, which person."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import typer

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["Progress", "Session", "progress"]

Progress = Callable[[int, int], None]


@dataclass
class Session:
    """The options before the command.

    Attributes:
        where: directory or URL of the registry; None means the environment variable
            MILLIKEEP_REGISTRY, or else the user's data directory.
        person: who acts; None means the user of this computer.
    """

    where: str | None = None
    person: str | None = None

    def registry(self) -> Registry:
        """Open the registry for asking and recording; use it in a ``with`` block."""
        from registry.keeping.opening import open_registry

        registry = open_registry(self.where, person=self.person)
        registry.side.tell_when_waiting(_tell_waiting)
        return registry

    def registry_to_ask(self) -> Registry:
        """Open the registry for asking only; nothing is made where there is none."""
        from registry.keeping.opening import open_registry

        return open_registry(self.where, person=self.person, read_only=True)


def _tell_waiting() -> None:
    print("another program is writing; waiting for it", file=sys.stderr)


@contextmanager
def progress(label: str) -> Iterator[Progress | None]:
    """A function that takes (done, of) and moves a bar; None where stderr is no terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    with ExitStack() as stack:
        moved = _Bar(label, stack)
        yield moved


class _Bar:
    """A progress bar that appears when the length of the work is first told."""

    def __init__(self, label: str, stack: ExitStack) -> None:
        self._label = label
        self._stack = stack
        self._bar: Any = None
        self._done = 0

    def __call__(self, done: int, of: int) -> None:
        if self._bar is None:
            self._bar = self._stack.enter_context(
                typer.progressbar(length=max(of, 1), label=self._label, file=sys.stderr)
            )
        self._bar.update(done - self._done)
        self._done = done
