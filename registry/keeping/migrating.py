"""How a registry's schema is brought from one version to another (Alembic).

The migrations lie in ``migrations/`` of the checkout and in ``registry/migrations`` of an
installed copy; the same ones run on both engines, each in the caller's transaction.
"""

from __future__ import annotations

from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.script import ScriptDirectory
from sqlalchemy import Connection

__all__ = ["newest_revision", "revisions", "upgrade"]


def _folder() -> Path:
    package = Path(__file__).resolve().parents[1]
    for folder in (package / "migrations", package.parent / "migrations"):
        if (folder / "env.py").is_file():
            return folder
    raise RuntimeError("the installation is incomplete: its migrations are missing")


def _config(connection: Connection | None = None) -> Config:
    config = Config()
    config.set_main_option("script_location", str(_folder()).replace("%", "%%"))
    config.attributes["connection"] = connection
    return config


def upgrade(connection: Connection, revision: str = "head") -> None:
    """Bring the schema on ``connection`` to ``revision``, inside its open transaction."""
    command.upgrade(_config(connection), revision)


def newest_revision() -> str:
    """The newest migration there is."""
    head = ScriptDirectory.from_config(_config()).get_current_head()
    assert head is not None
    return head


def revisions() -> list[str]:
    """All migrations, oldest first."""
    walk = ScriptDirectory.from_config(_config()).walk_revisions()
    return [script.revision for script in walk][::-1]
