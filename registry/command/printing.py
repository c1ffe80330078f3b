"""What goes to the terminal, and in which form: answers, errors, numbers, times.

stdout takes the answer, stderr everything else.  Labels, notes and file names come from
anywhere, so nothing reaches a terminal before ``plain`` made control characters visible.
"""

from __future__ import annotations

import json
import math
import os
import sys
import textwrap
import unicodedata
from collections.abc import Iterable, Mapping, Sequence
from itertools import starmap
from typing import Any, TextIO

from registry.command.outcome import Answer
from registry.errors import MillikeepError
from registry.records.measured import measured

__all__ = [
    "error_document",
    "error_lines",
    "millivolts",
    "moment",
    "plain",
    "print_answer",
    "print_error",
    "setting",
    "subjects",
    "table",
    "wrap",
]

WIDTH = 80
"""Columns that every page fits into where names are of ordinary length."""
LEAST_WIDTH = 24
"""Columns of a wrapped column beside wide ones; narrower would be a column of words."""

# Control, format, private, surrogate and unassigned characters; line and paragraph ends.
_HIDDEN = frozenset({"Cc", "Cf", "Co", "Cs", "Cn", "Zl", "Zp"})


def plain(text: object) -> str:
    """``text`` with every control, format and escape character written as ``\\x1b``.

    The result holds no line end, and shown on a terminal it moves nothing.
    """
    shown = str(text)
    if shown.isascii() and shown.isprintable():
        return shown
    return "".join(_visible(character) for character in shown)


def _visible(character: str) -> str:
    if unicodedata.category(character) not in _HIDDEN:
        return character
    code = ord(character)
    if character in "\n\r\t":
        return {"\n": "\\n", "\r": "\\r", "\t": "\\t"}[character]
    return f"\\x{code:02x}" if code < 0x100 else f"\\u{code:04x}" if code < 0x10000 else f"\\U{code:08x}"


def moment(at: int | str | None) -> str:
    """A moment as UTC text with Z, without a fraction of zero; ``-`` where there is none."""
    if at is None:
        return "-"
    if isinstance(at, int):
        from registry.records.instants import format_instant

        at = format_instant(at)
    return at.replace(".000000Z", "Z")


def millivolts(volts: float | None, *, sign: bool = False) -> str:
    """Volts as millivolts to three decimals, ``-`` where there are none."""
    if volts is None or math.isnan(volts):
        return "-"
    return f"{volts * 1e3 + 0.0:{'+' if sign else ''}.3f}"


def subjects(series: Iterable[tuple[str | None, Mapping[str, Any]]]) -> list[str]:
    """What each value of a list is about; conditions are named where they tell values apart.

    Args:
        series: subject and conditions (``{"direction": "up"}``) of each value.
    """
    rows = [
        (subject or "-", ", ".join(starmap(_condition, conditions.items()))) for subject, conditions in series
    ]
    differ = len({conditions for _, conditions in rows}) > 1
    return [f"{subject}, {conditions}" if differ and conditions else subject for subject, conditions in rows]


def _condition(name: str, value: object) -> str:
    """A word tells itself (``up``), a number needs its name (``level 0.1``)."""
    return f"{name} {value:g}" if isinstance(value, int | float) else str(value)


def setting(value: Mapping[str, Any]) -> str:
    """A setting, ``{"value": 5e-05, "unit": "V"}``, as ``50 µV``."""
    return measured(value["value"], 0.0, plain(value["unit"])).removesuffix(" (exact)")


def table(
    head: Sequence[str],
    rows: Iterable[Sequence[object]],
    *,
    right: Iterable[int] = (),
    wrap_last: bool = False,
) -> list[str]:
    """Rows under a head, columns aligned and two spaces apart.

    Args:
        head: name of each column.
        rows: cells, made visible with ``plain``.
        right: columns of numbers, set to the right.
        wrap_last: the last column holds sentences; break them at 80 columns.
    """
    cells = [[plain(cell) for cell in row] for row in rows]
    widths = [max(len(row[n]) for row in [list(head), *cells]) for n in range(len(head))]
    before = sum(widths[:-1]) + 2 * (len(widths) - 1)
    to_right = frozenset(right)
    lines = []
    for row in [list(head), *cells]:
        padded = [
            cell.rjust(width) if n in to_right else cell.ljust(width)
            for n, (cell, width) in enumerate(zip(row, widths, strict=True))
        ]
        if wrap_last and row[-1]:
            first, *rest = textwrap.wrap(row[-1], max(WIDTH - before, LEAST_WIDTH))
            lines.append("  ".join([*padded[:-1], first]))
            lines += [" " * before + line for line in rest]
        else:
            lines.append("  ".join(padded).rstrip())
    return lines


def wrap(text: object, indent: str = "  ") -> list[str]:
    """A sentence broken at 80 columns, every line after the first indented further.

    Args:
        text: the sentence.
        indent: before the first line; where it holds a word, the others stand beneath the
            sentence.
    """
    hanging = " " * len(indent) if indent.strip() else indent + "  "
    return textwrap.wrap(
        plain(text),
        WIDTH,
        initial_indent=indent,
        subsequent_indent=hanging,
        break_long_words=False,
        break_on_hyphens=False,
    )


def print_answer(answer: Answer, *, as_json: bool) -> None:
    """Print the answer on stdout (one JSON document, or lines) and its messages on stderr."""
    _write(sys.stderr, _text(answer.messages))
    _write(sys.stdout, _json(answer.document) if as_json else _text(answer.lines))


def print_error(document: Mapping[str, Any], lines: Sequence[str], *, as_json: bool) -> None:
    """Print an error: as the one JSON document on stdout, or as lines on stderr."""
    if as_json:
        _write(sys.stdout, _json(document))
    else:
        _write(sys.stderr, _text(lines))


def error_document(error: MillikeepError) -> dict[str, Any]:
    """The promised JSON form of an error; ``faults`` stands there only if there are some."""
    told: dict[str, Any] = {"what": error.what, "where": error.where, "remedy": error.remedy}
    if error.faults:
        told["faults"] = list(error.faults)
    return {"error": told}


def error_lines(error: MillikeepError) -> list[str]:
    """An error for people: where and what, further faults, what to do."""
    also = [f"  also: {fault}" for fault in error.faults]
    return [f"{error.where}: {error.what}", *also, f"  -> {error.remedy}"]


def _json(document: Mapping[str, Any]) -> str:
    # ASCII only: terminals obey some control characters beyond ASCII, too.
    return json.dumps(document, indent=2, allow_nan=False) + "\n"


def _text(lines: Iterable[str]) -> str:
    return "".join(f"{plain(line)}\n" for line in lines)


def _write(stream: TextIO, text: str) -> None:
    """Write in whatever encoding the stream has; a reader that has gone away is no error."""
    encoding = stream.encoding or "utf-8"
    try:
        stream.write(text.encode(encoding, "backslashreplace").decode(encoding))
        stream.flush()
    except BrokenPipeError:
        # `millikeep … | head`: Python flushes again at exit and would complain there.
        os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())
