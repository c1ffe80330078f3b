"""Which files lie on the demo laboratory's disk: raw files, layouts, the old script's values."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

from seed_demo import calendar
from seed_demo.ageing import rng_for
from seed_demo.bench import measure, moment_of
from seed_demo.files import write_nexus, write_slip
from seed_demo.instruments import Trace
from seed_demo.layouts import layout_name, layout_text
from seed_demo.sessions import PlannedFile
from seed_demo.year import Year

__all__ = ["OLD_METHOD", "OldValue", "old_values", "old_values_text", "write_file", "write_folder"]

# The script that stood before the program's own methods, as free text NAME/VERSION.
OLD_METHOD = "evening-fit/2"

# What the old script took for the full width of a peak, in kT (the many-level shape), and
# what the width of a single-level peak is (C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646).
_MANY_LEVELS, _SINGLE_LEVEL = 4.354638, 3.525494

# The old script's scatter as a part of the value (V for a threshold), and what it claimed.
_OLD_SCATTER = {"electron_temperature": 0.010, "addition_voltage": 0.0008, "threshold_voltage": 4.0e-4}


@dataclass(frozen=True)
class OldValue:
    """A number that the old script gave, to be loaded from a table."""

    device: str
    cooldown: str
    quantity: str
    subject: str
    value: float
    standard_uncertainty: float
    unit: str
    at: str
    source: str


def write_file(planned: PlannedFile, year: Year, raw: Path) -> Trace:
    """Simulate one planned file, write it below ``raw`` and return its trace with the truth."""
    trace, moment, path = measure(planned, year), moment_of(planned), raw / planned.path
    path.parent.mkdir(parents=True, exist_ok=True)
    if planned.form == "nexus":
        write_nexus(path, trace, moment)
    else:
        write_slip(path, trace, moment, decimal_comma=planned.form == "slip-comma")
    return trace


def write_folder(
    year: Year, folder: Path, *, progress: Callable[[int, int], None] | None = None
) -> dict[str, Trace]:
    """Write ``raw/``, ``layouts/`` and ``old/`` below ``folder``.

    Returns:
        The traces with their truth, by the path of the planned file.
    """
    (folder / "layouts").mkdir(parents=True, exist_ok=True)
    traces = {}
    for number, planned in enumerate(year.files, 1):
        traces[planned.path] = write_file(planned, year, folder / "raw")
        if progress is not None:
            progress(number, len(year.files))
    for name, text in sorted({layout_name(p): layout_text(p) for p in year.files}.items()):
        (folder / "layouts" / name).write_text(text, encoding="utf-8", newline="\n")
    values = list(old_values(year, traces))
    (folder / "old").mkdir(exist_ok=True)
    for device in sorted({value.device for value in values}):
        text = old_values_text([value for value in values if value.device == device])
        (folder / "old" / f"{device}.csv").write_text(text, encoding="utf-8", newline="\n")
    return traces


def old_values(year: Year, traces: dict[str, Trace]) -> Iterator[OldValue]:
    """Values the old script had given for the files taken before the change of code."""
    for planned in year.files:
        if planned.at >= calendar.CODE_CHANGE or planned.kind not in ("coulomb-peaks", "pinch-off"):
            continue
        trace = traces[planned.path]
        direction = "up" if planned.kind == "pinch-off" else None
        wanted = ("threshold_voltage",) if direction else ("electron_temperature", "addition_voltage")
        for quantity in wanted:
            true = trace.truth(quantity, direction=direction)
            unit = "K" if quantity == "electron_temperature" else "V"
            yield _old_value(planned, year, quantity, true, unit)


def _old_value(planned: PlannedFile, year: Year, quantity: str, true: float, unit: str) -> OldValue:
    single = planned.kind == "coulomb-peaks" and (
        planned.device.site(planned.subject).line_shape == "single-level"
    )
    if quantity == "electron_temperature" and single:
        true *= _SINGLE_LEVEL / _MANY_LEVELS
    scatter = _OLD_SCATTER[quantity] * (1.0 if quantity == "threshold_voltage" else true)
    rng = rng_for(year.seed, "old", planned.path, quantity)
    return OldValue(
        device=planned.device.name,
        cooldown=planned.cooldown,
        quantity=quantity,
        subject=planned.subject,
        value=true + scatter * float(rng.standard_normal()),
        standard_uncertainty=abs(scatter),
        unit=unit,
        at=f"{planned.at:%Y-%m-%dT%H:%M:%SZ}",
        source=planned.path,
    )


def old_values_text(values: list[OldValue]) -> str:
    """Table of old values of one device, in the columns that a parameter table has."""
    out = io.StringIO()
    table = csv.writer(out, lineterminator="\n")
    table.writerow(
        (
            *("cooldown", "quantity", "subject", "value", "standard_uncertainty"),
            *("unit", "at", "source", "method"),
        )
    )
    for v in values:
        numbers = (f"{v.value:.7g}", f"{v.standard_uncertainty:.3g}")
        table.writerow((v.cooldown, v.quantity, v.subject, *numbers, v.unit, v.at, v.source, OLD_METHOD))
    return out.getvalue()
