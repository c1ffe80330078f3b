"""How a gate voltage set is kept: one block of doubles in gate-sheet order."""

from __future__ import annotations

import hashlib
import math
import struct
from collections.abc import Sequence

__all__ = ["block_sha256", "pack", "unpack"]

_NOT_RECORDED = struct.pack(">d", math.nan)


def pack(volts: Sequence[float]) -> bytes:
    """Big-endian float64 block; NaN (not recorded) always as the same eight bytes."""
    return b"".join(_NOT_RECORDED if math.isnan(value) else struct.pack(">d", value + 0.0) for value in volts)


def unpack(stored: bytes | Sequence[float]) -> list[float]:
    """The volts of a block (SQLite) or an array (PostgreSQL); NaN where not recorded."""
    if isinstance(stored, (bytes, bytearray, memoryview)):
        return list(struct.unpack(f">{len(stored) // 8}d", stored))
    return [float(value) for value in stored]


def block_sha256(stored: bytes | Sequence[float]) -> str:
    """SHA-256 (hex) of the big-endian block: what the digest of a tuning state holds."""
    block = bytes(stored) if isinstance(stored, (bytes, bytearray, memoryview)) else pack(stored)
    return hashlib.sha256(block).hexdigest()
