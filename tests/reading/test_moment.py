from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import parse_layout
from registry.samples import Samples

TEXT = """# {"gates": {"P1": 0.5, "B1": [-250, "mV"], "T1": {"value": 1.5, "unit": "V"}},
#  "list": [1, {"x y": 2.5}],
#  "magnet": "150 mT", "operator": "AB", "when": "2031-05-06T14:00:00+02:00", "local": "2031-05-06 14:00"}
# temperature: 20 mK
# unix = 1935835200.5
P1 [V],I [A]
0,1
1,2
"""


def from_text(folder: Path, layout: str, text: str = TEXT) -> Samples:
    (folder / "f").write_text(text)
    return read_file(folder / "f", parse_layout(('format="text"\n' + layout).encode(), "l"))


def test_all_gates_are_taken_from_one_json_object(tmp_path: Path) -> None:
    samples = from_text(tmp_path, '[volts]\nall="$.gates"\nlevel="source"')
    assert samples.volts == {"P1": 0.5, "B1": -0.25, "T1": 1.5}
    assert samples.volts_level == "source"


def test_gates_are_taken_one_by_one_with_unit_and_factor(tmp_path: Path) -> None:
    layout = '[volts]\nunit="mV"\nA="$.gates.P1"\nB={path=\'$.list[1]["x y"]\', unit="V", factor=2.0}'
    assert from_text(tmp_path, layout).volts == {"A": 0.0005, "B": 5.0}


def test_settings_come_from_json_and_from_named_comments(tmp_path: Path) -> None:
    samples = from_text(tmp_path, '[settings]\nfield="$.magnet"\ntemperature="#temperature"')
    assert samples.settings == {"field": (0.15, "T"), "temperature": (0.02, "K")}


def test_words_among_all_settings_are_left_out_and_said_so(tmp_path: Path) -> None:
    text = '# {"s": {"field [mT]": 100, "operator": "AB"}}\n' + TEXT
    samples = from_text(tmp_path, '[settings]\nall="$.s"', text)
    assert samples.settings == {"field": (0.1, "T")}
    assert samples.notes == ("setting 'operator' is no number and was left out",)


TIMES = {
    "text with offset": ('at="$.when"', 1_935_835_200_000_000),
    "text with a zone in the layout": ('at="$.local"\nzone="+02:00"', 1_935_835_200_000_000),
    "seconds since 1970": ('at="#unix"', 1_935_835_200_500_000),
}


@pytest.mark.parametrize("case", TIMES)
def test_the_time_is_taken_from_the_file(case: str, tmp_path: Path) -> None:
    layout, expected = TIMES[case]
    assert from_text(tmp_path, f"[time]\n{layout}").taken_at_us == expected


BAD = {
    "leads nowhere": ('[volts]\nP1="$.gates.P9"', "leads nowhere", "P1, B1, T1"),
    "no such comment": ('[settings]\nx="#pressure"', "'pressure'", "temperature"),
    "no path": ('[volts]\nP1="gates.P1"', "no JSON path", "$.gates.P1"),
    "open bracket": ('[volts]\nP1="$.gates["', "no JSON path", ""),
    "index past the end": ('[volts]\nP1="$.list[7]"', "leads nowhere", "list of 2"),
    "a word": ('[volts]\nP1="$.operator"', "'AB' is no number", "path"),
    "an object": ('[volts]\nP1="$.gates"', "is no number", "path"),
    "not volts": ('[volts]\nP1="$.magnet"', "are in T", "unit"),
    "no unit": ('[settings]\nx="$.gates.P1"', "has no unit", "unit"),
    "all of a number": ('[volts]\nall="$.gates.P1"', "no JSON object", "object"),
    "time without offset": ('[time]\nat="$.local"', "no offset", "zone"),
    "time is a word": ('[time]\nat="$.operator"', "no date and time", "RFC 3339"),
    "time is no time": ('[time]\nat="$.magnet"', "no date and time", ""),
}


@pytest.mark.parametrize("flaw", BAD)
def test_a_moment_that_is_not_there_is_refused(flaw: str, tmp_path: Path) -> None:
    layout, what, remedy = BAD[flaw]
    with pytest.raises(InputError, match=what.replace("$", r"\$")) as caught:
        from_text(tmp_path, layout)
    assert remedy in caught.value.remedy


@pytest.mark.parametrize(
    "comment", ['# {"gates": ', '# {"gates": nonsense}', '# {"gates": ' + "[" * 3000 + "]" * 3000 + "}"]
)
def test_broken_json_in_a_comment_is_refused_only_when_it_is_needed(comment: str, tmp_path: Path) -> None:
    text = comment + "\nP1 [V],I [A]\n0,1\n1,2\n"
    assert from_text(tmp_path, "", text).shape == "trace"
    with pytest.raises(InputError, match=r"no JSON|does not end"):
        from_text(tmp_path, '[volts]\nall="$.gates"', text)


@pytest.mark.parametrize("value", ["1e999", "NaN", "-Infinity", "true", "null", "9" * 400])
def test_volts_that_are_no_finite_number_are_refused(value: str, tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"no number|not finite|no JSON"):
        from_text(tmp_path, '[volts]\nP1="$.P1"', f'# {{"P1": {value}}}\nP1 [V],I [A]\n0,1\n1,2\n')


@pytest.fixture
def hdf5_path(tmp_path: Path) -> Path:
    """A file with gate volts in attributes, JSON and datasets, and no NXdata."""
    with h5py.File(tmp_path / "f", "w") as file:
        file["x"], file["y"] = np.arange(3.0), np.arange(3.0)
        file["x"].attrs["units"], file["y"].attrs["units"] = "mV", "nA"
        file.attrs["json"] = '{"gates": {"P1": 0.25}}'
        file.attrs["start"] = "2031-05-06T12:00:00Z"
        group = file.create_group("gates")
        group.attrs.update({"P1": 0.5, "B1 [mV]": -250.0, "T1": "1500 mV"})
        group["P1"], group["B1"] = 0.75, np.float32(-125.0)
        group["B1"].attrs["units"] = "mV"
        group["not a single value"] = np.arange(4.0)
        file["note"] = "a text"
    return tmp_path / "f"


def from_hdf5(path: Path, more: str) -> Samples:
    fields = '[[axis]]\nname="P1"\ndataset="x"\n[[signal]]\nname="I"\ndataset="/y"\n'
    return read_file(path, parse_layout(f'format="hdf5"\n{fields}{more}'.encode(), "l"))


HDF5 = {
    "attributes of a group": ('all="gates@"', {"P1": 0.5, "B1": -0.25, "T1": 1.5}),
    "datasets of a group": ('all="gates"', {"P1": 0.75, "B1": -0.125}),
    "JSON in an attribute": ('all="@json$.gates"', {"P1": 0.25}),
    "one JSON value": ('G="@json$.gates.P1"', {"G": 0.25}),
    "one attribute": ('G="gates@P1"', {"G": 0.5}),
    "one dataset": ('G="/gates/B1"', {"G": -0.125}),
}


@pytest.mark.parametrize("case", HDF5)
def test_gate_volts_are_found_in_an_hdf5_file(case: str, hdf5_path: Path) -> None:
    layout, expected = HDF5[case]
    assert from_hdf5(hdf5_path, f"[volts]\n{layout}").volts == expected


def test_the_time_is_an_attribute_of_the_root(hdf5_path: Path) -> None:
    assert from_hdf5(hdf5_path, '[time]\nat="@start"').taken_at_us == 1_935_835_200_000_000


HDF5_BAD = {
    "no such group": ('all="nowhere"', "there is no 'nowhere'"),
    "no such attribute": ('P1="gates@P9"', "no attribute 'P9'"),
    "more than one value": ('P1="x"', "more than one value"),
    "a text": ('P1="note"', "'a text' is no number"),
    "no JSON": ('P1="note$.a"', "no JSON"),
    "a group as value": ('P1="gates"', "no dataset of one text"),
    "a dataset as all": ('all="x"', "is no group"),
}


@pytest.mark.parametrize("flaw", HDF5_BAD)
def test_gate_volts_that_are_not_there_are_refused(flaw: str, hdf5_path: Path) -> None:
    layout, what = HDF5_BAD[flaw]
    with pytest.raises(InputError) as caught:
        from_hdf5(hdf5_path, f"[volts]\n{layout}")
    assert what in caught.value.what
