"""How does a fault of a library below become an error that a reader can act on?

Damaged files make h5py, numpy, zlib and zipfile raise nearly anything.  ``as_input_error``
stands around the narrow calls into them and around nothing else.
"""

from __future__ import annotations

import struct
import tokenize
import zipfile
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Final

from registry.errors import InputError, MillikeepError

__all__ = ["as_input_error", "damaged"]

_DAMAGE: Final = (
    *(OSError, EOFError, ValueError, TypeError, KeyError, IndexError, AttributeError, RuntimeError),
    # numpy takes the header of an array apart with the tokenizer of Python.
    tokenize.TokenError,
    *(OverflowError, MemoryError, SyntaxError, AssertionError, struct.error, zlib.error, zipfile.BadZipFile),
)


def damaged(where: str, why: str) -> InputError:
    """Return the error for a file whose bytes are not what its format says."""
    return InputError(
        f"the file is damaged or cut short: {why}",
        where=where,
        remedy="copy the file again from where it was measured, or wait until it is completely written",
    )


@contextmanager
def as_input_error(where: str) -> Iterator[None]:
    """Turn what a library raises over damaged bytes into an InputError with its cause.

    Raises:
        InputError: a call inside the block failed.
    """
    try:
        yield
    except MillikeepError:
        raise
    except _DAMAGE as error:
        why = " ".join(str(error).split())[:200] or type(error).__name__
        raise damaged(where, why) from error
