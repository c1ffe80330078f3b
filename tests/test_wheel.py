"""The built wheel, outside the checkout, with nothing of the checkout on its path."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

CHECKOUT = Path(__file__).resolve().parents[1]


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the wheel's content, as pip lays it out."""
    folder = tmp_path_factory.mktemp("wheel")
    build = [
        sys.executable,
        "-m",
        "build",
        "--wheel",
        "--no-isolation",
        "--outdir",
        str(folder),
        str(CHECKOUT),
    ]
    subprocess.run(build, check=True, capture_output=True)
    (wheel,) = folder.glob("*.whl")
    site = folder / "site"
    install = [
        sys.executable,
        "-m",
        "pip",
        "install",
        "--quiet",
        "--no-deps",
        "--target",
        str(site),
        str(wheel),
    ]
    subprocess.run(install, check=True, capture_output=True)
    return site


def run(installed: Path, folder: Path, *words: str) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PYTHONPATH": str(installed)}
    return subprocess.run(
        [sys.executable, str(installed / "bin" / "millikeep"), *words],
        cwd=folder,
        env=environment,
        capture_output=True,
        text=True,
        check=False,
    )


def test_the_wheel_brings_its_migrations_and_makes_a_registry(installed: Path, tmp_path: Path) -> None:
    place = tmp_path / "registry"
    made = run(installed, tmp_path, "create", str(place))
    assert made.returncode == 0, made.stderr
    chip = run(installed, tmp_path, "--registry", str(place), "--json", "chip", "add", "K7")
    assert len(json.loads(chip.stdout)["id"]) == 64
    audit = run(installed, tmp_path, "--registry", str(place), "--json", "audit")
    assert json.loads(audit.stdout)["findings"] == []


def test_the_wheel_runs_its_own_code_and_not_the_checkout(installed: Path, tmp_path: Path) -> None:
    code = "import registry, registry.keeping.migrating as m; print(registry.__file__); print(m._folder())"
    shown = subprocess.run(
        [sys.executable, "-c", code],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(installed)},
        capture_output=True,
        text=True,
        check=True,
    )
    assert [Path(line).is_relative_to(installed) for line in shown.stdout.splitlines()] == [True, True]
