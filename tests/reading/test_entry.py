from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import parse_layout


def test_the_content_tells_the_format_and_the_name_does_not(tmp_path: Path) -> None:
    (tmp_path / "text.h5").write_text("P1 [V],I [A]\n0,1\n1,2\n")
    arrays: dict[str, Any] = {"P1 [V]": np.arange(2.0), "I [A]": np.arange(2.0)}
    with (tmp_path / "archive.csv").open("wb") as stream:
        np.savez(stream, **arrays)
    for name in ("text.h5", "archive.csv"):
        assert read_file(tmp_path / name).axes[0].name == "P1"


def test_errors_show_the_name_that_the_user_knows(tmp_path: Path) -> None:
    (tmp_path / "ab12").write_text("P1 [V],I [A]\n0,x\n")
    with pytest.raises(InputError) as caught:
        read_file(tmp_path / "ab12", shown_as="monday.txt")
    assert caught.value.where == "monday.txt"


@pytest.mark.parametrize("other", ["hdf5", "numpy"])
def test_a_layout_of_another_format_is_refused(other: str, tmp_path: Path) -> None:
    (tmp_path / "f").write_text("P1 [V],I [A]\n0,1\n")
    with pytest.raises(InputError, match=f"the layout is for {other} files, and this is text"):
        read_file(tmp_path / "f", parse_layout(f'format="{other}"'.encode(), "l"))


def test_an_unreadable_file_is_an_input_error(tmp_path: Path) -> None:
    (tmp_path / "loop").symlink_to(tmp_path / "loop")
    with pytest.raises(InputError):
        read_file(tmp_path / "loop")


def test_what_is_read_is_read_only_once_and_owns_its_memory(tmp_path: Path) -> None:
    (tmp_path / "f").write_text("P1 [V],I [A]\n0,1\n1,2\n")
    samples = read_file(tmp_path / "f")
    (tmp_path / "f").unlink()
    samples.signal().values[0] = 7.0
    assert samples.axes[0].values.tolist() == [0.0, 1.0]
