"""``fit``, ``admit`` and ``derive``: the promised documents, and refusals that are told."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

Shell = Callable[..., Any]

MEMBERS = {"quantity", "subject", "value", "standard_uncertainty", "unit", "bound", "why"}
# k / e of the exact constants of the SI of 2019; 4 arcosh(sqrt 2) from cosh^-2 = 1/2.
THERMAL_VOLT = 1.380649e-23 / 1.602176634e-19 * 0.1
FWHM = 3.5254943480781717 * THERMAL_VOLT / 0.1


@pytest.fixture
def state(lab: Shell) -> Shell:
    words = "tuning record K7/A --volts first.csv --at 2026-03-02T08:00:00Z"
    assert lab(*words.split()).code == 0
    return lab


def values(document: Any, subject: str | None = None) -> dict[str, tuple[float, float]]:
    return {
        one["quantity"]: (one["value"], one["standard_uncertainty"])
        for one in document["quantities"]
        if one["subject"] == subject
    }


def test_a_bare_file_is_fitted_without_any_registry(shell: Shell, peaks: Path) -> None:
    outcome = shell("fit", "coulomb-peaks", peaks, "--given", "lever_arm=0.1±0.001", "--json")
    assert outcome.code == 0
    document = outcome.document
    assert {"method", "version", "source_digest", "quantities", "warnings", "refused"} <= set(document)
    assert document["refused"] is None
    assert len(document["source_digest"]) == 64
    assert all(set(one) >= MEMBERS for one in document["quantities"])
    found = values(document)
    width, u_width = found["peak_width"]
    assert abs(width - FWHM) < 4 * u_width
    temperature, u_temperature = found["electron_temperature"]
    assert abs(temperature - 0.1) < 4 * u_temperature
    assert u_temperature == pytest.approx(0.001, rel=0.1)
    spacing, u_spacing = found["addition_voltage"]
    assert abs(spacing - 0.012) < 4 * u_spacing


def test_the_text_of_a_fit_rounds_and_names_units(shell: Shell, peaks: Path) -> None:
    text = shell("fit", "coulomb-peaks", peaks, "--given", "lever_arm=0.1+-0.001").out
    assert " ± " in text
    assert "mK" in text


def test_a_refused_fit_says_why_and_ends_with_exit_code_1(shell: Shell) -> None:
    rows = "".join(f"{0.6 + n * 1e-4},1e-9\n" for n in range(300))
    Path("flat.csv").write_text("P1 [V],current [A]\n" + rows)
    outcome = shell("fit", "coulomb-peaks", "flat.csv", "--json")
    assert outcome.code == 1
    assert outcome.document["refused"]
    assert [one for one in outcome.document["quantities"] if one["value"] is not None] == []
    text = shell("fit", "coulomb-peaks", "flat.csv")
    assert text.code == 1
    assert "refused: " in text.out


GIVEN = {
    "unknown name": "colour=red",
    "no number": "lever_arm=much",
    "negative": "lever_arm=-0.1",
    "no equals sign": "lever_arm",
}


@pytest.mark.parametrize("given", GIVEN.values(), ids=GIVEN.keys())
def test_a_wrong_given_value_is_refused_before_anything_is_fitted(
    shell: Shell, peaks: Path, given: str
) -> None:
    outcome = shell("fit", "coulomb-peaks", peaks, "--given", given, "--json")
    assert outcome.code == 2
    assert outcome.document["error"]["what"]


def test_a_repeated_file_is_listed_with_its_old_id(state: Shell, peaks: Path) -> None:
    first = state("admit", peaks, "--json").document
    again = state("admit", peaks, "--json").document
    assert first["failed"] == again["failed"] == []
    assert first["measurements"][0]["id"] == again["measurements"][0]["id"]
    assert [one["measurements"][0]["new"] for one in (first, again)] == [True, False]
    assert first["measurements"][0]["file"] == "peaks.h5"
    assert state("admit", peaks).out.endswith("peaks.h5 (already recorded)\n")


def test_a_bad_file_fails_alone_with_its_reason(state: Shell, peaks: Path) -> None:
    Path("noise.h5").write_bytes(b"\x89HDF\r\n\x1a\n" + b"\x00" * 40)
    outcome = state("admit", "noise.h5", peaks, "missing.h5", "--json")
    assert outcome.code == 2
    assert [one["file"] for one in outcome.document["measurements"]] == ["peaks.h5"]
    assert [one["file"] for one in outcome.document["failed"]] == ["noise.h5", "missing.h5"]
    assert all(one["why"] for one in outcome.document["failed"])
    text = state("admit", "noise.h5", peaks)
    assert text.code == 2
    assert "not admitted: noise.h5" in text.err
    assert "peaks.h5" in text.out


def test_one_command_goes_from_the_file_to_parameters(state: Shell, peaks: Path) -> None:
    outcome = state("admit", peaks, "--kind", "coulomb-peaks", "--derive", "--json")
    (analysis,) = outcome.document["measurements"][0]["analyses"]
    assert analysis["method"] == "coulomb-peaks"
    assert len(analysis["id"]) == 64
    assert all(len(one["id"]) == 64 for one in analysis["quantities"])
    text = state("admit", peaks, "--kind", "coulomb-peaks", "--derive")
    assert text.code == 0


def test_derive_gives_ids_and_repeating_it_records_nothing(state: Shell, peaks: Path) -> None:
    measurement = state("admit", peaks, "--json").document["measurements"][0]["id"]
    words = ("derive", "coulomb-peaks", measurement, "--given", "lever_arm=0.1±0.001", "--subject", "D1")
    first, again = state(*words, "--json").document, state(*words, "--json").document
    assert (first["new"], again["new"]) == (True, False)
    assert first["id"] == again["id"]
    assert [one["id"] for one in first["quantities"]] == [one["id"] for one in again["quantities"]]
    assert "electron_temperature" in values(first, "D1")
    assert "(already recorded)" in state(*words).out


def test_a_given_value_may_be_a_parameter_on_record(state: Shell, peaks: Path) -> None:
    measurement = state("admit", peaks, "--json").document["measurements"][0]["id"]
    Path("values.csv").write_text(
        "cooldown,quantity,subject,value,standard_uncertainty,unit,at,source\n"
        "C1,lever_arm,D1,0.1,0.008,eV/V,2026-03-02T09:00:00Z,notebook\n"
    )
    assert state("parameter", "load", "K7/A", "values.csv").code == 0
    lever_arm = state("find", "notebook", "--json").document["hits"][0]["id"]
    document = state(
        "derive", "coulomb-peaks", measurement, "--given", f"lever_arm={lever_arm}", "--json"
    ).document
    temperature, u = values(document)["electron_temperature"]
    assert u / temperature == pytest.approx(0.08, rel=0.02)
    lineage = state("lineage", document["id"], "--json").document
    assert lever_arm in [node["id"] for node in lineage["nodes"]]


def test_the_name_of_a_file_reaches_no_terminal_as_it_is(state: Shell, peaks: Path) -> None:
    hostile = peaks.rename("a\x1b[2Jb\u202e.h5")
    admitted = state("admit", hostile, "nowhere\x9b.h5")
    assert "a\\x1b[2Jb\\u202e.h5" in admitted.out
    assert "nowhere\\x9b.h5" in admitted.err
    page = state("tuning", "show", "latest").out
    assert "a\\x1b[2Jb\\u202e.h5" in page
    assert "\x1b" not in admitted.out + admitted.err + page
