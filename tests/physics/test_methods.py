from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import registry.physics
from registry.errors import InputError
from registry.physics import sources
from registry.physics.catalogue import FACTS, check_given, facts
from registry.physics.methods import METHODS, method
from registry.physics.result import Given

HERE = Path(registry.physics.__file__).parent
#: Containers, lists and the digest itself: they make no number.
NO_NUMBERS = {"catalogue", "result", "sources"}


def _imported(module: str, seen: set[str]) -> set[str]:
    """All modules of the package that ``module`` imports, directly or not."""
    seen.add(module)
    for node in ast.walk(ast.parse((HERE / f"{module}.py").read_text())):
        if not isinstance(node, ast.ImportFrom) or not (node.module or "").startswith("registry.physics"):
            continue
        path = (node.module or "").removeprefix("registry.physics").lstrip(".")
        for name in [path] if path else [alias.name for alias in node.names]:
            if name not in seen:
                _imported(name, seen)
    return seen


@pytest.mark.parametrize("name", FACTS)
def test_the_digest_covers_all_code_that_makes_the_numbers(name: str) -> None:
    assert set(facts(name).sources) == _imported(facts(name).module, set()) - NO_NUMBERS


@pytest.mark.parametrize("name", FACTS)
def test_the_main_quantity_is_one_of_those_returned(name: str) -> None:
    assert METHODS[name].main_quantity in METHODS[name].quantities


def test_a_listing_loads_no_numerical_library() -> None:
    code = (
        "import sys; from registry.physics.methods import METHODS; "
        "[(m.name, m.title, m.givens, m.source_digest) for m in METHODS.values()]; "
        "print([m for m in ('numpy', 'scipy') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_an_unknown_method_names_the_known_ones() -> None:
    with pytest.raises(InputError, match="coulomb-peaks, dot-transition"):
        method("peak-finder")


def test_another_version_is_told_which_one_there_is() -> None:
    assert method("dot-transition", "1").version == "1"
    with pytest.raises(InputError, match="use version 1"):
        method("dot-transition", "0")


def test_line_ends_do_not_change_the_digest(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    before = sources.source_digest("dot-transition")
    for module in facts("dot-transition").sources:
        source = (HERE / f"{module}.py").read_bytes().replace(b"\n", b"\r\n")
        (tmp_path / f"{module}.py").write_bytes(source)
    monkeypatch.setattr(sources, "__file__", str(tmp_path / "sources.py"))
    sources.source_digest.cache_clear()
    assert sources.source_digest("dot-transition") == before
    (tmp_path / "noise.py").write_bytes(b"# other")
    sources.source_digest.cache_clear()
    assert sources.source_digest("dot-transition") != before
    sources.source_digest.cache_clear()


BAD_GIVENS: dict[str, tuple[dict[str, Given], str]] = {
    "unknown name": ({"temperature": Given(0.1)}, "temperature is not known"),
    "word for a number": ({"lever_arm": Given("large")}, "no number"),
    "number for a word": ({"model": Given(1.0)}, "a word is wanted"),
    "unknown word": ({"model": Given("gauss")}, "single-level, multi-level, lifetime, auto"),
    "negative": ({"electron_temperature": Given(-0.1)}, "above 0 K"),
    "zero": ({"lever_arm": Given(0.0)}, "above 0 eV/V"),
    "in another unit": ({"lever_arm": Given(100.0)}, "at most 1 eV/V"),
    "not a number": ({"lever_arm": Given(float("nan"))}, "no number"),
    "negative uncertainty": ({"lever_arm": Given(0.1, -0.01)}, "uncertainty of lever_arm"),
}


@pytest.mark.parametrize("flaw", BAD_GIVENS)
def test_an_impossible_given_is_named_with_what_is_allowed(flaw: str) -> None:
    given, fault = BAD_GIVENS[flaw]
    with pytest.raises(InputError, match=fault) as caught:
        check_given(given, facts("coulomb-peaks"))
    assert "lever_arm (eV/V" in caught.value.remedy


def test_all_impossible_givens_are_named_at_once() -> None:
    with pytest.raises(InputError) as caught:
        check_given({"a": Given(1.0), "b": Given(2.0)}, facts("dot-transition"))
    assert caught.value.faults == ("b is not known here",)
