from __future__ import annotations

import pytest

from registry.command.outcome import ExitCode, exit_code_of
from registry.errors import BadNews, DamageError, InputError, LookupFailed, MillikeepError, RegistryError

CODES: dict[type[MillikeepError], int] = {
    InputError: 2,
    LookupFailed: 2,
    RegistryError: 2,
    DamageError: 1,
    BadNews: 1,
}


@pytest.mark.parametrize(("family", "code"), CODES.items())
def test_each_family_of_errors_has_the_promised_exit_code(family: type[MillikeepError], code: int) -> None:
    assert exit_code_of(family("what", where="where", remedy="remedy")) == code


def test_every_family_of_errors_is_listed_here() -> None:
    assert set(CODES) == set(MillikeepError.__subclasses__())


def test_a_fault_of_the_program_is_never_told_as_bad_news() -> None:
    assert exit_code_of(ValueError("x")) == ExitCode.USAGE_OR_INPUT
    assert exit_code_of(KeyboardInterrupt()) == 130
