"""``millikeep admit``, ``fit`` and ``derive``: from a file to numbers."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from registry.command.declaring import command
from registry.command.options import At, Given, instant, pairs
from registry.command.outcome import Answer, ExitCode
from registry.command.recording import shortener
from registry.command.session import Session, progress

__all__ = ["add_to"]

MethodName = Annotated[str, typer.Argument(metavar="METHOD", help="`millikeep methods` lists them.")]
LayoutFile = Annotated[
    Path | None,
    typer.Option(
        "--layout", metavar="LAYOUT.TOML", help="Says where axes, signals and units stand in the file."
    ),
]


def admit(
    session: Session,
    files: Annotated[list[Path], typer.Argument(metavar="FILE", help="HDF5, delimited text, NPZ or NPY.")],
    tuning: Annotated[
        str | None,
        typer.Option(
            "--tuning", metavar="TUNING", help="The state it was measured in; the latest if not given."
        ),
    ] = None,
    kind: Annotated[
        str | None, typer.Option("--kind", metavar="KIND", help="A method's name, or a free word.")
    ] = None,
    layout: LayoutFile = None,
    derive: Annotated[
        bool, typer.Option("--derive", help="Also run the method that the kind or the layout names.")
    ] = False,
    at: At = None,
) -> Answer:
    """Copy measured files into the file store and record them.

    Each file stands alone: what is wrong with one does not stop the others, and the exit
    code is 2 if any failed. The original is never touched.
    """
    from registry.command.pages.admissions import admission_document, admission_lines, failure_lines
    from registry.keeping.admitting import admit as admit_files

    with session.registry() as registry:
        with progress("files") as moved:
            admission = admit_files(
                registry,
                files,
                tuning=tuning,
                kind=kind,
                layout=layout,
                derive=derive,
                at=instant(at),
                progress=moved,
            )
        ids = (one.kept.hex for one in admission.measurements)
        lines = admission_lines(admission, shortener(registry, ids))
    return Answer(
        admission_document(admission),
        lines,
        ExitCode.USAGE_OR_INPUT if admission.failed else ExitCode.DONE,
        messages=failure_lines(admission),
    )


def fit(
    session: Session,
    method: MethodName,
    file: Annotated[Path, typer.Argument(metavar="FILE", help="A measured file, anywhere.")],
    layout: LayoutFile = None,
    given: Given = None,
) -> Answer:
    """Run a method on a bare file, and record nothing.

    No registry is needed. The exit code is 1 if the method refuses, with the reason.
    """
    from registry.command.pages.fits import result_document, result_lines
    from registry.keeping.deriving import fit_file

    result = fit_file(method, file, layout=layout, given=pairs(given, "--given"))
    return Answer(result_document(result), result_lines(result), _code(refused=result.refused is not None))


def derive(
    session: Session,
    method: MethodName,
    measurements: Annotated[
        list[str], typer.Argument(metavar="MEASUREMENT", help="Ids that `millikeep admit` printed.")
    ],
    given: Given = None,
    subject: Annotated[
        str | None,
        typer.Option("--subject", metavar="SITE-or-GATE", help="What the summary values are values of."),
    ] = None,
) -> Answer:
    """Run a method on measurements and record its parameters.

    The exit code is 1 if the method refuses; the analysis is recorded all the same.
    """
    from registry.command.pages.fits import derived_document, derived_lines
    from registry.keeping.deriving import derive as derive_from

    with session.registry() as registry:
        runs = derive_from(registry, method, measurements, given=pairs(given, "--given"), subject=subject)
        ids = (kept.hex for run in runs for kept in run.parameters)
        lines = derived_lines(runs, shortener(registry, ids))
    refused = any(run.result.refused is not None for run in runs)
    return Answer(derived_document(runs), lines, _code(refused=refused))


def _code(*, refused: bool) -> ExitCode:
    return ExitCode.BAD_NEWS if refused else ExitCode.DONE


def add_to(app: typer.Typer) -> None:
    """Add the three commands to the application."""
    command(app, "admit", example="millikeep admit peaks.h5 --tuning latest --kind coulomb-peaks")(admit)
    command(app, "fit", example="millikeep fit coulomb-peaks peaks.h5 --given lever_arm=0.1±0.008")(fit)
    command(
        app,
        "derive",
        example="millikeep derive coulomb-peaks 6f3a90c14e --given lever_arm=0.1±0.008",
    )(derive)
