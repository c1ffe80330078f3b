"""Whether a word is found wherever it stands, alike on both engines."""

from __future__ import annotations

import pytest

from registry.errors import InputError
from registry.keeping.changing import amend, withdraw
from registry.questions.find import find

from .conftest import Lab, day


def _found(lab: Lab, text: str) -> list[tuple[str, str, str]]:
    return [(hit.kind, hit.field, hit.text) for hit in find(lab.registry, text)]


def test_a_word_is_found_in_labels_purposes_notes_reasons_and_file_names(lab: Lab) -> None:
    lab.begin("Sweet-2", 5)
    tuning = lab.state(6, purpose="sweet spot")
    lab.judge(tuning, "good", 7, why="Sweet as honey")
    lab.event("note", 7, "Sweet-2", note="sweetened")
    lab.measurement(tuning, 6.1, "my_SWEET_trace.h5")
    assert {(kind, field) for kind, field, _ in _found(lab, "sweet")} == {
        ("cooldown", "label"),
        ("event", "note"),
        ("measurement", "file_name"),
        ("standing", "why"),
        ("tuning", "purpose"),
    }


@pytest.mark.parametrize("text", ["ÄRGER", "ärger", "Ärger mit", "A\u0308rger"])
def test_letters_beyond_ascii_are_found_in_any_case_and_form(lab: Lab, text: str) -> None:
    lab.event("note", 1, note="Ärger mit der Pumpe")
    assert _found(lab, text) == [("event", "note", "Ärger mit der Pumpe")]


@pytest.mark.parametrize("text", ["100%", "a_b", "50\\%", "100% s_"])
def test_signs_that_databases_read_as_wildcards_mean_themselves(lab: Lab, text: str) -> None:
    lab.event("note", 1, note=f"it was {text}ure")
    lab.event("note", 2, note="it was 1000 axb 50 % sure")
    assert [found for _, _, found in _found(lab, text)] == [f"it was {text}ure"]


def test_the_beginning_of_an_id_finds_the_record(lab: Lab) -> None:
    tuning = lab.state(1)
    assert ("tuning", "id", tuning) in _found(lab, tuning[:8])
    assert ("tuning", "id", tuning) in _found(lab, tuning[:8].upper())


def test_an_amended_value_and_the_old_one_both_lead_to_the_record(lab: Lab) -> None:
    tuning = lab.state(1, purpose="readout")
    amend(lab.registry, tuning, "purpose", "exchange", why="renamed", at=day(2))
    for text in ("readout", "exchange"):
        assert [hit.id for hit in find(lab.registry, text)] == [tuning]
    assert [hit.amended for hit in find(lab.registry, "exchange")] == [True]


def test_a_withdrawn_record_is_found_and_marked(lab: Lab) -> None:
    tuning = lab.state(1, purpose="readout")
    withdraw(lab.registry, tuning, why="wrong", at=day(2))
    assert [hit.withdrawn for hit in find(lab.registry, "readout")] == [True]


def test_the_hash_of_a_file_finds_the_file(lab: Lab) -> None:
    lab.measurement(lab.state(1), 1.1)
    (hit,) = [hit for hit in find(lab.registry, "trace.h5") if hit.kind == "measurement"]
    assert hit.text == "trace.h5"


def test_what_is_nowhere_gives_an_empty_answer(lab: Lab) -> None:
    assert find(lab.registry, "no such thing") == ()


def test_looking_for_nothing_is_an_error(lab: Lab) -> None:
    with pytest.raises(InputError):
        find(lab.registry, "  ")
