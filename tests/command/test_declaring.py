from __future__ import annotations

from typing import Annotated, Any

import pytest
import typer
from typer.main import get_command

from registry.command.declaring import command, group, with_example
from registry.command.outcome import Answer
from registry.command.session import Session

Many = Annotated[list[str] | None, typer.Option("--chip", metavar="CHIP")]
Pairs = Annotated[list[str] | None, typer.Option("--given", metavar="NAME=VALUE")]


def begin(
    session: Session,
    label: Annotated[str, typer.Argument()],
    chip: Many = None,
    note: Annotated[str | None, typer.Option("--note")] = None,
    correct: Annotated[bool, typer.Option("--correct")] = False,
) -> Answer:
    """Take one word and an option that is many."""
    return Answer({"label": label, "chip": chip or [], "note": note, "correct": correct}, ())


def derive(session: Session, files: Annotated[list[str], typer.Argument()], given: Pairs = None) -> Answer:
    """Take many words and pairs."""
    return Answer({"files": files, "given": given or []}, ())


def parsed(words: str) -> Any:
    app = group("Two commands.")
    command(app, "begin", example="begin x")(begin)
    command(app, "derive", example="derive x")(derive)
    return get_command(app).main(words.split(), "app", standalone_mode=False).document


LABEL = {"label": "L", "chip": ["A", "B"], "note": None, "correct": False}
SPREAD = {
    "begin L --chip A --chip B": LABEL,
    "begin L --chip A B": LABEL,
    "begin --chip A B L": LABEL,
    "begin --chip A L --chip B": LABEL,
    "begin --chip=A B L": LABEL,
    "begin --chip A L": LABEL | {"chip": ["A"]},
    "begin L --chip A B --note x --correct": LABEL | {"note": "x", "correct": True},
    "begin --note x --chip A B -- L": LABEL | {"note": "x"},
    "begin --chip A -- L": LABEL | {"chip": ["A"]},
    "begin --note --chip L": {"label": "L", "chip": [], "note": "--chip", "correct": False},
    "derive m --given a=1 b=2 f": {"files": ["m", "f"], "given": ["a=1", "b=2"]},
    "derive --given a=1 m f b=2": {"files": ["m", "f", "b=2"], "given": ["a=1"]},
    "derive m --given a=1 --json b=2": {"files": ["m", "b=2"], "given": ["a=1"]},
}


@pytest.mark.parametrize(("words", "values"), SPREAD.items())
def test_an_option_that_is_many_takes_the_words_that_can_only_be_its_own(words: str, values: object) -> None:
    assert parsed(words) == values


def test_the_function_that_is_declared_stays_callable_from_python() -> None:
    app = group("One command.")
    declared = command(app, "begin", example="begin x")(begin)
    assert declared(Session(), "L").document["label"] == "L"


def test_an_example_keeps_its_lines() -> None:
    assert with_example("one \\\n  two") == "\b\nExample:\n  one \\\n    two"
