"""A block of volts is the same bytes on both engines, and gives back every double."""

from __future__ import annotations

import hashlib
import math
import struct

from hypothesis import given
from hypothesis import strategies as st

from registry.records.volts import block_sha256, pack, unpack

DOUBLES = st.lists(st.floats(allow_infinity=False), max_size=8)


@given(DOUBLES)
def test_every_double_comes_back_from_both_engines(volts: list[float]) -> None:
    from_block, from_array = unpack(pack(volts)), unpack(volts)
    for value, one, other in zip(volts, from_block, from_array, strict=True):
        assert (math.isnan(value) and math.isnan(one) and math.isnan(other)) or value == one == other


@given(DOUBLES)
def test_block_and_array_have_one_digest(volts: list[float]) -> None:
    assert block_sha256(pack(volts)) == block_sha256(volts) == hashlib.sha256(pack(volts)).hexdigest()


def test_bytes_are_big_endian_in_order() -> None:
    assert pack([1.0, -2.5]) == bytes.fromhex("3ff0000000000000c004000000000000")


def test_every_nan_is_the_same_eight_bytes() -> None:
    other = struct.unpack(">d", bytes.fromhex("fff8000000000001"))[0]
    assert pack([other]) == pack([math.nan]) == bytes.fromhex("7ff8000000000000")


def test_a_negative_zero_is_kept_as_zero() -> None:
    assert pack([-0.0]) == bytes(8)


def test_memory_of_a_driver_is_taken_as_bytes() -> None:
    assert unpack(memoryview(pack([0.25]))) == unpack(bytearray(pack([0.25]))) == [0.25]


def test_no_gate_is_an_empty_block() -> None:
    assert unpack(pack([])) == []
