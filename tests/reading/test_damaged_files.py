"""Valid files with bytes flipped, removed or put in: an InputError, or samples that are whole."""

from __future__ import annotations

import gzip
import io
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5netcdf
import h5py
import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import Layout, parse_layout
from registry.reading.limits import ReadingLimits
from registry.samples import Samples

ROUNDS = 300
LIMITS = ReadingLimits(array_bytes=2**24, file_arrays_bytes=2**25, text_bytes=2**22)
TEXT = '# {"gates": {"P1": 0.5}}\nP1 [mV];current [nA];when\n' + "".join(
    f"{n},5;{n * n / 7:.4e};2031-05-06T14:00:{n:02}Z\n".replace(".", ",") for n in range(40)
)
TEXT_LAYOUT = parse_layout(
    b'format="text"\n[[axis]]\nname="P1"\ncolumn=1\n[[signal]]\nname="I"\ncolumn=2\n[volts]\nall="$.gates"\n',
    "l",
)
GZIPPED = b"P1 [V],I [A]\n" + b"".join(b"%d,%d\n" % (n, n * n) for n in range(200))


def nexus(path: Path, libver: str) -> None:
    with h5py.File(path, "w", libver=libver) as file:
        file.attrs.update({"NX_class": "NXroot", "default": "entry"})
        entry = file.create_group("entry")
        entry.attrs.update({"NX_class": "NXentry", "default": "data"})
        entry["start_time"] = "2031-05-06T14:00:00Z"
        data = entry.create_group("data")
        data.attrs.update({"NX_class": "NXdata", "signal": "i", "axes": ["a", "b"], "b_indices": 1})
        data["a"], data["b"] = np.arange(10.0), np.arange(20.0, dtype="f4")
        data.create_dataset("i", data=np.ones((10, 20)), compression="gzip", shuffle=True, fletcher32=True)
        data["c"] = h5py.SoftLink("/entry/data/a")
        for name, unit in (("a", "V"), ("b", "mV"), ("i", "nA")):
            data[name].attrs["units"] = unit


def netcdf(path: Path) -> None:
    with h5netcdf.File(path, "w") as file:
        file.dimensions = {"time": 30}
        file.create_variable("time", ("time",), "f8", data=np.arange(30.0)).attrs["units"] = "s"
        file.create_variable("i", ("time",), "f4", data=np.arange(30.0)).attrs["units"] = "A"


def archive(path: Path) -> None:
    stream = io.BytesIO()
    arrays: dict[str, Any] = {"P1 [V]": np.arange(50.0), "I [A]": np.arange(50.0) ** 2}
    np.savez_compressed(stream, **arrays)
    path.write_bytes(stream.getvalue())


KINDS: dict[str, tuple[Callable[[Path], object], Layout | None]] = {
    "text": (lambda path: path.write_text(TEXT), TEXT_LAYOUT),
    "gzip": (lambda path: path.write_bytes(gzip.compress(GZIPPED)), None),
    "UTF-16": (lambda path: path.write_bytes(GZIPPED.decode().encode("utf-16")), None),
    "archive": (archive, None),
    "HDF5, oldest format": (lambda path: nexus(path, "earliest"), None),
    "HDF5, newest format": (lambda path: nexus(path, "latest"), None),
    "netCDF-4": (netcdf, None),
}


def mutated(content: bytes, rng: np.random.Generator) -> bytes:
    """Damage ``content`` in one of five ways, in the first part more often (headers)."""
    data = bytearray(content)
    reach = len(data) if rng.random() < 0.5 else min(len(data), 2048)
    at = int(rng.integers(reach))
    manner = int(rng.integers(5))
    if manner == 0:
        return bytes(data[:at])
    if manner == 1:
        del data[at : at + int(rng.integers(1, 64))]
    elif manner == 2:
        data[at:at] = rng.bytes(int(rng.integers(1, 64)))
    elif manner == 3:
        data[at : at + 8] = b"\xff" * 8
    else:
        for place in rng.integers(reach, size=int(rng.integers(1, 9))):
            data[int(place)] ^= 1 << int(rng.integers(8))
    return bytes(data)


def whole(samples: Samples) -> bool:
    shape = tuple(axis.values.size for axis in samples.axes)
    return all(signal.values.shape == shape for signal in samples.signals) and all(
        np.isfinite(axis.values).all() for axis in samples.axes
    )


@pytest.mark.parametrize("kind", KINDS)
def test_a_damaged_file_is_refused_or_read_whole(kind: str, tmp_path: Path) -> None:
    make, layout = KINDS[kind]
    make(tmp_path / "whole")
    assert whole(read_file(tmp_path / "whole", layout, limits=LIMITS))
    content = (tmp_path / "whole").read_bytes()
    rng = np.random.default_rng(20310506)
    refused: list[InputError] = []
    for _ in range(ROUNDS):
        (tmp_path / "f").write_bytes(mutated(content, rng))
        try:
            assert whole(read_file(tmp_path / "f", layout, limits=LIMITS))
        except InputError as error:
            refused.append(error)
    assert refused
    assert all(error.what and error.remedy for error in refused)
    assert all(error.where.startswith(str(tmp_path / "f")) for error in refused)


@pytest.mark.parametrize("kind", [kind for kind in KINDS if kind.startswith(("HDF5", "gzip", "archive"))])
def test_a_file_cut_short_anywhere_is_refused(kind: str, tmp_path: Path) -> None:
    make, layout = KINDS[kind]
    make(tmp_path / "whole")
    content = (tmp_path / "whole").read_bytes()
    for size in np.linspace(0, len(content) - 1, 60).astype(int).tolist():
        (tmp_path / "f").write_bytes(content[:size])
        with pytest.raises(InputError):
            read_file(tmp_path / "f", layout)
