"""Whole processes beside ``python -c "import sqlalchemy"``, turn and turn about."""

from __future__ import annotations

import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from registry.keeping.cooling import begin_cooldown
from registry.keeping.describing import add_chip, add_device
from registry.keeping.opening import create
from registry.keeping.tunings import record_tuning
from registry.records.descriptions import Gate

PAIRS = 9


def seconds(words: list[str]) -> float:
    start = time.perf_counter()
    subprocess.run([sys.executable, *words], check=False, capture_output=True)
    return time.perf_counter() - start


@pytest.fixture
def place(tmp_path: Path) -> str:
    with create(tmp_path / "registry") as registry:
        add_chip(registry, "K7")
        add_device(registry, "K7/D1", gates=[Gate("P1", "plunger", 0, 0, -1, 1, 0.01, 0.1)])
        begin_cooldown(registry, "C1", cryostat="bench", chips=["K7"], at=0)
        record_tuning(registry, "K7/D1", {"P1": 0.5})
    return str(tmp_path / "registry")


@pytest.mark.parametrize(("command", "goal"), [("--help", 0.8), ("last-good", 2.2)])
def test_cold_start(
    benchmark: Any, ratio: Callable[..., None], place: str, command: str, goal: float
) -> None:
    words = ["-m", "registry.command.main"]
    words += ["--help"] if command == "--help" else ["--registry", place, "last-good", "K7/D1"]
    pairs = [(seconds(words), seconds(["-c", "import sqlalchemy"])) for _ in range(PAIRS)]
    benchmark.pedantic(seconds, args=(words,), rounds=1)
    ratio(f"millikeep {command} beside import sqlalchemy", statistics.median(a / b for a, b in pairs), goal)
