"""How a command ends: an answer with its exit code, or an error with its own.

The exit codes are part of the promise to scripts: 0 done, 1 the answer is bad news, 2 the
usage or the input is wrong.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum
from typing import Any

from registry.errors import MillikeepError

__all__ = ["Answer", "ExitCode", "exit_code_of"]


class ExitCode(IntEnum):
    """What the shell is told."""

    DONE = 0
    BAD_NEWS = 1
    USAGE_OR_INPUT = 2
    INTERRUPTED = 130
    """128 + SIGINT, as shells count."""


@dataclass(frozen=True)
class Answer:
    """What a command has to say.

    Attributes:
        document: the JSON document of ``--json``: SI units, full digests.
        lines: the same for people; untrusted text in it is made visible when printed.
        code: how it ends.
        messages: lines for stderr, in both forms of output.
    """

    document: Mapping[str, Any]
    lines: tuple[str, ...]
    code: ExitCode = ExitCode.DONE
    messages: tuple[str, ...] = ()


def exit_code_of(error: BaseException) -> ExitCode:
    """The exit code an error ends a command with."""
    if isinstance(error, KeyboardInterrupt):
        return ExitCode.INTERRUPTED
    if isinstance(error, MillikeepError):
        return ExitCode(error.exit_code)
    # Wrong usage, a fault of the operating system, and a fault of our own: in none of
    # them is there an answer, so none may look like bad news (1).
    return ExitCode.USAGE_OR_INPUT
