"""Which code makes a method's numbers?  The digest of its source."""

from __future__ import annotations

import hashlib
from functools import lru_cache
from pathlib import Path

from registry.physics.catalogue import facts

__all__ = ["source_digest"]


@lru_cache(maxsize=64)
def source_digest(name: str) -> str:
    """Return the SHA-256 (hex) of the sources of the method called ``name``.

    Hashed are, in alphabetical order, each module's name, a NUL, its source with LF
    line ends, a NUL; so that a checkout with CR LF has the same digest.

    Raises:
        InputError: there is no such method.
    """
    digest = hashlib.sha256()
    for module in sorted(facts(name).sources):
        source = (Path(__file__).parent / f"{module}.py").read_bytes()
        digest.update(module.encode() + b"\0" + source.replace(b"\r\n", b"\n") + b"\0")
    return digest.hexdigest()
