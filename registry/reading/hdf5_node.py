"""Which object of an open HDF5 file is meant, and what do its texts say?"""

from __future__ import annotations

from typing import Any

import h5py
import numpy as np
from h5py import h5d, h5g

__all__ = ["Node", "plain_text"]


class Node:
    """One group or dataset that may be looked at; ``path`` is for messages only."""

    def __init__(self, ident: Any, path: str) -> None:
        """Keep the low-level identifier of an object already opened."""
        self.ident = ident
        self.path = path

    @property
    def is_group(self) -> bool:
        """Whether it can hold other objects."""
        return isinstance(self.ident, h5g.GroupID)

    @property
    def is_dataset(self) -> bool:
        """Whether it can hold data."""
        return isinstance(self.ident, h5d.DatasetID)

    @property
    def name(self) -> str:
        """The last part of the path."""
        return self.path.rstrip("/").rsplit("/", 1)[-1]

    @property
    def holder(self) -> Any:
        """The h5py object of the same thing, through which attributes are read."""
        return h5py.Group(self.ident) if self.is_group else h5py.Dataset(self.ident)


def plain_text(value: Any) -> str | list[str]:
    """Turn what h5py returns for texts (str, bytes, arrays of either) into str or a flat list."""
    if isinstance(value, np.ndarray):
        return (
            [_one_text(item) for item in value.reshape(-1).tolist()]
            if value.ndim
            else _one_text(value.item())
        )
    return _one_text(value)


def _one_text(value: Any) -> str:
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)
