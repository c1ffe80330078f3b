from __future__ import annotations

import json
import tomllib
from pathlib import Path

import h5py
import numpy as np
import pytest

from seed_demo.bench import measure, moment_of
from seed_demo.files import write_nexus
from seed_demo.folder import write_file
from seed_demo.layouts import layout_name, layout_text, signal_name
from seed_demo.sessions import PlannedFile
from seed_demo.year import Year, build_year


@pytest.fixture(scope="module")
def year() -> Year:
    return build_year(stretches=("B1", "H1"))


def first(year: Year, form: str, kind: str) -> PlannedFile:
    return next(p for p in year.files if (p.form, p.kind) == (form, kind))


def test_nexus_files_lead_to_their_plot(year: Year, tmp_path: Path) -> None:
    planned = first(year, "nexus", "pinch-off")
    trace = write_file(planned, year, tmp_path)
    with h5py.File(tmp_path / planned.path) as file:
        entry = file[file.attrs["default"].decode()]
        data = entry[entry.attrs["default"].decode()]
        assert (entry.attrs["NX_class"], data.attrs["NX_class"]) == (b"NXentry", b"NXdata")
        axis = data[data.attrs["axes"][0].decode()]
        signal = data[data.attrs["signal"].decode()]
        assert (axis.attrs["units"], signal.attrs["units"]) == (b"V", b"A")
        assert np.array_equal(axis[()], trace.volts)
        assert np.array_equal(signal[()], trace.values)
        assert dict(entry["gates"].attrs) == planned.volts


def test_nexus_files_hold_no_time_of_writing(year: Year, tmp_path: Path) -> None:
    planned = first(year, "nexus", "coulomb-peaks")
    write_nexus(tmp_path / "one.h5", measure(planned, year), moment_of(planned))
    with h5py.File(tmp_path / "one.h5") as file:
        objects = [file, *(file[name] for name in ("entry", "entry/trace", "entry/trace/SP", "entry/title"))]
        assert [h5py.h5o.get_info(item.id).mtime for item in objects] == [0] * 5


@pytest.mark.parametrize("form", ["nexus", "slip", "slip-comma"])
def test_the_same_plan_gives_the_same_bytes(year: Year, tmp_path: Path, form: str) -> None:
    planned = first(year, form, "dot-transition" if form == "slip" else "coulomb-peaks")
    write_file(planned, year, tmp_path / "one")
    write_file(planned, build_year(stretches=(planned.stretch,)), tmp_path / "two")
    assert (tmp_path / "one" / planned.path).read_bytes() == (tmp_path / "two" / planned.path).read_bytes()


@pytest.mark.parametrize("form", ["slip", "slip-comma"])
def test_slip_files_hold_volts_at_the_source(year: Year, tmp_path: Path, form: str) -> None:
    planned = first(year, form, "pinch-off")
    trace = write_file(planned, year, tmp_path)
    head, about, names, *rows = (tmp_path / planned.path).read_text(encoding="utf-8").splitlines()
    assert head.startswith("# slip 3: pinch-off")
    panel = json.loads(about[2:])["panel"]
    assert panel == pytest.approx({gate: 4 * volts for gate, volts in planned.volts.items()}, abs=1e-7)
    assert names == f"{planned.gate} [V]\tchannel_current [nA]"
    assert all(("," in row) == (form == "slip-comma") for row in rows)
    columns = np.asarray([[float(c.replace(",", ".")) for c in row.split("\t")] for row in rows])
    assert np.allclose(columns[:, 0], 4 * trace.volts, atol=6e-8, rtol=0)
    assert np.allclose(1e-9 * columns[:, 1], trace.values, atol=1e-16, rtol=0)


def test_source_volts_lie_on_the_grid_of_the_source(year: Year) -> None:
    planned = first(year, "slip", "dot-transition")
    line = moment_of(planned).lines[planned.gate]
    steps = line.at_source(measure(planned, year).volts) / line.resolution
    assert np.allclose(steps, np.round(steps), atol=1e-6)


def test_layouts_are_toml_and_name_what_the_files_hold(year: Year) -> None:
    for planned in year.files:
        layout = tomllib.loads(layout_text(planned))
        assert layout["kind"] == planned.kind
        if planned.form != "nexus":
            assert layout["axis"][0]["name"] == planned.gate
            assert layout["signal"][0]["name"] == signal_name(planned)


def test_a_signal_is_called_in_the_layout_as_in_the_file(year: Year) -> None:
    one_of_each = {(p.device.name, p.kind): p for p in year.files}
    assert all(measure(p, year).signal == signal_name(p) for p in one_of_each.values())


def test_one_layout_serves_all_files_of_its_name(year: Year) -> None:
    texts: dict[str, set[str]] = {}
    for planned in year.files:
        texts.setdefault(layout_name(planned), set()).add(layout_text(planned))
    assert {len(found) for found in texts.values()} == {1}
