from __future__ import annotations

import codecs
import gzip
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import parse_layout
from registry.reading.limits import ReadingLimits
from registry.samples import Samples

TRACE = "P1 [mV]\tcurrent [nA]\n0\t1.5\n100\t2.5\n200\t3.5\n"
SAME_TRACE = {
    "tabs": TRACE.encode(),
    "byte-order mark": codecs.BOM_UTF8 + TRACE.encode(),
    "UTF-16 little end": codecs.BOM_UTF16_LE + TRACE.encode("utf-16-le"),
    "UTF-16 big end": codecs.BOM_UTF16_BE + TRACE.encode("utf-16-be"),
    "gzip": gzip.compress(TRACE.encode()),
    "gzip in two members": gzip.compress(TRACE[:20].encode()) + gzip.compress(TRACE[20:].encode()),
    "commas": TRACE.replace("\t", ",").encode(),
    "commas and spaces": TRACE.replace("\t", ", ").encode(),
    "semicolons": TRACE.replace("\t", ";").encode(),
    "white space": b"  P1 [mV]   current [nA]\n  0   1.5\n 100     2.5  \n200 3.5",
    "CR LF": TRACE.replace("\n", "\r\n").encode(),
    "CR": TRACE.replace("\n", "\r").encode(),
    "round brackets": TRACE.replace("[", "(").replace("]", ")").encode(),
    "no space before the unit": TRACE.replace(" [", "[").encode(),
    "units in a row of their own": b"P1\tcurrent\nmV\tnA\n0\t1.5\n100\t2.5\n200\t3.5\n",
    "units in brackets beneath": b"P1,current\n[mV],[nA]\n0,1.5\n100,2.5\n200,3.5\n",
    "header in a comment": ("# sweep of the evening\n# " + TRACE).encode(),
    "comments of four kinds": ("# a\n% b\n// c\n; d\n\n" + TRACE + "# end\n").encode(),
    "quotes": b'"P1 [mV]","current [nA]"\n"0","1.5"\n"100","2.5"\n"200","3.5"\n',
    "delimiter at the end": TRACE.replace("\n", "\t\n").encode(),
    "exponents": b"P1 [mV] current [nA]\n0E0 15e-1\n1.D2 2.5\n+200. 3.5\n",
    "decimal comma and semicolons": TRACE.replace("\t", ";").replace(".", ",").encode(),
    "decimal comma and tabs": TRACE.replace(".", ",").encode(),
    "decimal comma and white space": b"P1 [mV]  current [nA]\n0,0 1,5\n100,0 2,5\n200,0 3,5\n",
}


def read(folder: Path, content: bytes | str, layout: str | None = None, **limits: int) -> Samples:
    path = folder / "file"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    given = None if layout is None else parse_layout(layout.encode(), "layout.toml")
    return read_file(path, given, limits=ReadingLimits(**limits))


@pytest.mark.parametrize("manner", SAME_TRACE)
def test_one_trace_is_the_same_in_every_manner_of_writing(manner: str, tmp_path: Path) -> None:
    samples = read(tmp_path, SAME_TRACE[manner])
    axis, signal = samples.axes[0], samples.signal()
    assert samples.shape == "trace"
    assert (axis.name, axis.unit, axis.level) == ("P1", "V", "gate")
    assert (signal.name, signal.unit) == ("current", "A")
    assert axis.values.tolist() == [0.0, 0.1, 0.2]
    assert signal.values.tolist() == [1.5e-9, 2.5e-9, 3.5e-9]


BAD = {
    "empty": (b"", "is empty", ""),
    "only comments": (b"# nothing\n", "no rows", ""),
    "only a header": (b"P1 [V]\tI [A]\n", "no rows|no row", ""),
    "no header": (b"1 2\n3 4\n", "no header", "layout"),
    "no unit": (b"P1\tcurrent [A]\n0\t1\n", "'P1' has no unit", "layout"),
    "unknown unit": (b"P1 [mV]\tI [namp]\n0\t1\n", "'namp'", "did you mean"),
    "one column": (b"P1 [mV]\n0\n1\n", "no signal", "layout"),
    "a word": (b"P1 [V] I [A]\n0 1\n1 oops\n", "line 3, column 2: 'oops'", "blank"),
    "short row": (b"P1 [V],I [A]\n0,1\n1\n2,3\n", "line 3: 1 cells instead of 2", ""),
    "blank in the axis": (b"P1 [V],I [A]\n0,1\n,2\n2,3\n", "no finite value at sample 2", "rows"),
    "thousands": (b"P1 [V];I [A]\n1,234;5,678\n2,345;6,789\n", "thousands", "decimal"),
    "thousands and comma": (b"P1 [V];I [A]\n1.234,5;5,6\n2,3;6,7\n", "'1.234,5' is no number", ""),
    "underscores": (b"P1 [V];I [A]\n1_0;2\n2_0;3\n", "'1_0' is no number", ""),
    "same name twice": (b"V [V],I [A],I [A]\n0,1,2\n", "'I' stands for 2", "layout"),
    "binary": (bytes(range(256)) * 4, "neither a text", "HDF5"),
    "UTF-16 without its mark": (TRACE.encode("utf-16-le"), "neither a text", "byte-order"),
    "gzip cut short": (gzip.compress(TRACE.encode() * 50)[:-12], "damaged or cut short", "again"),
    "gzip with another end": (gzip.compress(TRACE.encode()) + b"more", "after the gzip", "again"),
    "gzip in gzip": (gzip.compress(gzip.compress(TRACE.encode())), "compressed file inside", "unpack"),
    "no such day": (b"when,I [A]\n2031-02-30T00:00:00Z,1\n", "no date and time", "RFC 3339"),
}


@pytest.mark.parametrize("flaw", BAD)
def test_a_bad_text_is_refused_with_place_and_remedy(flaw: str, tmp_path: Path) -> None:
    content, what, remedy = BAD[flaw]
    with pytest.raises(InputError, match=what) as caught:
        read(tmp_path, content)
    assert str(tmp_path / "file") in caught.value.where
    assert remedy in caught.value.remedy


def test_all_bad_cells_are_named_in_one_error(tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        read(tmp_path, "P1 [V],I [A]\nx,1\n2,y\n3,4\n4,z\n")
    assert [caught.value.what, *caught.value.faults] == [
        "line 2, column 1: 'x' is no number",
        "line 3, column 2: 'y' is no number",
        "line 5, column 2: 'z' is no number",
    ]


def test_blank_cells_of_a_signal_are_not_measured(tmp_path: Path) -> None:
    values = read(tmp_path, "P1 [V],I [A]\n0,1\n1,\n2,nan\n3,4\n").signal().values
    assert np.array_equal(values, [1.0, np.nan, np.nan, 4.0], equal_nan=True)


def test_rows_that_were_allocated_and_never_filled_are_left_out(tmp_path: Path) -> None:
    samples = read(tmp_path, "P1 [V],I [A]\n0,1\n1,2\nnan,nan\nnan,nan\n")
    assert samples.axes[0].values.tolist() == [0.0, 1.0]
    assert samples.notes == ("2 unfilled rows at the end were left out",)


def test_the_micro_sign_of_older_instruments_is_read_and_noted(tmp_path: Path) -> None:
    samples = read(tmp_path, "P1 [µV]\tI [A]\n1\t2\n2\t3\n".encode("cp1252"))
    assert samples.axes[0].values.tolist() == [1e-6, 2e-6]
    assert "Windows-1252" in samples.notes[0]


def test_times_with_an_offset_are_a_series_that_knows_when_it_began(tmp_path: Path) -> None:
    text = "when,I [A]\n2031-05-06T14:00:00+02:00,1\n2031-05-06T14:00:00.250+02:00,2\n"
    samples = read(tmp_path, text)
    assert (samples.shape, samples.axes[0].name, samples.axes[0].unit) == ("series", "time", "s")
    assert samples.axes[0].values.tolist() == [0.0, 0.25]
    assert samples.taken_at_us == 1_935_835_200_000_000
    assert samples.sweeps == ()


def test_times_without_an_offset_give_differences_only(tmp_path: Path) -> None:
    samples = read(tmp_path, "when,I [A]\n2031-05-06 14:00:00,1\n2031-05-06 14:00:02,2\n")
    assert samples.axes[0].values.tolist() == [0.0, 2.0]
    assert samples.taken_at_us is None
    assert "no offset" in samples.notes[0]


def test_a_time_axis_is_a_series_and_a_pulse_length_is_a_trace(tmp_path: Path) -> None:
    assert read(tmp_path, "time [ms],I [A]\n0,1\n1,2\n").shape == "series"
    assert read(tmp_path, "tau [ns],I [A]\n0,1\n1,2\n").shape == "trace"


def test_two_voltages_in_a_grid_pattern_are_a_map(tmp_path: Path) -> None:
    rows = "".join(f"{a},{b},{10 * a + b}\n" for a in range(3) for b in range(4))
    samples = read(tmp_path, "P1 [V],P2 [V],I [A]\n" + rows)
    assert samples.shape == "map"
    assert [axis.name for axis in samples.axes] == ["P1", "P2"]
    assert samples.signal().values.tolist() == [[10.0 * a + b for b in range(4)] for a in range(3)]


@pytest.mark.parametrize("units", [("V", "K"), ("A", "V")])
def test_a_grid_pattern_of_other_units_stays_a_trace(units: tuple[str, str], tmp_path: Path) -> None:
    rows = "".join(f"{a},{b},1\n" for a in range(3) for b in range(4))
    assert read(tmp_path, f"x [{units[0]}],y [{units[1]}],I [A]\n" + rows).shape == "trace"


def test_two_voltages_that_move_together_are_a_trace(tmp_path: Path) -> None:
    samples = read(tmp_path, "P1 [V],P2 [V],I [A]\n0,0,1\n1,1,2\n2,2,3\n3,3,4\n")
    assert (samples.shape, len(samples.signals)) == ("trace", 2)


def test_a_bomb_is_refused_by_its_size(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="larger than 1000000 bytes"):
        read(tmp_path, gzip.compress(b"0" * 50_000_000), text_bytes=1_000_000)


def test_a_layout_names_columns_of_a_text_without_header(tmp_path: Path) -> None:
    layout = """
    format = "text"
    skip_rows = 2
    kind = "pinch-off"
    [[axis]]
    name = "B1"
    unit = "mV"
    level = "source"
    column = 3
    [[signal]]
    name = "I"
    unit = "nA"
    factor = -2.0
    offset = 1.0
    column = 1
    [derive]
    method = "pinch-off"
    given = {bias = 0.001}
    """
    samples = read(tmp_path, "junk\n1;2,,junk\n1 word 500\n2 word 600\n", layout)
    assert (samples.axes[0].name, samples.axes[0].level) == ("B1", "source")
    assert samples.axes[0].values.tolist() == [0.5, 0.6]
    assert samples.signal().values == pytest.approx([-1e-9, -3e-9], rel=1e-15)
    assert (samples.kind, samples.derive) == (
        "pinch-off",
        {"method": "pinch-off", "given": {"bias": 0.001}},
    )


def test_a_layout_takes_units_from_the_header_where_it_gives_none(tmp_path: Path) -> None:
    layout = 'format = "text"\n[[axis]]\nname="x"\ncolumn=2\n[[signal]]\nname="y"\ncolumn=1\n'
    samples = read(tmp_path, "I [pA],P1 [mV]\n1,2\n3,4\n", layout)
    assert samples.axes[0].values.tolist() == [0.002, 0.004]
    assert samples.signal().unit == "A"


def test_a_layout_settles_what_a_comma_means(tmp_path: Path) -> None:
    text = "P1 [V];I [A]\n1,234;5,678\n2,345;6,789\n"
    assert read(tmp_path, text, 'format="text"\ndecimal=","').axes[0].values.tolist() == [1.234, 2.345]


def test_a_column_that_is_not_there_is_named(tmp_path: Path) -> None:
    layout = 'format="text"\n[[signal]]\nname="y"\nunit="A"\ncolumn=7\n'
    with pytest.raises(InputError, match=r"column 7, the text has 2"):
        read(tmp_path, TRACE, layout)


def test_small_texts_are_read_without_the_large_libraries(tmp_path: Path) -> None:
    (tmp_path / "t").write_text(TRACE)
    code = (
        "import sys; from pathlib import Path; from registry.reading.entry import read_file;"
        f"read_file(Path({str(tmp_path / 't')!r}));"
        "print(sorted({'pint', 'h5py', 'pandas', 'scipy', 'sqlmodel', 'sqlalchemy'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
