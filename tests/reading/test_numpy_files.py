from __future__ import annotations

import io
import pickle
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import parse_layout
from registry.reading.limits import ReadingLimits
from registry.samples import Samples


def read(path: Path, layout: str | None = None, **limits: int) -> Samples:
    given = None if layout is None else parse_layout(('format="numpy"\n' + layout).encode(), "l")
    return read_file(path, given, limits=ReadingLimits(**limits))


def saved(folder: Path, **arrays: Any) -> Path:
    with (folder / "f").open("wb") as stream:
        np.savez_compressed(stream, **arrays)
    return folder / "f"


AXIS = '[[axis]]\nname="P1"\nunit="mV"\n'
SIGNAL = '[[signal]]\nname="I"\nunit="nA"\n'


def test_an_archive_whose_arrays_name_their_units_needs_no_layout(tmp_path: Path) -> None:
    path = saved(tmp_path, **{"P1 [mV]": np.arange(3), "I [nA]": np.arange(3.0)})
    samples = read(path)
    assert samples.axes[0].values.tolist() == [0.0, 0.001, 0.002]
    assert (samples.signal().name, samples.signal().unit) == ("I", "A")


def test_a_matrix_among_vectors_is_a_map(tmp_path: Path) -> None:
    path = saved(tmp_path, **{"P1 [V]": np.arange(2), "P2 [V]": np.arange(3), "I [A]": np.ones((2, 3))})
    samples = read(path)
    assert (samples.shape, samples.signal().values.shape) == ("map", (2, 3))


def test_arrays_are_named_by_a_layout_and_volts_taken_from_the_archive(tmp_path: Path) -> None:
    path = saved(tmp_path, x=np.arange(3), y=np.arange(3), B1=0.5, moment='{"volts": {"B2": -0.25}}')
    layout = AXIS + 'dataset="x"\n' + SIGNAL + 'dataset="y"\n[volts]\nall="moment$.volts"\nB1="B1"\n'
    samples = read(path, layout)
    assert samples.volts == {"B2": -0.25, "B1": 0.5}
    assert samples.signal().values.tolist() == [0.0, 1e-9, 2e-9]


def test_columns_of_a_single_array_are_named_by_a_layout(tmp_path: Path) -> None:
    np.save(tmp_path / "f.npy", np.asfortranarray([[0, 5, 1], [10, 6, 2], [20, 7, 3]]))
    samples = read(tmp_path / "f.npy", AXIS + "column=1\n" + SIGNAL + "column=3\n")
    assert samples.axes[0].values.tolist() == [0.0, 0.01, 0.02]
    assert samples.signal().values.tolist() == [1e-9, 2e-9, 3e-9]


def test_fields_of_a_structured_array_are_named_by_a_layout(tmp_path: Path) -> None:
    table = np.array([(0, 1.5), (1, 2.5)], dtype=[("v", ">i2"), ("i", "<f4")])
    np.save(tmp_path / "f.npy", table)
    samples = read(tmp_path / "f.npy", AXIS + 'dataset="v"\n' + SIGNAL + 'dataset="i"\n')
    assert samples.signal().values == pytest.approx([1.5e-9, 2.5e-9], rel=1e-15)


def test_a_single_array_without_axis_is_numbered(tmp_path: Path) -> None:
    np.save(tmp_path / "f.npy", np.arange(4.0))
    samples = read(tmp_path / "f.npy", SIGNAL)
    assert (samples.axes[0].unit, samples.axes[0].values.tolist()) == ("1", [0.0, 1.0, 2.0, 3.0])


def npy_bytes(header: str, body: bytes) -> bytes:
    text = header.encode() + b"\n"
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text + body


def pickled() -> bytes:
    stream = io.BytesIO()
    np.save(stream, np.array([{"a": 1}], dtype=object), allow_pickle=True)
    return stream.getvalue()


BAD_NPY = {
    "pickle": (pickled(), "not read here"),
    "plain pickle": (pickle.dumps([1, 2]), "neither a text"),
    "no layout": (
        npy_bytes("{'descr': '<f8', 'fortran_order': False, 'shape': (1,)}", b"0" * 8),
        "says nothing",
    ),
    "cut short": (npy_bytes("{'descr': '<f8', 'fortran_order': False, 'shape': (9,)}", b"0" * 8), "declared"),
    "too long": (npy_bytes("{'descr': '<f8', 'fortran_order': False, 'shape': (1,)}", b"0" * 16), "declared"),
    "huge": (
        npy_bytes("{'descr': '<f8', 'fortran_order': False, 'shape': (99999999999,)}", b""),
        "bytes is not",
    ),
    "negative": (npy_bytes("{'descr': '<f8', 'fortran_order': False, 'shape': (-1,)}", b""), "declared"),
    "complex": (npy_bytes("{'descr': '<c8', 'fortran_order': False, 'shape': (1,)}", b"0" * 8), "complex64"),
    "texts": (
        npy_bytes("{'descr': '<U2', 'fortran_order': False, 'shape': (1,)}", b"a\0\0\0b\0\0\0"),
        "says nothing",
    ),
    "code in the header": (npy_bytes("__import__('os').abort()", b""), "damaged"),
    "nested header": (npy_bytes("(" * 3000, b""), "damaged"),
    "long header": (npy_bytes("{'descr': '<f8'," + " " * 20000 + "}", b""), "damaged"),
    "no header": (b"\x93NUMPY", "damaged"),
    "version 9": (b"\x93NUMPY\x09\x00\x00\x00", "damaged|version"),
}


@pytest.mark.parametrize("flaw", BAD_NPY)
def test_a_bad_array_is_refused(flaw: str, tmp_path: Path) -> None:
    content, what = BAD_NPY[flaw]
    (tmp_path / "f").write_bytes(content)
    with pytest.raises(InputError, match=what):
        read(tmp_path / "f")


def archive(folder: Path, members: dict[str, bytes], packing: int = zipfile.ZIP_DEFLATED) -> Path:
    with zipfile.ZipFile(folder / "f", "w", packing) as file:
        for name, content in members.items():
            file.writestr(name, content)
    return folder / "f"


ONE = npy_bytes("{'descr': '<f8', 'fortran_order': False, 'shape': (1,)}", b"0" * 8)
BAD_NPZ = {
    "no layout": ({"x.npy": ONE}, zipfile.ZIP_STORED, "does not say its unit"),
    "other members": ({"x.npy": ONE, "run.sh": b"x"}, zipfile.ZIP_STORED, "'run.sh'"),
    "other packing": ({"x.npy": ONE}, zipfile.ZIP_BZIP2, "packing"),
    "pickle": ({"x [V].npy": pickled()}, zipfile.ZIP_DEFLATED, "objects|type"),
    "bomb": ({"x [V].npy": b"\0" * 30_000_000}, zipfile.ZIP_DEFLATED, "larger together"),
    "lie about the size": ({"x [V].npy": ONE[:-2]}, zipfile.ZIP_DEFLATED, "declared"),
    "axis alone": ({"x [V].npy": ONE}, zipfile.ZIP_DEFLATED, "without a signal"),
}


@pytest.mark.parametrize("flaw", BAD_NPZ)
def test_a_bad_archive_is_refused(flaw: str, tmp_path: Path) -> None:
    members, packing, what = BAD_NPZ[flaw]
    with pytest.raises(InputError, match=what):
        read(archive(tmp_path, members, packing), file_arrays_bytes=1_000_000)


def test_an_archive_with_too_many_members_is_refused(tmp_path: Path) -> None:
    path = archive(tmp_path, {f"{n}.npy": ONE for n in range(11)})
    with pytest.raises(InputError, match="archive of 11 arrays"):
        read(path, archive_members=10)


BAD_NAMES = {
    "no such array": ('dataset="z"', "there is no array 'z'"),
    "array not said": ("", "without dataset"),
    "column of a vector": ('dataset="x"\ncolumn=1', "no column 1"),
}


@pytest.mark.parametrize("flaw", [flaw for flaw in BAD_NAMES if "column" not in flaw])
def test_an_array_that_is_not_there_is_named(flaw: str, tmp_path: Path) -> None:
    more, what = BAD_NAMES[flaw]
    with pytest.raises(InputError, match=what):
        read(saved(tmp_path, x=np.arange(3), y=np.arange(3)), SIGNAL + more)


def test_a_column_that_is_not_there_is_named(tmp_path: Path) -> None:
    np.save(tmp_path / "f.npy", np.ones((3, 2)))
    with pytest.raises(InputError, match="no column 3"):
        read(tmp_path / "f.npy", SIGNAL + "column=3")
