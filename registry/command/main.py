"""Where the shell enters: the commands in their order, one run, one exit code."""

from __future__ import annotations

import io
import sys
import traceback
from collections.abc import Sequence
from contextlib import nullcontext, redirect_stdout
from typing import Annotated, Any, NoReturn

import typer
from typer.exceptions import TyperException
from typer.main import get_command

from registry.command import (
    asking,
    change,
    chip,
    cooldown,
    demo,
    device,
    files,
    gate,
    judging,
    keep,
    lists,
    parameter,
    tuning,
    wiring,
)
from registry.command.declaring import SETTINGS, Group
from registry.command.outcome import Answer, ExitCode, exit_code_of
from registry.command.printing import error_document, error_lines, print_answer, print_error
from registry.command.session import Session
from registry.errors import InputError, MillikeepError, RegistryError

__all__ = ["build", "main", "run"]

PROGRAM = "millikeep"

ORDER = (
    *("create", "demo"),
    *("chip", "device", "gate", "cooldown", "wiring", "tuning"),
    *("admit", "fit", "derive", "parameter"),
    *("criteria", "judge"),
    *("now", "last-good", "compare", "lineage", "find"),
    *("amend", "withdraw", "attach"),
    *("audit", "stamp", "backup", "migrate"),
    *("methods", "quantities", "events"),
)
"""Commands as the help page lists them: roughly in the order in which they are needed."""

FIRST_AFTERNOON = """\
Keep the history of gate-defined quantum-dot devices: chips, cooldowns, wiring, gate
voltage sets, measurements, extracted parameters. Every number is tied to the file and
the code it came from.

\b
A first afternoon:
  millikeep demo try-me                      look around in an invented lab
  millikeep create ~/lab                     make your own registry
  export MILLIKEEP_REGISTRY=~/lab            … and let every command use it
  millikeep chip add W3-07                   describe the chip
  millikeep device add W3-07/A --gates gates.csv --sites sites.csv
  millikeep cooldown begin CD12 --cryostat Fridge2 --chip W3-07
  millikeep tuning record W3-07/A --volts volts.csv
  millikeep admit peaks.h5                   keep a measured file
  millikeep derive coulomb-peaks ID --given lever_arm=0.1±0.008
  millikeep judge latest good --why "sharp peaks"
  millikeep cooldown mark CD12 warm-up       … weeks later
  millikeep last-good W3-07/A                which state to go back to, why
  millikeep lineage ID                       where a number came from

Every command takes --json and --help. Exit codes: 0 done, 1 the answer is bad news, 2 the
usage or the input is wrong.
"""


def build() -> typer.Typer:
    """The application with all its commands."""
    app = typer.Typer(
        name=PROGRAM,
        cls=_InOrder,
        help=FIRST_AFTERNOON,
        rich_markup_mode=None,
        pretty_exceptions_enable=False,
        invoke_without_command=True,
        context_settings=SETTINGS,
    )
    app.callback()(_root)
    keep.add_beginning(app)
    demo.add_to(app)
    app.add_typer(chip.app, name="chip")
    app.add_typer(device.app, name="device")
    app.add_typer(gate.app, name="gate")
    app.add_typer(cooldown.app, name="cooldown")
    app.add_typer(wiring.app, name="wiring")
    app.add_typer(tuning.app, name="tuning")
    files.add_to(app)
    app.add_typer(parameter.app, name="parameter")
    app.add_typer(judging.app, name="criteria")
    judging.add_to(app)
    asking.add_to(app)
    change.add_to(app)
    keep.add_care(app)
    lists.add_to(app)
    app.add_typer(lists.quantities_app, name="quantities")
    return app


class _InOrder(Group):
    """Lists the commands in our order; a group and a command would else stand apart."""

    def list_commands(self, ctx: Any) -> list[str]:
        return sorted(super().list_commands(ctx), key=ORDER.index)


def _root(
    context: typer.Context,
    where: Annotated[
        str | None,
        typer.Option(
            "--registry",
            metavar="PATH-or-URL",
            help="Directory or postgresql:// URL; else MILLIKEEP_REGISTRY, else your data directory.",
        ),
    ] = None,
    person: Annotated[
        str | None, typer.Option("--as", metavar="NAME", help="Who acts; your login name if not given.")
    ] = None,
    _as_json: Annotated[
        bool, typer.Option("--json", help="Print one JSON document; messages go to stderr.")
    ] = False,
    version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False,
) -> Answer | None:
    context.obj = Session(where=where, person=person)
    if version:
        return _version()
    if context.invoked_subcommand is None:
        raise InputError(
            "no command is given", where=PROGRAM, remedy="`millikeep --help` shows where to begin"
        )
    return None


def _version() -> Answer:
    from importlib.metadata import version

    number = version(PROGRAM)
    return Answer({"version": number}, (f"{PROGRAM} {number}",))


def run(words: Sequence[str]) -> int:
    """Run one command line and print its outcome; the exit code is returned.

    Args:
        words: what follows the program's name.
    """
    as_json = _wants_json(words)
    stray = io.StringIO()
    try:
        # Under --json stdout takes one document only: a help page is caught, and put into it.
        with redirect_stdout(stray) if as_json else nullcontext():
            outcome = get_command(build()).main(list(words), PROGRAM, standalone_mode=False)
        return _end(outcome, stray.getvalue(), as_json=as_json)
    except (MillikeepError, TyperException, OSError) as error:
        return _fail(_told(error), as_json=as_json)
    except Exception as error:
        # A fault of ours: the whole traceback for a report, and still an error of our form.
        traceback.print_exc(file=sys.stderr)
        return _fail(_told(error), as_json=as_json)


def _end(outcome: Answer | int | None, printed: str, *, as_json: bool) -> int:
    """Print what a command handed back; typer hands back a number after help or Ctrl-C."""
    if isinstance(outcome, Answer):
        print_answer(outcome, as_json=as_json)
        return outcome.code
    if outcome == ExitCode.INTERRUPTED:
        _fail(_told(KeyboardInterrupt()), as_json=as_json)
        return ExitCode.INTERRUPTED
    if as_json:
        print_answer(Answer({"help": printed}, ()), as_json=True)
    return int(outcome or ExitCode.DONE)


def _wants_json(words: Sequence[str]) -> bool:
    """Whether ``--json`` stands among the options, before or after the command.

    Asked of the words themselves, because an error in parsing them is told as JSON too.
    """
    end = words.index("--") if "--" in words else len(words)
    return "--json" in words[:end]


def _fail(error: MillikeepError, *, as_json: bool) -> int:
    print_error(error_document(error), error_lines(error), as_json=as_json)
    return exit_code_of(error)


def _told(error: BaseException) -> MillikeepError:
    """Any error in our form: what, where, what to do."""
    if isinstance(error, MillikeepError):
        return error
    if isinstance(error, TyperException):
        context = getattr(error, "ctx", None)
        path = context.command_path if context is not None else PROGRAM
        # The parser marks what a choice refuses as a value error; people need only the rest.
        what = " ".join(error.format_message().split()).replace("Value error, ", "")
        return InputError(what, where=path, remedy=f"`{path} --help` shows how it is used")
    if isinstance(error, KeyboardInterrupt):
        return RegistryError(
            "interrupted", where=PROGRAM, remedy="what was acknowledged is kept; run the command again"
        )
    if isinstance(error, OSError):
        what = error.strerror or str(error)
        return RegistryError(
            what, where=str(error.filename or PROGRAM), remedy="check the name, the rights, the disk"
        )
    return RegistryError(
        f"a fault of the program: {type(error).__name__}: {error}",
        where=PROGRAM,
        remedy="please report it with the lines above",
    )


def main() -> NoReturn:
    """Run the command line of this process and exit with its code."""
    sys.exit(run(sys.argv[1:]))


if __name__ == "__main__":
    main()
