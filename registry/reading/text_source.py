"""Which text do the bytes of a file hold: compressed or not, in which encoding?

UTF-8 and UTF-16 with a byte-order mark, plain UTF-8, and as the last resort Windows-1252,
which older instruments write for the micro sign; that is noted.
"""

from __future__ import annotations

import codecs
import zlib
from typing import Final

from registry.errors import InputError
from registry.reading.faults import damaged
from registry.reading.limits import ReadingLimits

__all__ = ["GZIP_MAGIC", "decoded", "gunzipped"]

GZIP_MAGIC: Final = b"\x1f\x8b"
_CHUNK: Final = 2**20
_MARKS: Final = (
    (codecs.BOM_UTF8, "utf-8"),
    (codecs.BOM_UTF16_LE, "utf-16-le"),
    (codecs.BOM_UTF16_BE, "utf-16-be"),
)
_CONTROL: Final = bytes(set(range(32)) - set(b"\t\n\r\x0b\x0c\x1a")) + b"\x7f"


def gunzipped(content: bytes, *, where: str, limits: ReadingLimits) -> bytes:
    """Return what gzip ``content`` holds; several members are joined (RFC 1952, 2.2).

    Raises:
        InputError: it is damaged, cut short, or larger than ``limits.text_bytes``.
    """
    parts: list[bytes] = []
    size = 0
    rest = content
    while rest.startswith(GZIP_MAGIC):
        stream = zlib.decompressobj(wbits=31)
        pending = rest
        while not stream.eof:
            try:
                part = stream.decompress(pending, _CHUNK)
            except zlib.error as error:
                raise damaged(where, str(error)) from error
            pending = stream.unconsumed_tail
            if not part and not pending and not stream.eof:
                raise damaged(where, "the gzip stream ends too early")
            size += len(part)
            if size > limits.text_bytes:
                raise _too_large(where, limits)
            parts.append(part)
        rest = stream.unused_data
    if rest.strip(b"\0"):
        raise damaged(where, "there is something else after the gzip stream")
    return b"".join(parts)


def decoded(content: bytes, *, where: str, limits: ReadingLimits) -> tuple[str, tuple[str, ...]]:
    """Return the text of ``content`` with ``\\n`` line ends, and notes.

    Raises:
        InputError: it is larger than ``limits.text_bytes``, or no text.
    """
    if len(content) > limits.text_bytes:
        raise _too_large(where, limits)
    notes: tuple[str, ...] = ()
    for mark, encoding in _MARKS:
        if content.startswith(mark):
            text = _strict(content[len(mark) :], encoding, where)
            break
    else:
        if content.translate(None, _CONTROL) != content:
            raise InputError(
                "this is neither a text nor another format that is read here",
                where=where,
                remedy="give a text, HDF5, NPZ or NPY file; a text in UTF-16 needs its byte-order mark",
            )
        try:
            text = content.decode("utf-8")
        except UnicodeDecodeError:
            text = _strict(content, "cp1252", where)
            notes = ("the text is not UTF-8; it was read as Windows-1252",)
    if "\0" in text:
        raise damaged(where, "there is a NUL in the text")
    return text.replace("\r\n", "\n").replace("\r", "\n"), notes


def _strict(content: bytes, encoding: str, where: str) -> str:
    try:
        return content.decode(encoding)
    except UnicodeDecodeError as error:
        raise damaged(where, f"byte {error.start} is no {encoding} text") from error


def _too_large(where: str, limits: ReadingLimits) -> InputError:
    return InputError(
        f"the text is larger than {limits.text_bytes} bytes",
        where=where,
        remedy="save measurements of this size as HDF5",
    )
