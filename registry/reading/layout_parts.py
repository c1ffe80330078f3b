"""Which parts does a layout consist of?

Plain frozen values; ``registry.reading.layout`` tells what each of them means.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from registry.samples import Level

__all__ = ["Entry", "FieldLayout", "Format", "Layout", "MomentLayout"]

Format = Literal["text", "hdf5", "numpy"]


@dataclass(frozen=True)
class FieldLayout:
    """One ``[[axis]]`` or ``[[signal]]``; ``column`` counts from 1."""

    name: str
    unit: str | None = None
    factor: float = 1.0
    offset: float = 0.0
    level: Level | None = None
    column: int | None = None
    dataset: str | None = None


@dataclass(frozen=True)
class Entry:
    """Where one gate's volts, one setting or the time stands, and in which unit."""

    path: str
    unit: str | None = None
    factor: float = 1.0


@dataclass(frozen=True)
class MomentLayout:
    """``[volts]`` or ``[settings]``: single entries, and a path to all of them."""

    entries: Mapping[str, Entry] = field(default_factory=dict)
    all_path: str | None = None
    unit: str | None = None
    level: Level = "gate"


@dataclass(frozen=True)
class Layout:
    """A whole layout file; its keys are explained in ``registry.reading.layout``."""

    format: Format
    delimiter: str | None = None
    skip_rows: int = 0
    decimal: str | None = None
    axes: tuple[FieldLayout, ...] = ()
    signals: tuple[FieldLayout, ...] = ()
    volts: MomentLayout | None = None
    settings: MomentLayout | None = None
    time: Entry | None = None
    zone: str | None = None
    kind: str | None = None
    derive: Mapping[str, Any] | None = None
