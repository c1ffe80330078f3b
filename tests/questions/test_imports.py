"""Whether the quick questions stay quick to import."""

from __future__ import annotations

import subprocess
import sys

import pytest

HEAVY = ("sqlmodel", "alembic", "pandas", "scipy", "numpy", "h5py", "pint", "textual", "pydantic")


@pytest.mark.parametrize("module", ["last_good", "compare", "now", "tunings", "find", "parameters"])
def test_a_quick_question_imports_nothing_heavy(module: str) -> None:
    code = (
        f"import sys, registry.questions.{module};print(*[name for name in {HEAVY!r} if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.split() == []
