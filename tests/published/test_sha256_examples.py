"""SHA-256 as the file store computes it, on NIST's examples.

FIPS PUB 180-2 (2002), Appendix B, for ``abc``, the 448-bit and the million-letter message;
the empty message is the case Len = 0 of NIST's CAVP short-message vectors.  Where each is
printed: from memory; all four agree with two independent libraries.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from registry.keeping.filestore import FileStore

EXAMPLES = {
    b"abc": "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad",
    b"": "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855",
    b"abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq": (
        "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1"
    ),
    b"a" * 1_000_000: "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0",
}


@pytest.mark.parametrize("message", EXAMPLES, ids=lambda message: f"{len(message)}-bytes")
def test_a_kept_file_is_named_by_the_published_digest(message: bytes, tmp_path: Path) -> None:
    (tmp_path / "message").write_bytes(message)
    store = FileStore(tmp_path / "store")
    assert store.put(tmp_path / "message").sha256 == EXAMPLES[message]
    assert store.put_bytes(message).sha256 == EXAMPLES[message]
    store.close()
