"""The tree's proofs hold for every size, and for nothing but the truth."""

from __future__ import annotations

from hashlib import sha256

import pytest
from hypothesis import given
from hypothesis import strategies as st

from registry.keeping.merkle import (
    Frontier,
    complete_root,
    consistency_proof,
    inclusion_proof,
    leaf_hash,
    range_root,
    root_of,
    verify_consistency,
    verify_inclusion,
)

LEAVES = [leaf_hash(str(number).encode()) for number in range(600)]


def by_definition(leaves: list[bytes]) -> bytes:
    """MTH as RFC 9162, 2.1.1 defines it, by recursion."""
    if len(leaves) <= 1:
        return leaves[0] if leaves else sha256(b"").digest()
    split = 1
    while split * 2 < len(leaves):
        split *= 2
    return sha256(b"\x01" + by_definition(leaves[:split]) + by_definition(leaves[split:])).digest()


def source(level: int, index: int) -> bytes:
    return complete_root(LEAVES[index << level : index + 1 << level])


@given(st.integers(0, 600))
def test_the_root_is_that_of_the_definition(size: int) -> None:
    assert root_of(LEAVES[:size]) == by_definition(LEAVES[:size])


@given(st.integers(0, 300), st.integers(0, 300))
def test_appending_in_two_steps_is_appending_in_one(first: int, second: int) -> None:
    in_one = Frontier().extended(LEAVES[: first + second])
    assert Frontier().extended(LEAVES[:first]).extended(LEAVES[first : first + second]) == in_one


@given(st.integers(0, 600))
def test_a_frontier_comes_back_from_subtree_roots(size: int) -> None:
    assert Frontier.at(size, source) == Frontier().extended(LEAVES[:size])


def test_extending_leaves_the_older_frontier_as_it_was() -> None:
    older = Frontier().extended(LEAVES[:7])
    older.extended(LEAVES[7:20])
    assert older.root() == root_of(LEAVES[:7])


@given(st.integers(1, 600).flatmap(lambda size: st.tuples(st.integers(0, size - 1), st.just(size))))
def test_every_leaf_has_a_proof_that_verifies(place: tuple[int, int]) -> None:
    index, size = place
    path = inclusion_proof(index, size, source)
    assert verify_inclusion(LEAVES[index], index, size, path, root_of(LEAVES[:size]))
    assert len(path) <= (size - 1).bit_length()


@given(st.integers(1, 600).flatmap(lambda new: st.tuples(st.integers(1, new), st.just(new))))
def test_every_older_size_has_a_proof_that_verifies(sizes: tuple[int, int]) -> None:
    old, new = sizes
    path = consistency_proof(old, new, source)
    assert verify_consistency(old, new, root_of(LEAVES[:old]), root_of(LEAVES[:new]), path)


def test_no_proof_of_a_small_tree_verifies_for_another_leaf_or_place() -> None:
    for size in range(2, 18):
        root = root_of(LEAVES[:size])
        for index in range(size):
            path = inclusion_proof(index, size, source)
            others = [other for other in range(size) if other != index]
            assert not any(verify_inclusion(LEAVES[other], index, size, path, root) for other in others)
            assert not any(verify_inclusion(LEAVES[index], other, size, path, root) for other in others)


@given(st.integers(2, 600), st.data())
def test_a_changed_proof_of_consistency_is_refused(new: int, data: st.DataObject) -> None:
    old = data.draw(st.integers(1, new - 1))
    path = list(consistency_proof(old, new, source))
    place = data.draw(st.integers(0, len(path) - 1))
    roots = root_of(LEAVES[:old]), root_of(LEAVES[:new])
    changed = [*path[:place], leaf_hash(b"another"), *path[place + 1 :]]
    assert not verify_consistency(old, new, *roots, changed)
    assert not verify_consistency(old, new, *roots, path[:-1])
    assert not verify_consistency(old, new, *roots, [*path, path[-1]])


def test_a_rewritten_beginning_is_not_consistent() -> None:
    forged = [leaf_hash(b"forged"), *LEAVES[1:9]]
    path = consistency_proof(5, 9, source)
    assert not verify_consistency(5, 9, root_of(LEAVES[:5]), root_of(forged), path)
    assert not verify_consistency(5, 9, root_of(forged[:5]), root_of(LEAVES[:9]), path)


def test_equal_sizes_are_consistent_only_with_equal_roots() -> None:
    assert verify_consistency(3, 3, LEAVES[0], LEAVES[0], [])
    assert not verify_consistency(3, 3, LEAVES[0], LEAVES[1], [])
    assert not verify_consistency(0, 3, LEAVES[0], LEAVES[1], [LEAVES[2]])


@pytest.mark.parametrize(("low", "high"), [(0, 0), (5, 4), (1, 3), (4, 9), (2, 5)])
def test_a_range_that_is_no_subtree_is_a_programmers_error(low: int, high: int) -> None:
    with pytest.raises(ValueError, match="no subtree"):
        range_root(low, high, source)


def test_impossible_proofs_and_frontiers_are_programmers_errors() -> None:
    with pytest.raises(ValueError, match="has no leaf 4"):
        inclusion_proof(4, 4, source)
    with pytest.raises(ValueError, match="no consistency proof"):
        consistency_proof(0, 4, source)
    with pytest.raises(ValueError, match="complete subtree"):
        complete_root(LEAVES[:3])
    with pytest.raises(ValueError, match="tree of 3 leaves"):
        Frontier(3, (LEAVES[0],))
