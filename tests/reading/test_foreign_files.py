"""Files that other people's software wrote, as they are."""

from __future__ import annotations

import warnings
from pathlib import Path

import h5netcdf
import numpy as np
import pytest
import statsmodels.datasets

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import parse_layout

DATA = Path(statsmodels.datasets.__file__).parent


def test_the_nile_series_is_read_by_a_layout() -> None:
    # Shipped by statsmodels; the values are those of Cobb, Biometrika 65 (1978) 243.
    text = '[[axis]]\nname="year"\nunit="1"\ncolumn=1\n[[signal]]\nname="volume"\nunit="1"\ncolumn=2\n'
    samples = read_file(DATA / "nile" / "nile.csv", parse_layout(f'format="text"\n{text}'.encode(), "l"))
    assert samples.axes[0].values.tolist() == list(range(1871, 1971))
    assert samples.signal().values[:3].tolist() == [1120.0, 1160.0, 963.0]


def test_a_table_without_units_is_refused_with_a_remedy() -> None:
    with pytest.raises(InputError, match="'year' has no unit") as caught:
        read_file(DATA / "nile" / "nile.csv")
    assert "layout" in caught.value.remedy


def test_columns_of_numbers_are_taken_from_a_table_with_words() -> None:
    text = '[[axis]]\nname="murder"\nunit="1"\ncolumn=3\n[[signal]]\nname="urban"\nunit="%"\ncolumn=8\n'
    samples = read_file(
        DATA / "statecrime" / "statecrime.csv", parse_layout(f'format="text"\n{text}'.encode(), "l")
    )
    assert samples.axes[0].values[:2].tolist() == [7.1, 3.2]
    assert samples.signal().values[0] == pytest.approx(0.4865, rel=1e-15)


def test_a_column_of_words_is_named_with_line_and_column() -> None:
    text = '[[axis]]\nname="state"\nunit="1"\ncolumn=1\n[[signal]]\nname="urban"\nunit="%"\ncolumn=8\n'
    with pytest.raises(InputError, match="line 2, column 1: 'Alabama'"):
        read_file(
            DATA / "statecrime" / "statecrime.csv", parse_layout(f'format="text"\n{text}'.encode(), "l")
        )


EVERY_CSV = sorted(DATA.glob("*/*.csv"))


def test_there_are_foreign_tables_to_read() -> None:
    assert len(EVERY_CSV) > 20


@pytest.mark.parametrize("path", EVERY_CSV, ids=lambda path: path.stem)
def test_every_foreign_table_is_refused_for_what_it_does_not_say(path: Path) -> None:
    with pytest.raises(
        InputError, match=r"has no unit|no header|is no number|no signal|no date|is not known|stands for"
    ):
        read_file(path)


def test_numbers_written_by_numpy_as_text_are_read(tmp_path: Path) -> None:
    table = np.random.default_rng(1).normal(size=(50, 2))
    np.savetxt(tmp_path / "f", table, header="P1 [V] current [A]")
    samples = read_file(tmp_path / "f")
    assert np.array_equal(samples.axes[0].values, table[:, 0])
    assert np.array_equal(samples.signal().values, table[:, 1])


def netcdf(path: Path) -> Path:
    with warnings.catch_warnings(), h5netcdf.File(path, "w") as file:
        file.dimensions = {"time": 3, "channel": 2}
        time = file.create_variable("time", ("time",), "f8", data=np.array([0.0, 1.0, 2.0]))
        time.attrs["units"] = "minutes since 2031-05-06 12:00:00"
        packed = np.array([[0, 10], [20, -999], [40, 50]], dtype="i2")
        current = file.create_variable("current", ("time", "channel"), "i2", data=packed)
        current.attrs.update({"units": "nA", "scale_factor": 0.5, "add_offset": 1.0, "missing_value": -999})
    return path


def test_a_netcdf_4_file_is_unpacked_and_dated(tmp_path: Path) -> None:
    samples = read_file(netcdf(tmp_path / "f"))
    assert samples.axes[0].values.tolist() == [0.0, 60.0, 120.0]
    assert samples.axes[1].name == "channel"
    expected = np.array([[1.0, 6.0], [11.0, np.nan], [21.0, 26.0]]) / 1e9
    assert np.array_equal(samples.signal().values, expected, equal_nan=True)
    assert any("'channel' has no values" in note for note in samples.notes)
