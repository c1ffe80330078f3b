"""Every command explains itself, and what it explains is true."""

from __future__ import annotations

import shlex
from collections.abc import Iterator
from typing import Any

import pytest
import typer
from typer.main import get_command

from registry.command.main import ORDER, build

ROOT: Any = get_command(build())

PROMISED = {
    *("create", "migrate", "demo", "now", "find", "chip add", "device add", "device revise", "gate mark"),
    *("cooldown begin", "cooldown mark", "wiring revise", "tuning record", "tuning revisit", "tuning load"),
    *("tuning list", "tuning show", "admit", "fit", "derive", "parameter load", "criteria add", "judge"),
    *("amend", "withdraw", "attach", "last-good", "compare", "lineage", "audit", "stamp", "backup"),
    *("methods", "quantities", "quantities add", "events"),
}


def walk(command: Any = ROOT, path: tuple[str, ...] = ()) -> Iterator[tuple[str, ...]]:
    yield path
    for name, inner in getattr(command, "commands", {}).items():
        yield from walk(inner, (*path, name))


def command_at(path: tuple[str, ...]) -> tuple[Any, typer.Context]:
    command, context = ROOT, typer.Context(ROOT, info_name="millikeep")
    for name in path:
        command = command.commands[name]
        context = typer.Context(command, info_name=name, parent=context)
    return command, context


EVERY = list(walk())
RUNNABLE = [path for path in EVERY if " ".join(path) in PROMISED]


def test_the_commands_are_exactly_the_promised_ones() -> None:
    groups = {path[:1] for path in EVERY if len(path) == 2} - {("quantities",)}
    assert {" ".join(path) for path in EVERY if path and path not in groups} == PROMISED


def test_every_command_has_its_place_in_the_order_of_the_help_page() -> None:
    assert sorted(ORDER) == sorted(ROOT.commands)


@pytest.mark.parametrize("path", EVERY, ids=" ".join)
def test_help_fits_into_80_columns_and_its_summaries_are_whole(path: tuple[str, ...]) -> None:
    command, context = command_at(path)
    lines = command.get_help(context).splitlines()
    assert [line for line in lines if len(line) > 80] == []
    assert [line for line in lines[1:] if line.endswith("...")] == []


@pytest.mark.parametrize("path", RUNNABLE, ids=" ".join)
def test_every_command_explains_itself_its_options_and_json(path: tuple[str, ...]) -> None:
    command, _ = command_at(path)
    assert command.help
    assert [parameter.name for parameter in command.params if not parameter.help] == []
    assert "--json" in [name for parameter in command.params for name in parameter.opts]


@pytest.mark.parametrize("path", RUNNABLE, ids=" ".join)
def test_the_help_ends_in_an_example_that_the_parser_takes(path: tuple[str, ...]) -> None:
    command, context = command_at(path)
    shown = command.get_help(context).split("Example:\n")[-1].replace("\\\n", " ")
    lines = [shlex.split(line) for line in shown.splitlines()]
    assert lines
    assert all(words[0] == "millikeep" for words in lines)
    assert any(tuple(words[1 : 1 + len(path)]) == path for words in lines)
    for words in lines:
        _parse(words[1:])


def _parse(words: list[str]) -> None:
    """Let typer parse the words, the inner command included, without running anything."""
    context = ROOT.make_context("millikeep", list(words))
    rest = [*context._protected_args, *context.args]
    command = ROOT
    while hasattr(command, "commands") and rest:
        command = command.commands[rest[0]]
        context = command.make_context(rest[0], rest[1:], parent=context)
        rest = [*context._protected_args, *context.args]


def test_the_first_page_shows_a_first_afternoon_whose_commands_exist() -> None:
    shown = ROOT.help.split("A first afternoon:\n")[1].split("\n\n")[0]
    lines = [
        line.split("  ")[0] for line in map(str.strip, shown.splitlines()) if line.startswith("millikeep")
    ]
    assert len(lines) >= 10
    for line in lines:
        _parse(shlex.split(line)[1:])
