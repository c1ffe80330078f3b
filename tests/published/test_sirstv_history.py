"""NIST's SiRstv readings, loaded as a history, give NIST's analysis of variance.

NIST Statistical Reference Datasets (StRD), Analysis of Variance, "SiRstv" (Ehrstein and
Croarkin): five resistivity readings by each of five instruments, certified between and
within sums of squares and F.  The readings are in ohm cm and are kept in ohm m, as a
quantity of the laboratory's own; each instrument stands for a cooldown.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from registry.keeping.cooling import begin_cooldown
from registry.keeping.describing import add_chip, add_device, add_quantity
from registry.keeping.handle import Registry
from registry.keeping.loading import load_parameters
from registry.questions.frames import parameters_frame
from registry.questions.now import now
from registry.records.descriptions import Gate
from registry.records.instants import format_instant, parse_instant

READINGS = [
    [196.3052, 196.1240, 196.1890, 196.2569, 196.3403],
    [196.3042, 196.3825, 196.1669, 196.3257, 196.0422],
    [196.1303, 196.2005, 196.2889, 196.0343, 196.1811],
    [196.2795, 196.1748, 196.1494, 196.1485, 195.9885],
    [196.2119, 196.1051, 196.1850, 196.0052, 196.2090],
]
CERTIFIED_BETWEEN = 5.11462616000000e-02
CERTIFIED_WITHIN = 2.16636560000000e-01
CERTIFIED_F = 1.18046237440255e00

START = parse_instant("2026-01-01T00:00:00Z")
DAY = 86_400_000_000


def loaded(registry: Registry, folder: Path) -> pd.DataFrame:
    add_chip(registry, "S1")
    add_device(registry, "S1/W1", gates=[Gate("P1", "plunger", 0, 0, -1, 1, 0.01, 0.1)], at=START)
    add_quantity(registry, "resistivity", unit="ohm cm", valid_until="cooldown")
    lines = ["cooldown,quantity,subject,value,standard_uncertainty,unit,at,source"]
    for group, values in enumerate(READINGS):
        label = f"I{group + 1}"
        begin_cooldown(registry, label, cryostat="bench", chips=["S1"], at=START + group * 10 * DAY)
        for place, value in enumerate(values):
            at = format_instant(START + (group * 10 + place) * DAY)
            lines.append(f"{label},resistivity,,{value},,ohm cm,{at},SiRstv")
    (folder / "readings.csv").write_text("\n".join(lines) + "\n")
    assert load_parameters(registry, "S1/W1", folder / "readings.csv").new == 25
    return parameters_frame(registry, "S1/W1", "resistivity")


def test_the_history_gives_the_certified_analysis_of_variance(registry_on: Registry, tmp_path: Path) -> None:
    frame = loaded(registry_on, tmp_path)
    # Back to ohm cm; the conversion divides and multiplies by 100 and keeps each reading.
    frame["value"] *= 100
    assert list(frame["value"]) == pytest.approx(
        [value for values in READINGS for value in values], rel=1e-15
    )
    groups = frame.groupby("cooldown")["value"]
    mean = frame["value"].mean()
    between = float((5 * (groups.mean() - mean) ** 2).sum())
    within = float(((frame["value"] - groups.transform("mean")) ** 2).sum())
    # Seven digits are constant in the readings; doubles keep nine of the certified digits.
    assert between == pytest.approx(CERTIFIED_BETWEEN, rel=1e-9)
    assert within == pytest.approx(CERTIFIED_WITHIN, rel=1e-9)
    assert (between / 4) / (within / 20) == pytest.approx(CERTIFIED_F, rel=1e-9)


def test_every_reading_is_in_the_cooldown_of_its_instrument(registry_on: Registry, tmp_path: Path) -> None:
    frame = loaded(registry_on, tmp_path)
    assert sorted(frame["cooldown"].value_counts().items()) == [(f"I{i}", 5) for i in range(1, 6)]
    assert frame.attrs["units"] == {"resistivity": "ohm m"}
    assert now(registry_on, "S1/W1").to_json()["device"] == "S1/W1"
