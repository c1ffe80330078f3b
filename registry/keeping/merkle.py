"""How many entries hash to one root, and how is it proved that one of them, or an older root, is in it?

The Merkle tree of RFC 9162 ("Certificate Transparency Version 2.0", 2021), section 2.1, over
SHA-256.  Pure: hashes in, hashes out; where the hashes are kept is for ``keeping.journal``.

A *complete subtree* (level, index) covers the leaves ``index * 2**level`` up to, but not
including, ``(index + 1) * 2**level``; its root never changes once those leaves exist.  Roots and
proofs are written over a ``NodeSource`` that knows such roots, and ask it for O(log n) of
them a proof node at most.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from hashlib import sha256

__all__ = [
    "EMPTY_ROOT",
    "Frontier",
    "NodeSource",
    "complete_root",
    "consistency_proof",
    "inclusion_proof",
    "leaf_hash",
    "node_hash",
    "range_root",
    "root_of",
    "verify_consistency",
    "verify_inclusion",
]

NodeSource = Callable[[int, int], bytes]
"""(level, index) -> root of that complete subtree, 32 bytes."""

EMPTY_ROOT = sha256(b"").digest()
"""Root of the tree without leaves (RFC 9162, 2.1.1)."""


def leaf_hash(entry: bytes) -> bytes:
    """Hash of one entry, SHA-256(0x00 || entry) (RFC 9162, 2.1.1)."""
    return sha256(b"\x00" + entry).digest()


def node_hash(left: bytes, right: bytes) -> bytes:
    """Hash of two subtrees, SHA-256(0x01 || left || right) (RFC 9162, 2.1.1)."""
    return sha256(b"\x01" + left + right).digest()


@dataclass(frozen=True, slots=True)
class Frontier:
    """The right edge of a tree: all that is needed to append, and to know the root.

    Immutable, so that the frontier before a transaction that fails is still at hand.

    Args:
        size: number of leaves.
        peaks: roots of the complete subtrees that the size's binary digits name, largest first.
    """

    size: int = 0
    peaks: tuple[bytes, ...] = ()

    def __post_init__(self) -> None:
        if self.size < 0 or len(self.peaks) != self.size.bit_count():
            raise ValueError(f"{len(self.peaks)} subtrees cannot make a tree of {self.size} leaves")

    @classmethod
    def at(cls, size: int, source: NodeSource) -> Frontier:
        """The frontier of the first ``size`` leaves that ``source`` knows."""
        return cls(size, tuple(source(level, index) for level, index in _subtrees(0, size)))

    def extended(self, leaves: Iterable[bytes]) -> Frontier:
        """This frontier with leaf hashes appended; amortised one hash a leaf."""
        size, peaks = self.size, list(self.peaks)
        for leaf in leaves:
            node, carry = leaf, size
            while carry & 1:
                node = node_hash(peaks.pop(), node)
                carry >>= 1
            peaks.append(node)
            size += 1
        return Frontier(size, tuple(peaks))

    def root(self) -> bytes:
        """Root of the tree (RFC 9162, 2.1.1)."""
        return _joined(self.peaks) if self.peaks else EMPTY_ROOT


def root_of(leaves: Iterable[bytes]) -> bytes:
    """Root over leaf hashes."""
    return Frontier().extended(leaves).root()


def complete_root(hashes: Sequence[bytes]) -> bytes:
    """Root over ``2**k`` neighbouring subtrees of equal height.

    Raises:
        ValueError: the number of hashes is no power of two.
    """
    if len(hashes).bit_count() != 1:
        raise ValueError(f"{len(hashes)} hashes do not make a complete subtree")
    row = list(hashes)
    while len(row) > 1:
        row = [node_hash(left, right) for left, right in zip(row[::2], row[1::2], strict=True)]
    return row[0]


def range_root(low: int, high: int, source: NodeSource) -> bytes:
    """Root over the leaves ``low`` to ``high - 1``, a range that the RFC's recursion visits.

    Raises:
        ValueError: the range is empty, or ``low`` does not stand on a subtree of its height.
    """
    if high <= low or low % (1 << (high - low - 1).bit_length()):
        raise ValueError(f"leaves {low} to {high} are no subtree")
    return _joined([source(level, index) for level, index in _subtrees(low, high)])


def inclusion_proof(index: int, size: int, source: NodeSource) -> tuple[bytes, ...]:
    """Audit path of leaf ``index`` (from 0) in the tree of ``size`` leaves (RFC 9162, 2.1.3.1).

    Raises:
        ValueError: there is no such leaf in a tree of that size.
    """
    if not 0 <= index < size:
        raise ValueError(f"a tree of {size} leaves has no leaf {index}")
    low, high = 0, size
    path: list[bytes] = []
    while high - low > 1:
        middle = low + _split(high - low)
        if index < middle:
            path.append(range_root(middle, high, source))
            high = middle
        else:
            path.append(range_root(low, middle, source))
            low = middle
    return tuple(reversed(path))


def verify_inclusion(leaf: bytes, index: int, size: int, path: Sequence[bytes], root: bytes) -> bool:
    """Whether the path proves that ``leaf`` is number ``index`` under ``root`` (RFC 9162, 2.1.3.2)."""
    if not 0 <= index < size:  # step 1
        return False
    first, second = index, size - 1  # step 2
    computed = leaf  # step 3
    for node in path:  # step 4
        if second == 0:
            return False
        if first & 1 or first == second:
            computed = node_hash(node, computed)
            while first and not first & 1:
                first, second = first >> 1, second >> 1
        else:
            computed = node_hash(computed, node)
        first, second = first >> 1, second >> 1
    return second == 0 and computed == root  # step 5


def consistency_proof(old_size: int, new_size: int, source: NodeSource) -> tuple[bytes, ...]:
    """Proof that the first ``old_size`` leaves stand unchanged in ``new_size`` (RFC 9162, 2.1.4.1).

    Raises:
        ValueError: not ``0 < old_size <= new_size``.
    """
    if not 0 < old_size <= new_size:
        raise ValueError(f"no consistency proof leads from {old_size} to {new_size} leaves")
    low, high = 0, new_size
    path: list[bytes] = []
    while high != old_size:
        middle = low + _split(high - low)
        if old_size <= middle:
            path.append(range_root(middle, high, source))
            high = middle
        else:
            path.append(range_root(low, middle, source))
            low = middle
    if low:  # from 0 the verifier knows this subtree already: it is the old root
        path.append(range_root(low, high, source))
    return tuple(reversed(path))


def verify_consistency(
    old_size: int, new_size: int, old_root: bytes, new_root: bytes, path: Sequence[bytes]
) -> bool:
    """Whether the path proves the old tree to be the beginning of the new (RFC 9162, 2.1.4.2).

    Equal sizes need equal roots and an empty path, which the RFC leaves out.
    """
    if old_size == new_size:
        return not path and old_root == new_root
    if not 0 < old_size < new_size or not path:  # step 1
        return False
    nodes = list(path)
    if old_size.bit_count() == 1:  # step 2
        nodes.insert(0, old_root)
    first, second = old_size - 1, new_size - 1  # step 3
    while first & 1:  # step 4
        first, second = first >> 1, second >> 1
    old = new = nodes[0]  # step 5
    for node in nodes[1:]:  # step 6
        if second == 0:
            return False
        if first & 1 or first == second:
            old, new = node_hash(node, old), node_hash(node, new)
            while first and not first & 1:
                first, second = first >> 1, second >> 1
        else:
            new = node_hash(new, node)
        first, second = first >> 1, second >> 1
    return second == 0 and old == old_root and new == new_root  # step 7


def _split(count: int) -> int:
    """Largest power of two strictly below ``count`` (> 1)."""
    return 1 << (count - 1).bit_length() - 1


def _subtrees(low: int, high: int) -> Iterator[tuple[int, int]]:
    """(level, index) of the complete subtrees that make up the range, largest first."""
    for level in range((high - low).bit_length() - 1, -1, -1):
        if (high - low) >> level & 1:
            yield level, low >> level
            low += 1 << level


def _joined(peaks: Sequence[bytes]) -> bytes:
    """One root over neighbouring complete subtrees, largest first."""
    node = peaks[-1]
    for peak in reversed(peaks[:-1]):
        node = node_hash(peak, node)
    return node
