from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TypeAlias

import h5py
import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import parse_layout
from registry.samples import Samples

Group: TypeAlias = h5py.Group


def field(group: Group, name: str, values: object, unit: str, **attributes: object) -> None:
    group[name] = values
    group[name].attrs.update({"units": unit, **attributes})


def nexus(path: Path, fill: Callable[[Group], None], default: bool = True) -> Path:
    """Write root, entry and one NXdata group, which ``fill`` fills."""
    with h5py.File(path, "w") as file:
        entry = file.create_group("entry")
        entry.attrs["NX_class"] = "NXentry"
        entry["start_time"] = "2031-05-06T14:00:00+02:00"
        data = entry.create_group("data")
        data.attrs["NX_class"] = "NXdata"
        if default:
            file.attrs["default"], entry.attrs["default"] = "entry", "data"
        fill(data)
    return path


def trace(data: Group) -> None:
    data.attrs.update({"signal": "current", "axes": ["P1"]})
    field(data, "P1", [0.0, 100.0, 200.0], "mV", level="source")
    field(data, "current", np.array([1, 2, 3], dtype=">i2"), "nA")


def test_a_trace_is_read_with_units_level_and_time(tmp_path: Path) -> None:
    samples = read_file(nexus(tmp_path / "f", trace))
    assert (samples.axes[0].name, samples.axes[0].unit, samples.axes[0].level) == ("P1", "V", "source")
    assert samples.axes[0].values.tolist() == [0.0, 0.1, 0.2]
    assert samples.signal().values.tolist() == [1e-9, 2e-9, 3e-9]
    assert samples.taken_at_us == 1_935_835_200_000_000


def test_a_single_group_is_found_without_default(tmp_path: Path) -> None:
    assert read_file(nexus(tmp_path / "f", trace, default=False)).shape == "trace"


def a_map(data: Group) -> None:
    field(data, "gate", np.arange(2.0), "V")
    field(data, "bias", np.arange(3.0), "mV")
    field(data, "current", np.arange(6.0).reshape(2, 3), "A")
    field(data, "lockin", np.ones((2, 3)), "V")
    field(data, "current_errors", np.ones((2, 3)), "A")


MARKS: dict[str, Callable[[Group], None]] = {
    "order of axes": lambda d: d.attrs.update({"signal": "current", "axes": ["gate", "bias"]}),
    "indices against the order": lambda d: d.attrs.update(
        {"signal": "current", "axes": ["bias", "gate"], "gate_indices": 0, "bias_indices": 1}
    ),
    "indices as lists": lambda d: d.attrs.update(
        {"signal": "current", "axes": ["bias", "gate"], "gate_indices": [0], "bias_indices": [1]}
    ),
    "indices alone": lambda d: d.attrs.update({"signal": "current", "gate_indices": 0, "bias_indices": 1}),
    "one text": lambda d: d.attrs.update({"signal": "current", "axes": "gate:bias"}),
    "bytes": lambda d: d.attrs.update({"signal": np.bytes_("current"), "axes": np.array([b"gate", b"bias"])}),
    "deprecated axes": lambda d: d["current"].attrs.update({"signal": 1, "axes": "[gate,bias]"}),
    "deprecated axis": lambda d: (
        d["current"].attrs.update({"signal": "1"}),
        d["gate"].attrs.update({"axis": 1}),
        d["bias"].attrs.update({"axis": 2, "primary": 1}),
        None,
    )[-1],
}


@pytest.mark.parametrize("marks", MARKS)
def test_the_axes_of_a_map_are_found_by_every_way_of_marking(marks: str, tmp_path: Path) -> None:
    def fill(data: Group) -> None:
        a_map(data)
        MARKS[marks](data)

    samples = read_file(nexus(tmp_path / "f", fill))
    assert [axis.name for axis in samples.axes] == ["gate", "bias"]
    assert samples.axes[1].values.tolist() == [0.0, 0.001, 0.002]
    assert samples.signal().values.tolist() == [[0.0, 1.0, 2.0], [3.0, 4.0, 5.0]]
    assert "current_errors were not used" in samples.notes[0]


def marked(**attributes: object) -> Callable[[Group], None]:
    def fill(data: Group) -> None:
        a_map(data)
        data.attrs.update({"signal": "current", "axes": ["gate", "bias"], **attributes})

    return fill


def test_auxiliary_signals_lie_on_the_same_axes(tmp_path: Path) -> None:
    samples = read_file(nexus(tmp_path / "f", marked(auxiliary_signals=["lockin"])))
    assert [signal.name for signal in samples.signals] == ["current", "lockin"]


def test_a_dimension_without_axis_is_numbered_and_noted(tmp_path: Path) -> None:
    samples = read_file(nexus(tmp_path / "f", marked(axes=[".", "bias"])))
    assert (samples.axes[0].name, samples.axes[0].unit) == ("index 1", "1")
    assert any("dimension 1 has no axis" in note for note in samples.notes)


def test_bin_edges_become_centres(tmp_path: Path) -> None:
    def fill(data: Group) -> None:
        trace(data)
        del data["P1"]
        field(data, "P1", [0.0, 2.0, 4.0, 6.0], "V")

    samples = read_file(nexus(tmp_path / "f", fill))
    assert samples.axes[0].values.tolist() == [1.0, 3.0, 5.0]
    assert "bin edges" in samples.notes[0]


def test_a_soft_link_inside_the_file_is_followed(tmp_path: Path) -> None:
    def fill(data: Group) -> None:
        trace(data)
        data.file["entry"].move("data/P1", "P1")
        data["P1"] = h5py.SoftLink("/entry/P1")

    assert read_file(nexus(tmp_path / "f", fill)).axes[0].name == "P1"


BAD: dict[str, tuple[Callable[[Group], None], str]] = {
    "signal not there": (marked(signal="voltage"), "'voltage', which is not there"),
    "axis not there": (marked(axes=["gate", "B9"]), "'B9', which is not there"),
    "axis of another length": (marked(axes=["bias", "bias"]), "stands for|lengths"),
    "index out of range": (marked(gate_indices=5), "dimension 5 of 2"),
    "index is a word": (marked(gate_indices="first"), "no whole number"),
    "scaling not settled": (
        lambda d: (marked()(d), d.create_dataset("current_scaling_factor", data=2.0), None)[-1],
        "scaling_factor",
    ),
    "no unit": (lambda d: (marked()(d), d["gate"].attrs.pop("units"), None)[-1], "'gate' has no unit"),
    "unknown unit": (lambda d: (marked()(d), d["gate"].attrs.update(units="mVolt2x"), None)[-1], "mVolt2x"),
    "signal is a text": (
        lambda d: (marked(signal="note")(d), d.create_dataset("note", data="x"), None)[-1],
        "no dataset of real numbers",
    ),
    "no signal named": (a_map, "names no signal"),
    "level of a current": (
        lambda d: (marked()(d), d["gate"].attrs.update(units="A", level="gate"), None)[-1],
        "has a level",
    ),
}


@pytest.mark.parametrize("flaw", BAD)
def test_a_group_that_contradicts_itself_is_refused(flaw: str, tmp_path: Path) -> None:
    fill, what = BAD[flaw]
    with pytest.raises(InputError, match=what):
        read_file(nexus(tmp_path / "f", fill))


def test_several_groups_without_default_are_listed(tmp_path: Path) -> None:
    path = nexus(tmp_path / "f", trace, default=False)
    with h5py.File(path, "a") as file:
        file.copy("entry/data", "entry/other")
    with pytest.raises(InputError, match="/entry/data, /entry/other"):
        read_file(path)


def with_scales(path: Path, label: str = "units") -> Path:
    with h5py.File(path, "w") as file:
        file["P1"], file["P2"], file["I"] = np.arange(2.0), np.arange(3.0), np.arange(6.0).reshape(2, 3)
        for name, unit in (("P1", "V"), ("P2", "mV"), ("I", "nA")):
            file[name].attrs[label] = unit
        file["P1"].make_scale("P1")
        file["P2"].make_scale("P2")
        file["I"].dims[0].attach_scale(file["P1"])
        file["I"].dims[1].attach_scale(file["P2"])
    return path


@pytest.mark.parametrize("label", ["units", "unit"])
def test_dimension_scales_are_the_axes(label: str, tmp_path: Path) -> None:
    samples = read_file(with_scales(tmp_path / "f", label))
    assert [axis.name for axis in samples.axes] == ["P1", "P2"]
    assert samples.axes[1].values.tolist() == [0.0, 0.001, 0.002]
    assert samples.signal().values[1].tolist() == [3e-9, 4e-9, 5e-9]


def test_datasets_on_different_scales_are_listed(tmp_path: Path) -> None:
    with h5py.File(with_scales(tmp_path / "f"), "a") as file:
        file["T"] = np.arange(2.0)
        file["T"].dims[0].attach_scale(file["P1"])
    with pytest.raises(InputError, match="different axes: /I, /T"):
        read_file(tmp_path / "f")


def by_layout(path: Path, more: str = "") -> Samples:
    text = 'format="hdf5"\n' + "".join(
        f'[[{table}]]\nname="{name}"\nunit="{unit}"\ndataset="{dataset}"\n'
        for table, name, unit, dataset in (
            ("axis", "A", "V", "a"),
            ("axis", "B", "V", "b"),
            ("signal", "I", "A", "g/i"),
        )
    )
    return read_file(path, parse_layout((text + more).encode(), "l"))


@pytest.mark.parametrize("long_form", [False, True])
def test_a_layout_names_datasets_on_a_grid_and_in_long_form(long_form: bool, tmp_path: Path) -> None:
    a, b = np.meshgrid([0.0, 1.0], [5.0, 6.0, 7.0], indexing="ij")
    with h5py.File(tmp_path / "f", "w") as file:
        file["a"] = a.reshape(-1) if long_form else a[:, 0]
        file["b"] = b.reshape(-1) if long_form else b[0]
        file["g/i"] = (a + b).reshape(-1) if long_form else a + b
    assert by_layout(tmp_path / "f").signal().values.tolist() == [[5.0, 6.0, 7.0], [6.0, 7.0, 8.0]]


def test_a_file_that_says_nothing_is_refused_with_a_list_of_its_datasets(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "f", "w") as file:
        file["a"] = np.arange(4.0)
    with pytest.raises(InputError) as caught:
        read_file(tmp_path / "f")
    assert "/a (4,)" in caught.value.remedy
    with pytest.raises(InputError, match=r"'b', which is not there|'g/i', which is not there"):
        by_layout(tmp_path / "f")


def test_a_layout_may_add_volts_to_a_file_that_describes_itself(tmp_path: Path) -> None:
    path = nexus(tmp_path / "f", trace)
    with h5py.File(path, "a") as file:
        file["entry"].attrs["B1"] = -0.5
    layout = parse_layout(b'format="hdf5"\n[volts]\nB1="entry@B1"\n', "l")
    assert read_file(path, layout).volts == {"B1": -0.5}


def test_repeated_sweeps_stay_a_trace(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "f", "w") as file:
        file["a"], file["i"] = np.arange(3.0), np.ones((2, 3))
    text = 'format="hdf5"\n[[axis]]\nname="A"\nunit="V"\ndataset="a"\n'
    text += '[[signal]]\nname="I"\nunit="A"\ndataset="i"'
    samples = read_file(tmp_path / "f", parse_layout(text.encode(), "l"))
    assert (samples.shape, len(samples.sweeps)) == ("trace", 2)
