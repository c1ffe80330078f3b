"""Ratios against a baseline of the same run; the goals are for reading, not assertions on time."""

from __future__ import annotations

from collections.abc import Callable

import pytest

_RATIOS: list[tuple[str, float, float]] = []


@pytest.fixture
def ratio() -> Callable[[str, float, float], None]:
    """Call it with what was measured, the ratio and the goal; the table comes at the end."""
    return lambda what, measured, goal: _RATIOS.append((what, measured, goal))


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    for what, measured, goal in _RATIOS:
        terminalreporter.write_line(f"{what:52} {measured:6.2f} x   goal {goal:.2f} x")
