from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from registry.reading.entry import read_file
from registry.reading.layout import parse_layout
from seed_demo.bench import moment_of
from seed_demo.folder import write_file
from seed_demo.layouts import layout_text
from seed_demo.sessions import PlannedFile
from seed_demo.year import build_year

YEAR = build_year(stretches=("B1", "H1", "B5"))
ONE_OF_EACH = list({(p.form, p.kind): p for p in YEAR.files}.values())


@pytest.mark.parametrize("planned", ONE_OF_EACH, ids=lambda p: f"{p.form}-{p.kind}")
def test_the_reader_finds_what_was_written(planned: PlannedFile, tmp_path: Path) -> None:
    trace, moment = write_file(planned, YEAR, tmp_path), moment_of(planned)
    layout = parse_layout(layout_text(planned).encode(), "layout.toml")
    samples = read_file(tmp_path / planned.path, layout)
    level = "gate" if planned.form == "nexus" else "source"
    scale = 1.0 if level == "gate" else moment.lines[planned.gate].divider
    assert (samples.shape, samples.kind, samples.volts_level) == ("trace", planned.kind, level)
    assert samples.axes[0].name == planned.gate
    assert np.allclose(samples.axes[0].values, scale * trace.volts, atol=1e-7, rtol=0)
    assert np.allclose(samples.signal().values, trace.values, atol=1e-16, rtol=0)
    assert samples.taken_at_us == round(planned.at.timestamp() * 1_000_000)
    at_level = {g: v if level == "gate" else moment.lines[g].divider * v for g, v in planned.volts.items()}
    assert samples.volts == pytest.approx(at_level, abs=1e-7)
    assert samples.settings == moment.settings
    assert [s.direction for s in samples.sweeps] == (["up", "down"] if planned.both_ways else ["up"])
