"""File formats against what their definitions say."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from registry.reading.entry import read_file
from registry.reading.finished import HDF5_SIGNATURE, hdf5_offset


def data_2d(path: Path, user_block: int = 0) -> Path:
    """The two-dimensional example of the NeXus base class definition NXdata (nexusformat.org)."""
    with h5py.File(path, "w", userblock_size=user_block) as file:
        data = file.create_group("data_2d")
        data.attrs.update(
            {
                "NX_class": "NXdata",
                "signal": "current",
                "axes": ["gate", "bias"],
                "gate_indices": 0,
                "bias_indices": 1,
            }
        )
        data["gate"], data["bias"] = np.linspace(0.0, 1.0, 1000), np.linspace(-1.0, 1.0, 20)
        data["current"] = np.arange(20_000.0).reshape(1000, 20)
        for name, unit in (("gate", "V"), ("bias", "mV"), ("current", "nA")):
            data[name].attrs["units"] = unit
    return path


def test_the_example_of_nxdata_has_its_axes_slowest_first(tmp_path: Path) -> None:
    samples = read_file(data_2d(tmp_path / "f"))
    assert samples.shape == "map"
    assert [(axis.name, axis.values.size) for axis in samples.axes] == [("gate", 1000), ("bias", 20)]
    assert samples.signal().values[1, 0] == 20e-9


def test_the_signature_is_that_of_the_hdf5_specification() -> None:
    # The HDF Group, HDF5 File Format Specification, section II.A (superblock).
    assert HDF5_SIGNATURE.hex(" ") == "89 48 44 46 0d 0a 1a 0a"


@pytest.mark.parametrize("user_block", [0, 512, 1024, 2048, 8192])
def test_the_superblock_is_found_behind_a_user_block(user_block: int, tmp_path: Path) -> None:
    # Section II.A: at 0, 512, 1024, 2048 and so on, doubling.
    path = data_2d(tmp_path / "f", user_block)
    with path.open("rb") as stream:
        assert hdf5_offset(stream, path.stat().st_size) == user_block
    assert read_file(path).shape == "map"
