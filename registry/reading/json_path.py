"""What stands at a JSON path, in an attribute or in the comments of a text?

A JSON path is ``$`` followed by steps: ``.name`` (letters, digits, ``_`` and ``-``),
``["any name"]`` or ``[0]``.  There are no wildcards and no searches: a path names one value.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from typing import Any, Final, Protocol

from registry.errors import InputError
from registry.reading.limits import ReadingLimits

__all__ = ["CommentSource", "MomentSource", "follow", "parsed_json"]

_STEP: Final = re.compile(r"""\.([\w-]+)|\[(\d{1,9})\]|\["([^"]*)"\]|\['([^']*)'\]""")
_PAIR: Final = re.compile(r"\s*([^:=]+?)\s*[:=]\s*(.+?)\s*")
_MOST_LINES: Final = 10_000
"""Comment lines that one JSON object may be spread over."""


class MomentSource(Protocol):
    """Where gate volts, settings and the time are looked up in one open file."""

    def value(self, path: str) -> object:
        """Return the number, text, list or object at ``path``.

        Raises:
            InputError: there is none.
        """

    def group(self, path: str) -> Mapping[str, object]:
        """Return all named values at ``path``: an object, or a group's attributes or datasets.

        Raises:
            InputError: there is none.
        """


def parsed_json(text: str, *, where: str, limits: ReadingLimits) -> Any:
    """Return the value of the JSON ``text``.

    Raises:
        InputError: it is no JSON, too long or too deeply nested.
    """
    if len(text) > limits.json_bytes:
        raise InputError(
            f"a JSON text of {len(text)} characters is too long",
            where=where,
            remedy="shorten it or use a layout",
        )
    try:
        return json.loads(text)
    except (ValueError, RecursionError) as error:
        raise InputError(f"this is no JSON: {error}", where=where, remedy="correct the text") from error


def follow(value: Any, path: str, *, where: str) -> Any:
    """Return what stands at ``path`` (with its ``$``) in a parsed JSON ``value``.

    Raises:
        InputError: the path is malformed, or leads nowhere; the names there are listed.
    """
    for step in _steps(path, where):
        named = isinstance(step, str) and isinstance(value, dict) and step in value
        counted = isinstance(step, int) and isinstance(value, list) and step < len(value)
        if not named and not counted:
            raise _nowhere(path, step, value, where)
        value = value[step]
    return value


def _steps(path: str, where: str) -> list[str | int]:
    steps: list[str | int] = []
    at = 1
    while at < len(path) or not path.startswith("$"):
        match = _STEP.match(path, at) if path.startswith("$") else None
        if match is None:
            raise InputError(
                f"{path!r} is no JSON path",
                where=where,
                remedy='write e.g. $.gates.P1 or $["gate volts"]["P 1"]',
            )
        name, index, double, single = match.groups()
        steps.append(
            int(index) if index is not None else next(s for s in (name, double, single) if s is not None)
        )
        at = match.end()
    return steps


def _nowhere(path: str, step: str | int, value: Any, where: str) -> InputError:
    if isinstance(value, dict):
        there = f"there are: {', '.join(map(str, list(value)[:20]))}"
    elif isinstance(value, list):
        there = f"there is a list of {len(value)} values"
    else:
        there = f"there is {str(value)[:40]!r}"
    return InputError(
        f"{path!r} leads nowhere at {step!r}", where=where, remedy=f"{there}; correct the layout"
    )


class CommentSource:
    """Looks values up in the comments of a text.

    ``$.gates.P1`` looks into the JSON objects among the comments (each in a line of its
    own or spread over several), the first one that has the path; ``#temperature`` is what
    follows ``temperature:`` or ``temperature =`` in a comment.
    """

    def __init__(self, comments: Sequence[str], where: str, limits: ReadingLimits) -> None:
        """Keep the comments; nothing is parsed before something is looked up."""
        self._comments = comments
        self._where = f"{where}, comments"
        self._limits = limits
        self._objects: list[Any] | None = None

    def value(self, path: str) -> object:
        """Return what ``path`` names; InputError if nothing does."""
        if path.startswith("#"):
            return self._named(path[1:].strip())
        objects = self._json()
        if not objects:
            raise InputError(
                f"no comment holds the JSON object that {path!r} looks into",
                where=self._where,
                remedy='check the layout: $.name looks into JSON, "#name" for a comment "name: value"',
            )
        for document in objects[:-1]:
            try:
                return follow(document, path, where=self._where)
            except InputError:
                continue
        return follow(objects[-1], path, where=self._where)

    def group(self, path: str) -> Mapping[str, object]:
        """Return the JSON object at ``path``; InputError if there is none."""
        value = self.value(path)
        if not isinstance(value, dict):
            raise InputError(
                f"{path!r} is no JSON object", where=self._where, remedy="name an object of names and values"
            )
        return value

    def _named(self, name: str) -> str:
        known: list[str] = []
        for comment in self._comments:
            match = _PAIR.fullmatch(comment)
            if match is not None and not comment.startswith("{"):
                if match[1] == name:
                    return match[2]
                known.append(match[1])
        there = f"there are: {', '.join(known[:20])}" if known else 'there is no comment "name: value"'
        raise InputError(
            f"no comment is named {name!r}", where=self._where, remedy=f"{there}; correct the layout"
        )

    def _json(self) -> list[Any]:
        if self._objects is None:
            found: list[Any] = []
            at = 0
            while at < len(self._comments):
                at = self._take(at, found) if self._comments[at].startswith("{") else at + 1
            self._objects = found
        return self._objects

    def _take(self, at: int, found: list[Any]) -> int:
        """Parse the object that begins in comment ``at``; return where to go on."""
        depth, text = 0, ""
        for upto in range(at, min(len(self._comments), at + _MOST_LINES)):
            text += self._comments[upto] + "\n"
            depth += self._comments[upto].count("{") - self._comments[upto].count("}")
            if depth <= 0:
                found.append(parsed_json(text, where=self._where, limits=self._limits))
                return upto + 1
        raise InputError(
            "a JSON object in the comments does not end", where=self._where, remedy="correct the text"
        )
