"""The Merkle tree against the vectors of the public Certificate Transparency test suites.

The hashes themselves are defined in RFC 9162, section 2.1; the vectors are not printed there.
"""

from __future__ import annotations

import pytest

from registry.keeping.merkle import (
    EMPTY_ROOT,
    consistency_proof,
    inclusion_proof,
    leaf_hash,
    range_root,
    root_of,
    verify_consistency,
    verify_inclusion,
)

EIGHT = ["", "00", "10", "2021", "3031", "40414243", "5051525354555657", "606162636465666768696a6b6c6d6e6f"]
EIGHT_LEAVES = [
    "6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d",
    "96a296d224f285c67bee93c30f8a309157f0daa35dc5b87e410b78630a09cfc7",
    "0298d122906dcfc10892cb53a73992fc5b9f493ea4c9badb27b791b4127a7fe7",
    "07506a85fd9dd2f120eb694f86011e5bb4662e5c415a62917033d4a9624487e7",
    "bc1a0643b12e4d2d7c77918f44e0f4f79a838b6cf9ec5b5c283e1f4d88599e6b",
    "4271a26be0d8a84f0bd54c8c302e7cb3a3b5d1fa6780a40bcce2873477dab658",
    "b08693ec2e721597130641e8211e7eedccb4c26413963eee6c1e2ed16ffb1a5f",
    "46f6ffadd3d06a09ff3c5860d2755c8b9819db7df44251788c7d8e3180de8eb1",
]
EIGHT_ROOTS = [
    "6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d",
    "fac54203e7cc696cf0dfcb42c92a1d9dbaf70ad9e621f4bd8d98662f00e3c125",
    "aeb6bcfe274b70a14fb067a5e5578264db0fa9b51af5e0ba159158f329e06e77",
    "d37ee418976dd95753c1c73862b9398fa2a2cf9b4ff0fdfe8b30cd95209614b7",
    "4e3bbb1f7b478dcfe71fb631631519a3bca12c9aefca1612bfce4c13a86264d4",
    "76e67dadbcdf1e10e1b74ddc608abd2f98dfb16fbce75277b5232a127f2087ef",
    "ddb89be403809e325750d3d263cd78929c2942b7942a34b77e122c9594a74c8c",
    "5dc9da79a70659a9ad559cb701ded9a2ab9d823aad2f4960cfe370eff4604328",
]
FIRST_HALF = "d37ee418976dd95753c1c73862b9398fa2a2cf9b4ff0fdfe8b30cd95209614b7"
SECOND_HALF = "6b47aaf29ee3c2af9af889bc1fb9254dabd31177f16232dd6aab035ca39bf6e4"
LEAVES_2_3 = "5f083f0a1a33ca076a95279832580db3e0ef4584bdff1f54c8a360f50de3031e"
LEAVES_4_5 = "0ebc5d3437fbe2db158b9f126a1d118e308181031d0a949f8dededebc558ef6a"
LEAVES_6_7 = "ca854ea128ed050b41b35ffc1b87b8eb2bde461e9e3b5596ece6b9d5975a0ae0"

SEVEN = ["00", "01", "02", "03", "04", "05", "06"]
SEVEN_ROOT = "3560191803028444b232018ac047fdb561c09c23a7a6876c85e08b5e4d48e9f3"
SEVEN_2 = "fcf0a6c700dd13e274b6fba8deea8dd9b26e4eedde3495717cac8408c9c5177f"
SEVEN_3 = "583c7dfb7b3055d99465544032a571e10a134b1b6f769422bbb71fd7fa167a5d"
SEVEN_0_1 = "a20bf9a7cc2dc8a08f5f415a71b19f6ac427bab54d24eec868b5d3103449953a"
SEVEN_4_6 = "89c929834ed1459b07f65b5e1a2143a8cf5d8efdf30f49ffffa328bb1d9133bb"


def leaves_of(entries: list[str]) -> list[bytes]:
    return [leaf_hash(bytes.fromhex(entry)) for entry in entries]


class Kept:
    """A source of complete subtrees over leaf hashes in memory."""

    def __init__(self, leaves: list[bytes]) -> None:
        self.leaves = leaves

    def __call__(self, level: int, index: int) -> bytes:
        return root_of(self.leaves[index << level : index + 1 << level])


def test_the_empty_tree_has_the_hash_of_the_empty_string() -> None:
    assert EMPTY_ROOT.hex() == "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"
    assert root_of([]) == EMPTY_ROOT


def test_leaf_hashes_are_the_published_ones() -> None:
    assert [leaf.hex() for leaf in leaves_of(EIGHT)] == EIGHT_LEAVES


def test_roots_of_one_to_eight_leaves_are_the_published_ones() -> None:
    leaves = leaves_of(EIGHT)
    assert [root_of(leaves[:size]).hex() for size in range(1, 9)] == EIGHT_ROOTS
    assert [range_root(0, size, Kept(leaves)).hex() for size in range(1, 9)] == EIGHT_ROOTS


@pytest.mark.parametrize(
    ("index", "size", "path"),
    [
        (0, 1, []),
        (0, 8, [EIGHT_LEAVES[1], LEAVES_2_3, SECOND_HALF]),
        (5, 8, [EIGHT_LEAVES[4], LEAVES_6_7, FIRST_HALF]),
        (2, 3, [EIGHT_ROOTS[1]]),
        (1, 5, [EIGHT_LEAVES[0], LEAVES_2_3, EIGHT_LEAVES[4]]),
    ],
)
def test_inclusion_paths_are_the_published_ones(index: int, size: int, path: list[str]) -> None:
    leaves = leaves_of(EIGHT)
    proof = inclusion_proof(index, size, Kept(leaves))
    assert [node.hex() for node in proof] == path
    assert verify_inclusion(leaves[index], index, size, proof, bytes.fromhex(EIGHT_ROOTS[size - 1]))


@pytest.mark.parametrize(
    ("old", "new", "path"),
    [
        (1, 1, []),
        (1, 8, [EIGHT_LEAVES[1], LEAVES_2_3, SECOND_HALF]),
        (2, 8, [LEAVES_2_3, SECOND_HALF]),
        (6, 8, [LEAVES_4_5, LEAVES_6_7, FIRST_HALF]),
        (2, 5, [LEAVES_2_3, EIGHT_LEAVES[4]]),
    ],
)
def test_consistency_proofs_are_the_published_ones(old: int, new: int, path: list[str]) -> None:
    proof = consistency_proof(old, new, Kept(leaves_of(EIGHT)))
    assert [node.hex() for node in proof] == path
    old_root, new_root = bytes.fromhex(EIGHT_ROOTS[old - 1]), bytes.fromhex(EIGHT_ROOTS[new - 1])
    assert verify_consistency(old, new, old_root, new_root, proof)


def test_the_second_published_set_of_seven_single_bytes() -> None:
    leaves = leaves_of(SEVEN)
    assert root_of(leaves).hex() == SEVEN_ROOT
    assert [node.hex() for node in inclusion_proof(3, 7, Kept(leaves))] == [SEVEN_2, SEVEN_0_1, SEVEN_4_6]
    proof = consistency_proof(3, 7, Kept(leaves))
    assert [node.hex() for node in proof] == [SEVEN_2, SEVEN_3, SEVEN_0_1, SEVEN_4_6]
