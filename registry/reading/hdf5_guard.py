"""May this object of an HDF5 file be followed and read, and what is in it?

A file can point outside itself, round in circles, at terabytes that it does not hold, or
at code (filters).  Everything is found out from the description of an object before its
data is touched: only hard links are followed, soft links are walked here and never leave
the file; external links, virtual and external storage, unknown filters, references and
lengths that vary are refused.
"""

from __future__ import annotations

import contextlib
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

import h5py
import numpy as np
from h5py import h5a, h5d, h5i, h5l, h5o, h5s, h5t

from registry.errors import InputError
from registry.reading.faults import as_input_error, damaged
from registry.reading.finished import try_lock
from registry.reading.hdf5_node import Node, plain_text
from registry.reading.hdf5_stream import GuardedStream
from registry.reading.limits import ReadingLimits
from registry.samples import FloatArray

__all__ = ["GuardedFile", "Node", "opened"]

# Filter numbers of the HDF5 registry: deflate, shuffle, fletcher32, lzf (comes with h5py).
_FILTERS: Final = frozenset({1, 2, 3, 32000})
_FLOAT_BYTES: Final = 8
_MOST_TEXTS: Final = 64
"""Texts in one attribute: axes are at most 32; each may point at a long one."""


@contextlib.contextmanager
def opened(path: Path, *, where: str, limits: ReadingLimits) -> Iterator[GuardedFile]:
    """Open ``path`` for reading, under a shared lock where the file system has locks.

    Raises:
        InputError: the file is damaged, or a program still holds it open for writing.
    """
    with contextlib.ExitStack() as stack:
        with as_input_error(where):
            stream = stack.enter_context(GuardedStream(path))
            try_lock(stream, where)
            file = stack.enter_context(h5py.File(stream, "r"))
            guarded = GuardedFile(Node(h5o.open(file.id, b"/"), "/"), stream, where, limits)
        try:
            yield guarded
        except InputError as error:
            if stream.fault is None:
                raise
            raise damaged(error.where, stream.fault) from error


class GuardedFile:
    """An open HDF5 file in which nothing is dereferenced unchecked."""

    def __init__(self, root: Node, stream: GuardedStream, where: str, limits: ReadingLimits) -> None:
        """Begin at ``root``, which is read through ``stream``; ``where`` names the file in errors."""
        self.root = root
        self._stream = stream
        plan = h5i.get_file_id(root.ident).get_create_plist()
        self._base = int(plan.get_userblock())
        self._offset_bytes = int(plan.get_sizes()[0])
        self.where = where
        self.limits = limits
        self._taken = 0

    def find(self, path: str, base: Node | None = None) -> Node | None:
        """Return the object at ``path``, from ``base`` (else the root), None if there is none.

        Raises:
            InputError: a link on the way leaves the file or goes round in circles.
        """
        start = self.root if base is None or path.startswith("/") else base
        with as_input_error(f"{self.where}, {path}"):
            return self._walk(start, path, [self.limits.depth])

    def children(self, group: Node) -> list[Node]:
        """Return what hard links in ``group`` hold, in order of name; other links are left out."""
        with as_input_error(f"{self.where}, {group.path}"):
            found = []
            for name in group.ident:
                if group.ident.links.get_info(name).type == h5l.TYPE_HARD:
                    found.append(self._open(group, name))
            return found

    def all_objects(self) -> Iterator[Node]:
        """Yield every group and dataset once, groups before what they hold.

        Raises:
            InputError: there are more of them, or deeper ones, than ``limits`` allow.
        """
        seen: set[int] = set()
        pending = [(self.root, 0)]
        while pending:
            node, depth = pending.pop()
            with as_input_error(f"{self.where}, {node.path}"):
                address = h5o.get_info(node.ident).addr
            if address in seen:
                continue
            seen.add(address)
            if len(seen) > self.limits.objects or depth > self.limits.depth:
                raise self.refused(node, "the file has too many objects, or groups nested too deeply")
            yield node
            if node.is_group:
                pending += [(child, depth + 1) for child in reversed(self.children(node))]

    def attribute(self, node: Node, name: str) -> Any:
        """Return an attribute as text, number or list of them; None if there is none.

        Raises:
            InputError: it is too large or of a type that is not read.
        """
        place = f"{self.where}, {node.path}@{name}"
        with as_input_error(place):
            key = name.encode()
            if not h5a.exists(node.ident, key):
                return None
            ident = h5a.open(node.ident, key)
            kind, count = ident.get_type(), ident.get_space().get_simple_extent_npoints()
            if ident.get_space().get_simple_extent_type() == h5s.NULL:
                return None
            text = kind.get_class() == h5t.STRING
            varying = text and kind.is_variable_str()
            if not text and kind.get_class() not in (h5t.INTEGER, h5t.FLOAT):
                raise InputError(
                    "the attribute is neither text nor number", where=place, remedy="name another one"
                )
            if count * kind.get_size() > self.limits.attribute_bytes or (varying and count > _MOST_TEXTS):
                raise InputError("the attribute is too large", where=place, remedy="store it as a dataset")
            if varying:
                self.check_lengths(node, name, count, self.limits.attribute_bytes)
            if text:
                found = plain_text(h5py.AttributeManager(node.holder)[name])
                # The length of a varying text is known only when it is there.
                if sum(map(len, [found] if isinstance(found, str) else found)) > self.limits.attribute_bytes:
                    raise InputError(
                        "the attribute is too large", where=place, remedy="store it as a dataset"
                    )
                return found
            values = np.empty(ident.shape, dtype=np.float64)
            ident.read(values, mtype=h5t.NATIVE_DOUBLE)
            return values.tolist()

    def check_lengths(self, node: Node, name: str, count: int, most: int) -> None:
        """Refuse an attribute of varying length of which an element is longer than ``most``.

        Raises:
            InputError: it is, or its lengths were not to be found.
        """
        header = int(h5o.get_info(node.ident).addr) + self._base
        longest = self._stream.longest(name.encode(), count, header, self._offset_bytes)
        if longest is None or longest > most:
            raise InputError(
                "the attribute is too large" if longest else "the length of the attribute cannot be checked",
                where=f"{self.where}, {node.path}@{name}",
                remedy="write it as a text of fixed length, or store it as a dataset",
            )

    def attribute_names(self, node: Node) -> list[str]:
        """Return the names of all attributes of ``node``."""
        with as_input_error(f"{self.where}, {node.path}"):
            return [
                h5a.open(node.ident, index=at).name.decode("utf-8", "replace")
                for at in range(h5a.get_num_attrs(node.ident))
            ]

    def shape(self, node: Node) -> tuple[int, ...]:
        """Return the declared shape of a dataset; () for a single value."""
        with as_input_error(f"{self.where}, {node.path}"):
            return tuple(node.ident.shape)

    def is_numeric(self, node: Node) -> bool:
        """Tell whether ``node`` is a dataset of real numbers."""
        with as_input_error(f"{self.where}, {node.path}"):
            return node.is_dataset and node.ident.get_type().get_class() in (h5t.INTEGER, h5t.FLOAT)

    def numbers(self, node: Node) -> FloatArray:
        """Return the whole dataset as float64.

        Raises:
            InputError: it may not be read (see the module's text), or is damaged.
        """
        with as_input_error(f"{self.where}, {node.path}"):
            if not self.is_numeric(node):
                raise self.refused(node, "this is no dataset of real numbers")
            shape = self._checked(node, _FLOAT_BYTES)
            values = np.empty(shape, dtype=np.float64)
            if values.size:
                self._stream.recording = False
                node.ident.read(h5s.ALL, h5s.ALL, values, mtype=h5t.NATIVE_DOUBLE)
                self._stream.recording = True
            return values

    def text(self, node: Node) -> str:
        """Return the one text that a dataset holds.

        Raises:
            InputError: it is no single text, or may not be read.
        """
        with as_input_error(f"{self.where}, {node.path}"):
            kind = node.ident.get_type() if node.is_dataset else None
            if kind is None or kind.get_class() != h5t.STRING or math.prod(node.ident.shape) != 1:
                raise self.refused(node, "this is no dataset of one text")
            self._checked(node, 1)
            if kind.is_variable_str() and self._length_of_one(node) > self.limits.text_bytes:
                raise self.refused(node, "the text is larger than may be read")
            found = plain_text(h5py.Dataset(node.ident)[()])
            return found if isinstance(found, str) else str(found[0])

    def refused(self, node: Node, why: str) -> InputError:
        """Return the error for an object that is not read."""
        return InputError(
            why,
            where=f"{self.where}, {node.path}",
            remedy="copy plain arrays into a new HDF5 file (contiguous or deflate), and admit that one",
        )

    def _length_of_one(self, node: Node) -> int:
        """Return the length of the one text of varying length in a dataset."""
        plan = node.ident.get_create_plist()
        start = None
        if plan.get_layout() == h5d.CONTIGUOUS:
            start = node.ident.get_offset()
        elif plan.get_layout() == h5d.CHUNKED and plan.get_nfilters() == 0:
            start = node.ident.get_chunk_info(0).byte_offset
        if start is None:
            raise self.refused(node, "the length of the text cannot be checked")
        return self._stream.first_length(start)

    def _walk(self, start: Node, path: str, budget: list[int]) -> Node | None:
        node = start
        for part in path.split("/"):
            if part in ("", "."):
                continue
            name = part.encode()
            if not node.is_group or not node.ident.links.exists(name):
                return None
            kind = node.ident.links.get_info(name).type
            if kind == h5l.TYPE_HARD:
                node = self._open(node, name)
                continue
            if kind != h5l.TYPE_SOFT:
                raise self.refused(node, f"the link {part!r} leaves this file")
            budget[0] -= 1
            if budget[0] < 0:
                raise self.refused(node, f"the links at {part!r} go round in circles")
            target = node.ident.links.get_val(name).decode("utf-8", "surrogateescape")
            found = self._walk(self.root if target.startswith("/") else node, target, budget)
            if found is None:
                return None
            node = found
        return node

    def _open(self, group: Node, name: bytes) -> Node:
        path = f"{group.path.rstrip('/')}/{name.decode('utf-8', 'replace')}"
        return Node(h5o.open(group.ident, name), path)

    def _checked(self, node: Node, least_bytes: int) -> tuple[int, ...]:
        """Refuse what may not be read, from the dataset's description alone; return its shape."""
        plan = node.ident.get_create_plist()
        if plan.get_layout() == h5d.VIRTUAL or plan.get_external_count() > 0:
            raise self.refused(node, "the data lies in other files")
        filters = {plan.get_filter(at)[0] for at in range(plan.get_nfilters())}
        if filters - _FILTERS:
            raise self.refused(
                node, f"the data is packed by filter {sorted(filters - _FILTERS)[0]}, which is not read"
            )
        shape = tuple(int(length) for length in node.ident.shape)
        width = max(least_bytes, node.ident.get_type().get_size())
        chunk = math.prod(plan.get_chunk()) if plan.get_layout() == h5d.CHUNKED else 0
        size = math.prod(shape) * width
        if len(shape) > self.limits.dimensions or max(size, chunk * width) > self.limits.array_bytes:
            raise self.refused(node, f"an array of shape {shape} is larger than may be read")
        self._taken += size
        if self._taken > self.limits.file_arrays_bytes:
            raise self.refused(node, "the arrays are larger together than may be read")
        if size and node.ident.get_storage_size() == 0:
            raise damaged(f"{self.where}, {node.path}", f"shape {shape} is declared, but no data is stored")
        return shape
