"""README against the program (its tour is tried in tests/seed_demo/test_story.py)."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

import pytest
import typer.main

from registry.command.main import build

README = (Path(__file__).resolve().parents[1] / "README.md").read_text(encoding="utf-8")


def block(heading: str) -> list[str]:
    """The lines of the first fenced block under a heading."""
    section = re.split(r"\n## ", README.split(f"\n## {heading}\n", 1)[1])[0]
    return section.split("```")[1].strip("\n").splitlines()


def leaves(command: Any, words: tuple[str, ...] = ()) -> list[tuple[str, ...]]:
    if hasattr(command, "commands"):
        return [leaf for name, sub in command.commands.items() for leaf in leaves(sub, (*words, name))]
    return [words]


@pytest.mark.parametrize("heading", ["Run", "Test"])
def test_run_and_test_are_one_command_line_each(heading: str) -> None:
    assert len([line for line in block(heading) if line.strip()]) == 1


def test_every_command_is_named_in_the_readme() -> None:
    prose = re.sub(r"```.*?```", "", README, flags=re.DOTALL)
    named = set(re.findall(r"`([^`]+)`", prose))
    commands = [" ".join(words) for words in leaves(typer.main.get_command(build()))]
    assert [words for words in commands if words not in named] == []


def test_the_layout_and_criteria_of_the_readme_are_valid(tmp_path: Path) -> None:
    from registry.reading.layout import parse_layout
    from registry.reading.limit_lists import read_criteria

    criteria, layout = re.findall(r"```toml\n(.*?)```", README, re.DOTALL)
    assert parse_layout(layout.encode(), "README").derive == tomllib.loads(layout)["derive"]
    (tmp_path / "criteria.toml").write_text(criteria, encoding="utf-8")
    assert read_criteria(tmp_path / "criteria.toml")[0].guard == 2.0
