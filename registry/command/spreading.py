"""Which bare words of a command line are further values of an option that may be repeated?

``--given a=1 b=2`` then stands for ``--given a=1 --given b=2``, and ``begin C1 --chip A B``
for ``begin C1 --chip A --chip B``.  Pure; knows nothing of the commands.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import islice

__all__ = ["Form", "spread"]


@dataclass(frozen=True)
class Form:
    """How an option is written.

    Attributes:
        takes_value: a word follows it.
        many: it may be repeated.
        pairs: its values have the form NAME=VALUE.
    """

    takes_value: bool
    many: bool
    pairs: bool = False


def spread(words: Sequence[str], options: Mapping[str, Form], places: int | None) -> Iterator[str]:
    """The words, with the name of an option repeated before each of its further values.

    A bare word after such an option is a further value if it has the form NAME=VALUE that
    the option takes, or if the command has no place for that many bare words.

    Args:
        words: of the command line, after the command's name.
        options: by name, ``--chip``.
        places: how many bare words the command takes; None for any number.
    """
    spare = 0 if places is None else _bare_words(words, options) - places
    many: str | None = None
    rest = iter(words)
    for word in rest:
        if word == "--":
            yield from (word, *rest)
        elif _is_option(word):
            form = options.get(word.partition("=")[0])
            many = word.partition("=")[0] if form is not None and form.many else None
            yield word
            if form is not None and form.takes_value and "=" not in word:
                yield from islice(rest, 1)
        else:
            if many is not None and ("=" in word if options[many].pairs else spare > 0):
                spare -= 1
                yield many
            else:
                many = None
            yield word


def _bare_words(words: Sequence[str], options: Mapping[str, Form]) -> int:
    """How many words are neither options nor their values."""
    bare = 0
    rest = iter(words)
    for word in rest:
        if word == "--":
            return bare + sum(1 for _ in rest)
        if not _is_option(word):
            bare += 1
        elif word in options and options[word].takes_value:
            next(rest, None)
    return bare


def _is_option(word: str) -> bool:
    return word.startswith("-") and len(word) > 1
