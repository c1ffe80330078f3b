"""The public names of ``registry``: what a notebook may rely on."""

from __future__ import annotations

import subprocess
import sys

import pytest

import registry


@pytest.mark.parametrize("name", registry.__all__)
def test_every_public_name_resolves_and_is_explained(name: str) -> None:
    assert (getattr(registry, name).__doc__ or "").strip()


def test_the_public_list_is_sorted_and_names_nothing_twice() -> None:
    assert sorted(set(registry.__all__)) == registry.__all__


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no_such_name"):
        registry.no_such_name  # noqa: B018


def test_importing_the_package_loads_no_library() -> None:
    code = "import sys, registry; print(sorted({m.split('.')[0] for m in sys.modules} & set(sys.argv[1:])))"
    heavy = ["sqlalchemy", "sqlmodel", "alembic", "numpy", "scipy", "pandas", "h5py", "pint", "typer"]
    shown = subprocess.run([sys.executable, "-c", code, *heavy], capture_output=True, text=True, check=True)
    assert shown.stdout.strip() == "[]"
