"""How typed words become values without loading pydantic.

typer hands every parameter to pydantic, also a text that stays a text, and importing
pydantic costs a third of what importing SQLAlchemy costs.  Texts, paths and flags are
therefore turned here; numbers and choices are left to typer, with its messages.

This sets ``_runtime_param`` of typer's parameters, where typer itself keeps the coercion
it has built; a test says that it is still looked at.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from registry.errors import InputError

__all__ = ["lighten"]


@dataclass(frozen=True)
class _Light:
    """Coercion of one parameter: ``make`` is applied to every word."""

    make: Callable[[Any], Any]

    def coerce(self, value: Any, param: Any, ctx: Any) -> Any:
        """The value of a parameter; () or None where it was not given."""
        many = param.multiple or param.nargs == -1
        if value is None:
            return () if many else None
        return [self.make(one) for one in value] if many else self.make(value)


def _text(word: str) -> str:
    """A typed word; what is no Unicode text could be neither recorded nor looked up.

    File names are let through: they may hold any bytes.
    """
    try:
        word.encode()
    except UnicodeEncodeError as error:
        raise InputError(
            f"{word!r} holds bytes that are no text in this computer's encoding",
            where="command line",
            remedy="type it anew, or set the terminal to UTF-8",
        ) from error
    return word


_LIGHT: dict[Any, _Light] = {
    str: _Light(_text),
    list[str]: _Light(_text),
    Path: _Light(Path),
    list[Path]: _Light(Path),
    bool: _Light(bool),
}


def lighten(parameters: Iterable[Any]) -> None:
    """Let texts, paths and flags among typer's parameters be read without pydantic."""
    for parameter in parameters:
        descriptor = getattr(parameter, "type_descriptor", None)
        light = _LIGHT.get(getattr(descriptor, "annotation", None))
        if light is not None:
            parameter._runtime_param = light
