from __future__ import annotations

import fcntl
import os
from pathlib import Path

import h5py
import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.finished import check_finished


def written(path: Path, **options: str) -> Path:
    with h5py.File(path, "w", **options) as file:
        file["x"] = np.arange(100.0)
    return path


def test_a_finished_file_gives_its_state_twice_the_same(tmp_path: Path) -> None:
    path = written(tmp_path / "f")
    state = check_finished(path)
    assert state == check_finished(path)
    assert state.size == path.stat().st_size


@pytest.mark.parametrize("change", ["longer", "touched", "replaced"])
def test_a_file_that_changed_has_another_state(change: str, tmp_path: Path) -> None:
    path = written(tmp_path / "f")
    before = check_finished(path)
    if change == "longer":
        path.write_bytes(path.read_bytes() + b"x")
    elif change == "touched":
        os.utime(path, ns=(before.mtime_ns + 1000, before.mtime_ns + 1000))
    else:
        (tmp_path / "g").write_bytes(path.read_bytes())
        os.utime(tmp_path / "g", ns=(before.mtime_ns, before.mtime_ns))
        (tmp_path / "g").replace(path)
    assert check_finished(path) != before


def test_a_file_open_for_writing_is_refused(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "f", "w") as file:
        file["x"] = np.arange(3.0)
        file.flush()
        with pytest.raises(InputError, match="locked for writing"):
            check_finished(tmp_path / "f")


def test_a_text_locked_by_its_writer_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "f"
    with path.open("w") as stream:
        fcntl.flock(stream, fcntl.LOCK_EX)
        with pytest.raises(InputError, match="locked for writing"):
            check_finished(path)
    assert check_finished(path).size == 0


@pytest.mark.parametrize("user_block", [0, 512, 4096])
def test_a_mark_left_by_a_writer_that_died_is_seen(user_block: int, tmp_path: Path) -> None:
    path = tmp_path / "f"
    with h5py.File(path, "w", libver="latest", userblock_size=user_block) as file:
        file["x"] = np.arange(3.0)
    assert check_finished(path).size > 0
    content = bytearray(path.read_bytes())
    content[user_block + 11] |= 1
    path.write_bytes(content)
    with pytest.raises(InputError, match="marked as open for writing"):
        check_finished(path)


@pytest.mark.parametrize("name", ["missing", "folder"])
def test_what_is_no_file_is_refused(name: str, tmp_path: Path) -> None:
    (tmp_path / "folder").mkdir()
    with pytest.raises(InputError):
        check_finished(tmp_path / name)
    with pytest.raises(InputError):
        read_file(tmp_path / name)
