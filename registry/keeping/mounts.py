"""Does a path lie on a network file system, where SQLite must not be used?

Linux tells in /proc/self/mountinfo (proc(5)); where that file does not exist, the answer is
"not known to be one".
"""

from __future__ import annotations

import re
from pathlib import Path, PurePosixPath

__all__ = ["filesystem_of", "network_filesystem"]

MOUNTINFO = Path("/proc/self/mountinfo")

NETWORK = re.compile(r"nfs\d*|cifs|smb3|smbfs|9p|lustre|gpfs|fuse\..+")
"""File systems on which locks or shared memory are not to be trusted between computers."""

_OCTAL = re.compile(r"\\([0-7]{3})")


def network_filesystem(path: Path) -> str | None:
    """Type of the network file system that holds ``path`` (which need not exist yet), or None."""
    try:
        table = MOUNTINFO.read_text(encoding="utf-8", errors="surrogateescape")
    except OSError:
        return None
    kind = filesystem_of(PurePosixPath(path.resolve()), table)
    return kind if kind is not None and NETWORK.fullmatch(kind) else None


def filesystem_of(path: PurePosixPath, mountinfo: str) -> str | None:
    """Type of the file system that holds an absolute path, by the text of a mountinfo table.

    The deepest mount point above the path counts, and of several on one point the last, which
    hides those before it.  Lines that cannot be read are passed over.
    """
    best: tuple[int, str] | None = None
    for line in mountinfo.splitlines():
        before, separator, after = line.partition(" - ")
        fields = before.split(" ")
        if not separator or len(fields) < 6 or not after:
            continue
        point = PurePosixPath(_OCTAL.sub(lambda found: chr(int(found[1], 8)), fields[4]))
        depth = len(point.parts)
        if path.is_relative_to(point) and (best is None or depth >= best[0]):
            best = depth, after.split(" ")[0]
    return best[1] if best else None
