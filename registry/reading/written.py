"""What text stands in a file that a person wrote, and how are its faults told?

UTF-8 with or without a byte-order mark, or UTF-16 with one.  What the text means is the
business of ``rows`` (tables) and ``limit_lists`` (TOML).
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from registry.errors import InputError

__all__ = ["LIMITS", "Faults", "SheetLimits", "read_text"]


@dataclass(frozen=True)
class SheetLimits:
    """How large a table written by a person may be.

    Attributes:
        bytes: of the file; 3,000 gates with all columns take about 0.3 MB.
        faults: shown at once; more would hide the first.
    """

    bytes: int = 64_000_000
    faults: int = 20


LIMITS = SheetLimits()


def read_text(path: Path) -> str:
    """The text of a file people write: UTF-8, or UTF-16 with a byte-order mark.

    Raises:
        InputError: the file is missing, too large, or no text.
    """
    data = _bytes_of(path)
    encoding = "utf-16" if data[:2] in {b"\xff\xfe", b"\xfe\xff"} else "utf-8-sig"
    try:
        text = data.decode(encoding)
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise InputError(
            f"byte 0x{data[error.start]:02X} is not {'UTF-16' if encoding == 'utf-16' else 'UTF-8'} text",
            where=f"{path}, line {line}",
            remedy="save the table as UTF-8 text (CSV)",
        ) from error
    if "\0" in text:
        raise InputError(
            "holds NUL characters: this is no text",
            where=str(path),
            remedy="save the table as UTF-8 text (CSV)",
        )
    return text


def _bytes_of(path: Path) -> bytes:
    try:
        with path.open("rb") as file:
            data = file.read(LIMITS.bytes + 1)
    # A name with a NUL character is a ValueError.
    except (OSError, ValueError) as error:
        raise InputError(
            f"cannot be read: {getattr(error, 'strerror', None) or error}",
            where=str(path),
            remedy="check the file's name and rights",
        ) from error
    if len(data) > LIMITS.bytes:
        raise InputError(
            f"larger than {LIMITS.bytes:,} bytes",
            where=str(path),
            remedy="this is a table of measured data; give it to `millikeep admit`",
        )
    return data


class Faults:
    """Collects what is wrong with one file, so that one run names everything."""

    def __init__(self, path: Path, remedy: str) -> None:
        self.path = path
        self.remedy = remedy
        self._found: list[tuple[str, str]] = []

    def add(self, place: str, what: str) -> None:
        """Note that ``what`` is wrong at ``place`` (``line 3, column v_min``)."""
        self._found.append((place, what))

    def __len__(self) -> int:
        return len(self._found)

    def check(self) -> None:
        """Raise all collected faults as one InputError, in order of the file; or do nothing."""
        if not self._found:
            return
        (place, what), *rest = self._found
        others = [f"{place}: {what}" for place, what in rest[: LIMITS.faults - 1]]
        left = len(rest) - len(others)
        if left:
            others.append(f"and {left} more")
        raise InputError(what, where=f"{self.path}, {place}", remedy=self.remedy, faults=tuple(others))
