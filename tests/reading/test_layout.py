from __future__ import annotations

from pathlib import Path

import pytest

from registry.errors import InputError
from registry.reading.layout import Entry, load_layout, parse_layout

SIGNAL = '[[signal]]\nname = "I"\nunit = "A"\ncolumn = 2\n'
FULL = b"""
format = "text"
delimiter = "tab"
skip_rows = 3
decimal = ","
kind = "coulomb-peaks"

[[axis]]
name = "P1"
unit = "mV"
factor = 2.0
offset = -1.0
level = "source"
column = 1

[[signal]]
name = "I"
unit = "nA"
column = 2

[volts]
level = "source"
unit = "mV"
all = "$.gates"
B1 = "$.other.B1"
B2 = {path = "#B2", unit = "V", factor = 0.5}
unit_gate = "$.x"

[settings]
field = {path = "$.magnet", unit = "T"}

[time]
at = "$.when"
zone = "+01:00"

[derive]
method = "coulomb-peaks"
given = {lever_arm_P1 = 0.1, model = "auto"}
"""


def test_a_layout_keeps_all_that_it_says() -> None:
    layout = parse_layout(FULL, "layout.toml")
    assert (layout.delimiter, layout.skip_rows, layout.decimal) == ("\t", 3, ",")
    assert (layout.axes[0].factor, layout.axes[0].offset, layout.axes[0].level) == (2.0, -1.0, "source")
    assert layout.volts is not None
    assert (layout.volts.level, layout.volts.unit, layout.volts.all_path) == ("source", "mV", "$.gates")
    assert layout.volts.entries["B2"] == Entry("#B2", "V", 0.5)
    assert layout.volts.entries["unit_gate"] == Entry("$.x")
    assert layout.time == Entry("$.when")
    assert layout.derive == {"method": "coulomb-peaks", "given": {"lever_arm_P1": 0.1, "model": "auto"}}


def test_a_gate_called_like_a_key_is_written_as_a_table() -> None:
    layout = parse_layout(b'format="hdf5"\n[volts]\nall = {path = "@all"}\n', "x")
    assert layout.volts is not None
    assert (layout.volts.all_path, layout.volts.entries) == (None, {"all": Entry("@all")})


BAD = {
    "no TOML": ("format = text", "no TOML", "line"),
    "no format": ('kind = "x"', "no format", "format"),
    "unknown format": ('format = "excel"', "'excel' is not known", "'text'"),
    "misspelt key": ('format = "text"\ndelimeter = ","', "'delimeter'", "did you mean 'delimiter'"),
    "misspelt field key": ('format="text"\n[[axis]]\nname="x"\ncolum=1\n' + SIGNAL, "'colum'", "'column'"),
    "level of a signal": ('format="text"\n' + SIGNAL + 'level="gate"', "'level'", "known are"),
    "unknown unit": ('format="text"\n' + SIGNAL.replace('"A"', '"ampx"'), "'ampx'", ""),
    "column zero": ('format="text"\n' + SIGNAL.replace("2", "0"), "column = 0", "correct"),
    "column true": ('format="text"\n' + SIGNAL.replace("2", "true"), "column = True", "correct"),
    "no column": ('format="text"\n[[signal]]\nname="I"\nunit="A"', "has no column", "counted from 1"),
    "no dataset": ('format="hdf5"\n[[signal]]\nname="I"\nunit="A"', "has no dataset", "HDF5 path"),
    "both places": ('format="text"\n' + SIGNAL + 'dataset="a"', "both column and dataset", "keep"),
    "no name": ('format="text"\n[[signal]]\ncolumn=1', "has no name", "name"),
    "same name twice": ('format="text"\n' + SIGNAL + SIGNAL, "stands twice", "own"),
    "axes only": ('format="text"\n[[axis]]\nname="x"\ncolumn=1', "no signal", "signal"),
    "axis is a table": ('format="text"\n[axis]\nname="x"\ncolumn=1\n' + SIGNAL, "no list", "[[axis]]"),
    "word as factor": ('format="text"\n' + SIGNAL + 'factor="2"', "no number", "1.0"),
    "infinite factor": ('format="text"\n' + SIGNAL + "factor=inf", "no number", "1.0"),
    "level of a current": (
        'format="text"\n[[axis]]\nname="x"\nunit="A"\nlevel="gate"\ncolumn=1\n' + SIGNAL,
        "no voltage",
        "remove",
    ),
    "delimiter is a letter": ('format="text"\ndelimiter="x"', "cannot part numbers", '"tab"'),
    "two commas": ('format="text"\ndelimiter=","\ndecimal=","', "both ','", "delimiter"),
    "delimiter of HDF5": ('format="hdf5"\ndelimiter=","', "no meaning", "remove"),
    "unknown decimal": ('format="text"\ndecimal="."\n[volts]\n', "names nothing", "all"),
    "bad zone": ('format="text"\n[time]\nat="#t"\nzone="CET"', "'CET' is no zone", "+01:00"),
    "time without at": ('format="text"\n[time]\nzone="Z"', "has no path", "where"),
    "volts as text": ('format="text"\nvolts="x"', "no table", "[volts]"),
    "unknown level": ('format="text"\n[volts]\nlevel="top"\nP1="#a"', "'top' is not known", "'gate'"),
    "derive without method": ('format="text"\n[derive]\ngiven={a=1}', "no method", "method"),
    "list as given": ('format="text"\n[derive]\nmethod="m"\ngiven={a=[1]}', "given a", "number"),
}


@pytest.mark.parametrize("flaw", BAD)
def test_a_layout_that_cannot_be_meant_is_refused(flaw: str) -> None:
    content, what, remedy = BAD[flaw]
    with pytest.raises(InputError) as caught:
        parse_layout(content.encode(), "layout.toml")
    assert what in caught.value.what
    assert remedy in caught.value.remedy
    assert "layout.toml" in caught.value.where


@pytest.mark.parametrize("content", [b"\xff\xfe", b"a = " + b"[" * 5000, b"\0"])
def test_bytes_that_are_no_layout_are_refused(content: bytes) -> None:
    with pytest.raises(InputError, match="no TOML"):
        parse_layout(content, "layout.toml")


def test_a_layout_is_loaded_from_its_file(tmp_path: Path) -> None:
    (tmp_path / "l.toml").write_bytes(b"\xef\xbb\xbf" + FULL)
    assert load_layout(tmp_path / "l.toml").kind == "coulomb-peaks"


def test_a_layout_that_is_not_there_or_far_too_large_is_refused(tmp_path: Path) -> None:
    (tmp_path / "large").write_bytes(b"#" * (2**20 + 1))
    for name in ("missing", "large", "."):
        with pytest.raises(InputError):
            load_layout(tmp_path / name)
