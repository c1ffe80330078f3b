"""The digest of a record: SHA-256 over the canonical form of kind, content and links."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence

from registry.records.canonical import Json, canonical_bytes

__all__ = ["SCHEMA_VERSION", "digest_of"]

# Part of every digest.  A new version gets an encoder of its own; this one stays.
SCHEMA_VERSION = 1


def digest_of(kind: str, content: Mapping[str, Json], links: Mapping[str, str | Sequence[str]]) -> bytes:
    """32-byte digest of a record.

    Args:
        kind: table name.
        content: values already normal (``records.values``); None members are left out.
        links: role -> hex digest of the linked record, or several; several are a set,
            so they are sorted, each once; None and empty ones are left out.
    """
    linked: dict[str, Json] = {}
    for role, target in links.items():
        if isinstance(target, str):
            linked[role] = target
        elif target:
            linked[role] = sorted(set(target))
    form: dict[str, Json] = {
        "kind": kind,
        "schema": SCHEMA_VERSION,
        "content": {name: value for name, value in content.items() if value is not None},
        "links": linked,
    }
    return hashlib.sha256(canonical_bytes(form)).digest()
