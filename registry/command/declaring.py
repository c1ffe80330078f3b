"""How a command is declared: a plain function becomes one, with an example and ``--json``.

A command is a plain function of the session and its own arguments that returns an
``Answer``; ``command`` puts it into a typer application.
"""

from __future__ import annotations

import functools
import inspect
from collections.abc import Callable
from typing import Annotated, Any, Concatenate, ParamSpec, get_type_hints

import typer
from typer.core import TyperCommand, TyperGroup, TyperOption

from registry.command.coercing import lighten
from registry.command.outcome import Answer
from registry.command.session import Session
from registry.command.spreading import Form, spread

__all__ = ["SETTINGS", "Group", "command", "group", "with_example"]

Asked = ParamSpec("Asked")
Act = Callable[Concatenate[Session, Asked], Answer]
SETTINGS = {"help_option_names": ["--help", "-h"]}


def group(summary: str) -> typer.Typer:
    """An application for the commands of one noun."""
    return typer.Typer(
        help=summary,
        cls=Group,
        rich_markup_mode=None,
        pretty_exceptions_enable=False,
        add_completion=False,
        context_settings=SETTINGS,
    )


def command(app: typer.Typer, name: str, *, example: str) -> Callable[[Act[Asked]], Act[Asked]]:
    """Declare a command; its help is the function's docstring and ends in ``example``."""

    def declare(act: Act[Asked]) -> Act[Asked]:
        run = _taking_context(act)
        app.command(name, epilog=with_example(example), cls=_Command, context_settings=SETTINGS)(run)
        return act

    return declare


def with_example(example: str) -> str:
    """The end of a help page: lines that can be pasted into a shell."""
    lines = "\n".join(f"  {line}" for line in example.strip().splitlines())
    # A line of \b alone keeps the lines below it as they are.
    return f"\b\nExample:\n{lines}"


def _taking_context(act: Callable[..., Answer]) -> Callable[..., Answer]:
    """``act`` as typer wants it: the context in place of the session, and ``--json`` added."""
    signature = inspect.signature(act, eval_str=True)
    _, *own = signature.parameters.values()
    keyword = inspect.Parameter.KEYWORD_ONLY
    option = Annotated[bool, typer.Option("--json", help="Print one JSON document.")]

    @functools.wraps(act)
    def run(context: typer.Context, as_json: bool, **asked: Any) -> Answer:
        # ``main`` looks for --json in the words themselves; here it only has its place.
        return act(context.ensure_object(Session), **asked)

    parameters = [
        inspect.Parameter("context", keyword, annotation=typer.Context),
        *(parameter.replace(kind=keyword) for parameter in own),
        inspect.Parameter("as_json", keyword, default=False, annotation=option),
    ]
    hints = get_type_hints(act, include_extras=True)
    run.__signature__ = signature.replace(parameters=parameters)  # type: ignore[attr-defined]  # typer reads it
    run.__annotations__ = {"context": typer.Context, "as_json": option, **hints}
    del run.__wrapped__  # else its signature would be read instead
    return run


class Group(TyperGroup):
    """A group whose own options are read without pydantic."""

    def parse_args(self, ctx: Any, args: list[str]) -> list[str]:
        """As of typer."""
        lighten(self.get_params(ctx))
        return super().parse_args(ctx, args)


class _Command(TyperCommand):
    """Lets ``--given a=1 b=2`` and ``--chip A B`` stand for the option written twice."""

    def parse_args(self, ctx: Any, args: list[str]) -> list[str]:
        """As of typer."""
        parameters = self.get_params(ctx)
        lighten(parameters)
        options = {
            name: _form(one) for one in parameters if isinstance(one, TyperOption) for name in one.opts
        }
        arguments = [one for one in parameters if not isinstance(one, TyperOption)]
        places = len(arguments) if all(one.nargs == 1 for one in arguments) else None
        return super().parse_args(ctx, list(spread(args, options, places)))


def _form(option: TyperOption) -> Form:
    return Form(
        takes_value=not option.is_flag, many=bool(option.multiple), pairs="=" in (option.metavar or "")
    )
