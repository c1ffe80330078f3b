"""Where a registry is: a directory or a PostgreSQL URL, and what stands in it."""

from __future__ import annotations

import getpass
import os
from dataclasses import dataclass
from pathlib import Path

from registry.errors import InputError

__all__ = ["Place", "default_place", "person_name", "place_of"]

ENVIRONMENT = "MILLIKEEP_REGISTRY"
FILES_ENVIRONMENT = "MILLIKEEP_FILES"
PERSON_ENVIRONMENT = "MILLIKEEP_AS"
FILES_NAME = "files"
HEAD_NAME = "head"


@dataclass(frozen=True)
class Place:
    """A registry's place.

    Attributes:
        directory: of an SQLite registry, else None; url: of a PostgreSQL one, else None.
        is_default: the user's own directory, which is made on first use.
    """

    directory: Path | None
    url: str | None
    is_default: bool = False


def place_of(where: str | os.PathLike[str] | None) -> Place:
    """The place meant by ``where``: given, else MILLIKEEP_REGISTRY, else the user's own.

    Raises:
        InputError: a URL of a database that is not supported.
    """
    text = os.fspath(where) if where is not None else os.environ.get(ENVIRONMENT, "")
    if not text:
        return default_place()
    if text.startswith(("postgresql://", "postgres://", "postgresql+psycopg://")):
        return Place(None, text.replace("postgres://", "postgresql://", 1))
    if "://" in text:
        raise InputError(
            f"no registry can be opened at {text.split('://', maxsplit=1)[0]}://",
            where="--registry",
            remedy="give a directory, or a URL that begins with postgresql://",
        )
    return Place(Path(text).expanduser(), None)


def default_place() -> Place:
    """The directory of this user, made on first use."""
    from platformdirs import user_data_path

    return Place(user_data_path("millikeep", appauthor=False), None, is_default=True)


def default_files(registry_id: str) -> Path:
    """File store of a PostgreSQL registry for which none was named."""
    from platformdirs import user_data_path

    return user_data_path("millikeep", appauthor=False) / f"files-{registry_id[:8]}"


def person_name(given: str | None) -> str:
    """Who is at work: given, else MILLIKEEP_AS, else the login name."""
    name = given or os.environ.get(PERSON_ENVIRONMENT, "")
    if not name:
        try:
            name = getpass.getuser()
        except (OSError, KeyError):
            name = "unknown"
    return name
