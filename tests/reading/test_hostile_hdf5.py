"""HDF5 files made to mislead a reader, each named after its flaw and written here."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest

from registry.errors import InputError
from registry.reading.entry import read_file
from registry.reading.layout import Layout, parse_layout
from registry.reading.limits import ReadingLimits

# numpy and h5py objects have no types for mypy to see; the files are what is tested here.
LAYOUT = parse_layout(b'format="hdf5"\n[[signal]]\nname="I"\nunit="A"\ndataset="data/i"\n', "l")
SMALL = ReadingLimits(
    array_bytes=1_000_000, file_arrays_bytes=2_000_000, objects=200, depth=10, attribute_bytes=9_000
)


def external_link(file: h5py.File, folder: Path) -> None:
    with h5py.File(folder / "other", "w") as other:
        other["i"] = np.arange(3.0)
    file["data/i"] = h5py.ExternalLink(str(folder / "other"), "/i")


def soft_link_to_external_link(file: h5py.File, folder: Path) -> None:
    external_link(file, folder)
    file.move("data/i", "data/there")
    file["data/i"] = h5py.SoftLink("/data/there")


def link_in_a_circle(file: h5py.File, folder: Path) -> None:
    file["data/i"] = h5py.SoftLink("/data/j")
    file["data/j"] = h5py.SoftLink("/data/i")


def dangling_link(file: h5py.File, folder: Path) -> None:
    file["data/i"] = h5py.SoftLink("/nowhere")


def virtual_dataset(file: h5py.File, folder: Path) -> None:
    with h5py.File(folder / "other", "w") as other:
        other["i"] = np.arange(3.0)
    plan = h5py.VirtualLayout(shape=(3,), dtype="f8")
    plan[:] = h5py.VirtualSource(str(folder / "other"), "i", shape=(3,))
    file.create_virtual_dataset("data/i", plan)


def external_storage(file: h5py.File, folder: Path) -> None:
    (folder / "raw").write_bytes(b"\0" * 24)
    file.create_dataset("data/i", (3,), "f8", external=[(str(folder / "raw"), 0, 24)])


def huge_without_data(file: h5py.File, folder: Path) -> None:
    file.create_dataset("data/i", (10**12,), "f8", chunks=(1000,))


def small_without_data(file: h5py.File, folder: Path) -> None:
    file.create_dataset("data/i", (100,), "f8", chunks=(10,))


def bomb(file: h5py.File, folder: Path) -> None:
    file.create_dataset("data/i", data=np.zeros(1_000_000), compression="gzip")


def huge_chunk(file: h5py.File, folder: Path) -> None:
    dataset = file.create_dataset(
        "data/i", (10,), "f8", chunks=(500_000,), maxshape=(None,), compression="gzip"
    )
    dataset[:] = 1.0


def many_dimensions(file: h5py.File, folder: Path) -> None:
    file["data/i"] = np.zeros((1,) * 20)


def unknown_filter(file: h5py.File, folder: Path) -> None:
    plan = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    plan.set_chunk((10,))
    plan.set_filter(32015, h5py.h5z.FLAG_OPTIONAL, (3,))
    space = h5py.h5s.create_simple((10,))
    h5py.h5d.create(file["data"].id, b"i", h5py.h5t.IEEE_F64LE, space, plan)


def references(file: h5py.File, folder: Path) -> None:
    file["data/i"] = np.array([file.ref, file["data"].ref], dtype=h5py.ref_dtype)


def varying_lengths(file: h5py.File, folder: Path) -> None:
    dataset = file.create_dataset("data/i", (2,), h5py.vlen_dtype(np.float64))
    dataset[0] = np.arange(5.0)


def compound(file: h5py.File, folder: Path) -> None:
    file["data/i"] = np.zeros(3, dtype=[("a", "f8"), ("b", "i4")])


def complex_numbers(file: h5py.File, folder: Path) -> None:
    file["data/i"] = np.zeros(3, dtype=complex)


def texts(file: h5py.File, folder: Path) -> None:
    file["data/i"] = ["a", "b"]


def group_in_place_of_data(file: h5py.File, folder: Path) -> None:
    file.create_group("data/i")


def type_in_place_of_data(file: h5py.File, folder: Path) -> None:
    file["data/i"] = np.dtype("f8")


def no_dataspace(file: h5py.File, folder: Path) -> None:
    file["data/i"] = h5py.Empty("f8")


def large_attribute(file: h5py.File, folder: Path) -> None:
    file["data/i"] = np.arange(3.0)
    file["data/i"].attrs["units"] = "V" * 60_000


def reference_as_unit(file: h5py.File, folder: Path) -> None:
    file["data/i"] = np.arange(3.0)
    file["data/i"].attrs["units"] = file["data/i"].ref


Maker = Callable[[h5py.File, Path], None]
FLAWS: dict[Maker, str] = {
    external_link: "leaves this file",
    soft_link_to_external_link: "leaves this file",
    link_in_a_circle: "round in circles",
    dangling_link: "which is not there",
    virtual_dataset: "other files",
    external_storage: "other files",
    huge_without_data: "larger than may be read",
    small_without_data: "no data is stored",
    bomb: "larger than may be read",
    huge_chunk: "larger than may be read",
    many_dimensions: "larger than may be read",
    unknown_filter: "filter 32015",
    references: "no dataset of real numbers",
    varying_lengths: "no dataset of real numbers",
    compound: "no dataset of real numbers",
    complex_numbers: "no dataset of real numbers",
    texts: "no dataset of real numbers",
    group_in_place_of_data: "which is not there",
    type_in_place_of_data: "which is not there",
    no_dataspace: "no dataset|damaged|not one sample|unit",
    large_attribute: "attribute is too large",
    reference_as_unit: "neither text nor number",
}


def made(maker: Maker, folder: Path) -> Path:
    with h5py.File(folder / "f", "w") as file:
        file.create_group("data")
        maker(file, folder)
    return folder / "f"


def test_the_layout_reads_the_plain_file(tmp_path: Path) -> None:
    path = made(lambda file, folder: file.__setitem__("data/i", np.arange(3.0)), tmp_path)
    assert read_file(path, LAYOUT, limits=SMALL).signal().values.tolist() == [0.0, 1.0, 2.0]


@pytest.mark.parametrize("maker", FLAWS, ids=lambda maker: maker.__name__)
def test_a_hostile_file_is_refused_by_a_layout(maker: Maker, tmp_path: Path) -> None:
    layout: Layout = LAYOUT
    with pytest.raises(InputError, match=FLAWS[maker]):
        read_file(made(maker, tmp_path), layout, limits=SMALL)


@pytest.mark.parametrize("maker", FLAWS, ids=lambda maker: maker.__name__)
def test_a_hostile_file_is_refused_as_nxdata(maker: Maker, tmp_path: Path) -> None:
    path = made(maker, tmp_path)
    with h5py.File(path, "a") as file:
        file["data"].attrs.update({"NX_class": "NXdata", "signal": "i"})
    with pytest.raises(InputError):
        read_file(path, limits=SMALL)


def test_searching_goes_round_a_circle_of_groups_once(tmp_path: Path) -> None:
    def circle(file: h5py.File, folder: Path) -> None:
        file["data/again"] = file["/"]
        file["data/i"] = np.arange(3.0)

    with pytest.raises(InputError, match="does not say which") as caught:
        read_file(made(circle, tmp_path), limits=SMALL)
    assert caught.value.remedy.count("/data/i") == 1


@pytest.mark.parametrize("shape", ["deep", "wide"])
def test_searching_ends_in_a_forest_of_groups(shape: str, tmp_path: Path) -> None:
    def forest(file: h5py.File, folder: Path) -> None:
        for number in range(300):
            file.create_group("/".join(["g"] * (number + 1)) if shape == "deep" else f"g{number}")

    with pytest.raises(InputError, match="too many objects, or groups nested"):
        read_file(made(forest, tmp_path), limits=SMALL)


def test_a_default_that_leads_in_a_circle_ends(tmp_path: Path) -> None:
    def circle(file: h5py.File, folder: Path) -> None:
        file.attrs["default"] = "data"
        file["data"].attrs["default"] = "/data"

    with pytest.raises(InputError, match="does not say which"):
        read_file(made(circle, tmp_path), limits=SMALL)


def test_scales_that_are_no_scales_are_refused(tmp_path: Path) -> None:
    def false_list(file: h5py.File, folder: Path) -> None:
        file["data/i"] = np.arange(3.0)
        file["data/i"].attrs["DIMENSION_LIST"] = np.arange(3)

    with pytest.raises(InputError, match="does not list dimension scales"):
        read_file(made(false_list, tmp_path), limits=SMALL)


@pytest.mark.parametrize("maker", [virtual_dataset, external_storage, huge_without_data])
def test_a_hostile_scale_is_refused(maker: Maker, tmp_path: Path) -> None:
    path = made(maker, tmp_path)
    with h5py.File(path, "a") as file:
        file["I"] = np.arange(3.0)
        file["data/i"].make_scale("i")
        file["I"].dims[0].attach_scale(file["data/i"])
    with pytest.raises(InputError, match=FLAWS[maker]):
        read_file(path, limits=SMALL)


def test_many_small_arrays_together_are_refused(tmp_path: Path) -> None:
    def arrays(file: h5py.File, folder: Path) -> None:
        for number in range(5):
            file[f"data/i{number}"] = np.zeros(100_000)
        file["data"].attrs.update(
            {"NX_class": "NXdata", "signal": "i0", "auxiliary_signals": [f"i{n}" for n in range(1, 5)]}
        )

    with pytest.raises(InputError, match="larger together"):
        read_file(made(arrays, tmp_path), limits=SMALL)


def described(path: Path, libver: str = "earliest", user_block: int = 0, attributes: int = 0) -> Path:
    """A trace as NXdata whose texts have varying length, with further attributes."""
    with h5py.File(path, "w", libver=libver, userblock_size=user_block) as file:
        data = file.create_group("data")
        for number in range(attributes):
            data.attrs[f"note {number}"] = f"text {number}"
        data["i"], data["P1"] = np.arange(3.0), np.arange(3.0)
        data.attrs.update({"NX_class": "NXdata", "signal": "i", "axes": ["P1"]})
        data["i"].attrs["units"], data["P1"].attrs["units"] = "nA", "mV"
        file["start_time"] = "2031-05-06T14:00:00Z"
    return path


@pytest.mark.parametrize("libver", ["earliest", "latest"])
@pytest.mark.parametrize("user_block", [0, 1024])
@pytest.mark.parametrize("attributes", [0, 40])
def test_texts_of_varying_length_are_read_wherever_they_lie(
    libver: str, user_block: int, attributes: int, tmp_path: Path
) -> None:
    samples = read_file(described(tmp_path / "f", libver, user_block, attributes))
    assert (samples.signal().unit, samples.taken_at_us) == ("A", 1_935_842_400_000_000)


def heap_objects(content: bytes | bytearray) -> dict[int, int]:
    """Return where the head of each object in the first global heap stands, by its index."""
    at = content.index(b"GCOL") + 16
    found: dict[int, int] = {}
    while 0 not in found:
        index, length = int.from_bytes(content[at : at + 2], "little"), content[at + 8 : at + 16]
        found[index] = at
        at += 16 + -(-int.from_bytes(length, "little") // 8) * 8
    return found


@pytest.mark.parametrize("length", [0, 8, 2**40, 2**64 - 16])
@pytest.mark.parametrize("index", [0, 1])
def test_a_heap_that_would_be_followed_without_end_is_refused(
    index: int, length: int, tmp_path: Path
) -> None:
    content = bytearray(described(tmp_path / "f").read_bytes())
    at = heap_objects(content)[index]
    content[at + 8 : at + 16] = length.to_bytes(8, "little")
    (tmp_path / "f").write_bytes(content)
    with pytest.raises(InputError):
        read_file(tmp_path / "f")


@pytest.mark.parametrize("libver", ["earliest", "v108"])
def test_a_text_that_claims_to_be_gigabytes_long_is_refused_before_it_is_read(
    libver: str, tmp_path: Path
) -> None:
    content = bytearray(described(tmp_path / "f", libver, attributes=40).read_bytes())
    heap = content.index(b"GCOL").to_bytes(8, "little")
    at = content.find(heap)
    while at >= 0:
        content[at - 4 : at] = (2**32 - 249).to_bytes(4, "little")
        at = content.find(heap, at + 1)
    (tmp_path / "f").write_bytes(content)
    with pytest.raises(InputError, match=r"too large|damaged"):
        read_file(tmp_path / "f")


def test_a_pipe_is_no_file_and_does_not_hold_up_the_reader(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    caught: list[BaseException] = []

    def read() -> None:
        try:
            read_file(tmp_path / "pipe")
        except InputError as error:
            caught.append(error)

    thread = threading.Thread(target=read, daemon=True)
    thread.start()
    thread.join(timeout=20)
    assert len(caught) == 1
