"""``millikeep parameter``: values with uncertainty that come from elsewhere."""

from __future__ import annotations

from typing import Annotated

import typer

from registry.command.declaring import command, group
from registry.command.options import DeviceName, SheetPath
from registry.command.outcome import Answer
from registry.command.session import Session, progress

app = group("Parameters: values with uncertainty that come from elsewhere.")


@command(
    app,
    "load",
    example="millikeep parameter load W3-07/A old-values.csv --dry-run\n"
    "millikeep parameter load W3-07/A old-values.csv",
)
def load(
    session: Session,
    device: DeviceName,
    table: SheetPath,
    dry_run: Annotated[bool, typer.Option("--dry-run", help="Check everything, record nothing.")] = False,
) -> Answer:
    """Record many values from one table.

    Columns: cooldown,quantity,subject,value,standard_uncertainty,unit,at,source
    [,tuning,method]. An empty standard_uncertainty means unknown; method is free text
    NAME/VERSION. With a fault in any row nothing is recorded.
    """
    from registry.command.pages.loads import load_lines
    from registry.keeping.loading import load_parameters

    with session.registry() as registry, progress("values") as moved:
        loaded = load_parameters(registry, device, table, dry_run=dry_run, progress=moved)
    document = {"rows": loaded.rows, "new": loaded.new, "already": loaded.already, "dry_run": dry_run}
    return Answer(document, load_lines(loaded, "values", dry_run=dry_run), messages=loaded.notes)
