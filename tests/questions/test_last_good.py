"""Whether the last good state is the right one, and says why."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from sqlalchemy import event

from registry.errors import LookupFailed
from registry.keeping.changing import amend, withdraw
from registry.keeping.opening import create
from registry.questions.last_good import MOST_PASSED_OVER, last_good
from registry.records.instants import format_instant

from .conftest import Lab, day


def test_the_newest_good_state_is_the_answer_with_its_volts_at_the_gate(lab: Lab) -> None:
    lab.good(1)
    tuning = lab.state(2, {"P1": 2.5, "B1": -1.0}, level="source", purpose="readout")
    lab.judge(tuning, "good", 3)
    answer = last_good(lab.registry, lab.device).to_json()
    assert answer["state"]["id"] == tuning
    assert answer["state"]["volts"] == {"P1": 0.5, "B1": -0.2}
    assert answer["state"]["cooldown"] == "C1"
    assert answer["state"]["at"] == format_instant(day(2))
    assert (answer["standing"], answer["by"], answer["freshness"]) == ("good", "test person", "ready")


def test_the_document_begins_with_the_promised_keys_in_their_order(lab: Lab) -> None:
    lab.good(1)
    answer = last_good(lab.registry, lab.device).to_json()
    promised = "device state standing by evidence freshness passed_over alternatives"
    assert list(answer)[:8] == promised.split()
    assert list(answer["state"])[:5] == ["id", "cooldown", "at", "purpose", "volts"]
    json.dumps(answer, allow_nan=False)


def test_a_newer_state_judged_poor_is_passed_over_with_who_and_why(lab: Lab) -> None:
    tuning = lab.good(1)
    poor = lab.state(2)
    lab.judge(poor, "poor", 2.1, why="switches every minute")
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == tuning
    assert [(p.id, p.reason) for p in answer.passed_over] == [
        (poor, "judged poor by test person: switches every minute")
    ]


def test_a_newer_state_without_a_judgement_is_passed_over_as_such(lab: Lab) -> None:
    lab.good(1)
    newer = lab.state(2)
    answer = last_good(lab.registry, lab.device)
    assert [(p.id, p.reason) for p in answer.passed_over] == [(newer, "no standing yet")]


def test_good_then_poor_then_good_in_the_same_words_are_three_judgements(lab: Lab) -> None:
    tuning = lab.state(1)
    ids = {lab.judge(tuning, standing, 2 + i) for i, standing in enumerate(("good", "poor", "good"))}
    assert len(ids) == 3
    assert last_good(lab.registry, lab.device).state is not None


def test_a_later_poor_judgement_supersedes_an_earlier_good_one(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.judge(tuning, "poor", 3, why="drifted off")
    answer = last_good(lab.registry, lab.device)
    assert answer.state is None
    assert answer.why_none is not None
    assert "judged poor by test person: drifted off" in answer.why_none


def test_two_judgements_that_did_not_see_each_other_are_a_conflict_and_the_worse_counts(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.unseen(tuning, "poor", 2, why="telegraph noise")
    answer = last_good(lab.registry, lab.device)
    assert answer.state is None
    reason = answer.passed_over[0].reason
    assert "conflict" in reason
    assert "telegraph noise" in reason
    assert "judged good" in reason


def test_agreeing_judgements_that_did_not_see_each_other_are_no_conflict(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.unseen(tuning, "good", 2)
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.conflict == ()


def test_a_judgement_that_saw_both_sides_settles_a_conflict(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.unseen(tuning, "poor", 2)
    lab.judge(tuning, "good", 3, why="noise was the amplifier")
    assert last_good(lab.registry, lab.device).state is not None


def test_withdrawing_the_middle_judgement_does_not_bring_the_first_back(lab: Lab) -> None:
    tuning = lab.state(1)
    lab.judge(tuning, "poor", 2)
    middle = lab.judge(tuning, "usable", 3)
    lab.judge(tuning, "good", 4)
    withdraw(lab.registry, middle, why="typed in the wrong window", at=day(5))
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.conflict == ()


def test_withdrawing_the_last_judgement_brings_the_one_before_back(lab: Lab) -> None:
    tuning = lab.good(1)
    poor = lab.judge(tuning, "poor", 2)
    withdraw(lab.registry, poor, why="wrong state", at=day(3))
    assert last_good(lab.registry, lab.device).state is not None


def test_withdrawing_the_measurement_leaves_no_good_state_and_says_why(lab: Lab) -> None:
    tuning = lab.state(1)
    measurement = lab.measurement(tuning, 1.1)
    value = lab.value(tuning, 1.1, measurement=measurement)
    lab.judge_by(tuning, lab.criteria(), [value], 2)
    assert last_good(lab.registry, lab.device).state is not None
    withdraw(lab.registry, measurement, why="the file is of another device", at=day(3))
    answer = last_good(lab.registry, lab.device)
    assert answer.state is None
    assert answer.to_json()["state"] is None
    assert answer.why_none is not None
    assert "the file is of another device" in answer.why_none
    assert "evidence was withdrawn by test person" in answer.passed_over[0].reason


def test_withdrawing_the_withdrawal_restores_the_answer(lab: Lab) -> None:
    tuning = lab.state(1)
    value = lab.value(tuning, 1.1)
    lab.judge_by(tuning, lab.criteria(), [value], 2)
    act = withdraw(lab.registry, value, why="mistaken", at=day(3))
    withdraw(lab.registry, act.hex, why="it was right after all", at=day(4))
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == tuning


def test_a_newer_state_on_tainted_evidence_is_passed_over_for_an_older_good_one(lab: Lab) -> None:
    older, newer = lab.good(1), lab.state(2)
    value = lab.value(newer, 2.1)
    lab.judge_by(newer, lab.criteria(), [value], 3)
    withdraw(lab.registry, value, why="fit of a spike", at=day(4))
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == older
    assert answer.passed_over[0].id == newer
    assert "fit of a spike" in answer.passed_over[0].reason


def test_a_persons_word_falls_with_the_last_measurement_it_could_rest_on(lab: Lab) -> None:
    tuning = lab.state(1)
    first, second = lab.measurement(tuning, 1.1, "a.h5"), lab.measurement(tuning, 1.2, "b.h5")
    lab.judge(tuning, "good", 2)
    withdraw(lab.registry, first, why="wrong file", at=day(3))
    assert last_good(lab.registry, lab.device).state is not None
    withdraw(lab.registry, second, why="wrong file too", at=day(3))
    assert last_good(lab.registry, lab.device).state is None


def test_a_withdrawn_state_is_never_the_answer(lab: Lab) -> None:
    older, newer = lab.good(1), lab.good(2)
    withdraw(lab.registry, newer, why="volts read off the wrong panel", at=day(3))
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == older
    assert answer.passed_over[0].reason.startswith("the state was withdrawn by test person: volts read off")


@pytest.mark.parametrize("health", ["grounded", "no-response"])
def test_a_gate_lost_after_the_state_breaks_it(lab: Lab, health: str) -> None:
    older = lab.good(1, volts={"P2": 0.3})
    lab.good(2)
    lab.mark("P1", health, 3)
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == older
    assert answer.passed_over[0].reason == f"broken by gate P1 {health} at 2026-01-04T00:00:00Z"


def test_a_short_breaks_states_that_use_either_gate(lab: Lab) -> None:
    older = lab.good(1, volts={"P2": 0.3})
    lab.good(2, volts={"P1": 0.3})
    lab.mark("P1", "shorted", 3, to_gate="B1")
    lab.good(2.5, volts={"B1": 0.3})
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == older


def test_a_gate_found_ok_again_mends_what_it_broke(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.mark("P1", "grounded", 2)
    lab.mark("P1", "ok", 3)
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == tuning


def test_a_state_found_good_on_a_gate_known_as_shorted_is_not_broken(lab: Lab) -> None:
    lab.mark("P1", "shorted", 1, to_gate="B1")
    tuning = lab.good(2)
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == tuning


def test_a_power_loss_makes_the_state_stale_and_asks_for_the_volts(lab: Lab) -> None:
    lab.good(1)
    lab.event("power-loss", 2)
    answer = last_good(lab.registry, lab.device)
    assert str(answer.freshness) == "stale since power-loss at 2026-01-03T00:00:00Z"
    assert answer.asks == (
        "read the present volts back: they are unknown since power-loss at 2026-01-03T00:00:00Z",
    )


def test_purpose_is_that_of_the_judgement_else_that_of_the_state(lab: Lab) -> None:
    readout = lab.good(1, purpose="readout")
    general = lab.state(2)
    lab.judge(general, "good", 2.1, purpose="exchange")
    assert _found(lab, purpose="readout") == readout
    assert _found(lab, purpose="exchange") == general
    assert _found(lab) == general
    answer = last_good(lab.registry, lab.device, purpose="readout")
    assert "other purpose" in answer.passed_over[0].reason


def test_an_amended_purpose_counts(lab: Lab) -> None:
    tuning = lab.good(1, purpose="test")
    amend(lab.registry, tuning, "purpose", "readout", why="that is what it is for", at=day(2))
    assert _found(lab, purpose="readout") == tuning
    assert _found(lab, purpose="test") is None


def test_a_poor_judgement_for_another_purpose_does_not_count(lab: Lab) -> None:
    tuning = lab.state(1)
    lab.judge(tuning, "good", 2, purpose="readout")
    lab.judge(tuning, "poor", 3, purpose="exchange")
    assert _found(lab, purpose="readout") == tuning
    assert _found(lab, purpose="exchange") is None


def test_all_asked_sites_must_be_judged_good(lab: Lab) -> None:
    both, one = lab.good(1), lab.state(2)
    lab.judge(one, "good", 2.1, sites=["Q1"])
    assert _found(lab, sites=["Q1"]) == one
    assert _found(lab, sites=["Q1", "Q2"]) == both
    lab.judge(one, "good", 2.2, sites=["Q2"])
    assert _found(lab, sites=["Q1", "Q2"]) == one


def test_only_the_present_version_of_criteria_answers_by_name(lab: Lab) -> None:
    tuning = lab.state(1)
    value = lab.value(tuning, 1.1)
    old = lab.criteria(at_most=0.5, at=0)
    lab.judge_by(tuning, old, [value], 2)
    assert _found(lab, criteria="cold") == tuning
    lab.criteria(at_most=0.05, at=3)
    answer = last_good(lab.registry, lab.device, criteria="cold")
    assert answer.state is None
    assert "present version of criteria cold" in answer.passed_over[0].reason
    assert _found(lab, criteria=old[:12]) == tuning


def test_unknown_criteria_are_an_error_and_not_an_empty_answer(lab: Lab) -> None:
    lab.good(1)
    with pytest.raises(LookupFailed):
        last_good(lab.registry, lab.device, criteria="no such")


def test_before_a_cooldown_only_states_of_earlier_ones_count(lab: Lab) -> None:
    first = lab.good(1)
    lab.begin("C2", 10)
    second = lab.good(11)
    assert _found(lab) == second
    assert _found(lab, before="C2") == first
    answer = last_good(lab.registry, lab.device, before="C2")
    assert answer.passed_over == ()
    assert str(answer.freshness) == "stale since begin of cooldown C2 at 2026-01-11T00:00:00Z"


def test_as_of_a_time_later_acts_are_unknown(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.judge(tuning, "poor", 3)
    lab.event("power-loss", 4)
    withdraw(lab.registry, tuning, why="wrong", at=day(5))
    lab.good(6)
    answer = last_good(lab.registry, lab.device, as_of=day(2))
    assert answer.state is not None
    assert answer.state.hex == tuning
    assert str(answer.freshness) == "ready"
    assert answer.passed_over == ()
    assert last_good(lab.registry, lab.device, as_of=day(3)).state is None


def test_evidence_names_value_measurement_and_file(lab: Lab) -> None:
    tuning = lab.state(1)
    measurement = lab.measurement(tuning, 1.1, "peaks.h5")
    value = lab.value(tuning, 1.1, measurement=measurement)
    lab.judge_by(tuning, lab.criteria(), [value], 2)
    answer = last_good(lab.registry, lab.device).to_json()
    (piece,) = answer["evidence"]
    assert (piece["id"], piece["quantity"], piece["value"], piece["standard_uncertainty"], piece["unit"]) == (
        value,
        "electron_temperature",
        0.1,
        0.002,
        "K",
    )
    assert piece["measurement"] == measurement
    assert len(piece["file"]) == 64
    assert answer["by"] == "cold"


def test_alternatives_are_older_good_states_then_usable_ones(lab: Lab) -> None:
    usable = lab.state(0.5)
    lab.judge(usable, "usable", 0.6)
    goods = [lab.good(number) for number in range(1, 4)]
    answer = last_good(lab.registry, lab.device)
    assert [other.state.hex for other in answer.alternatives] == [goods[1], goods[0], usable]
    assert [other.standing for other in answer.alternatives] == ["good", "good", "usable"]


def test_a_device_without_states_says_so(lab: Lab) -> None:
    answer = last_good(lab.registry, lab.device)
    assert answer.state is None
    assert answer.why_none == "no state of K7/D1 is on record for what was asked"


def test_states_of_one_moment_are_ordered_by_id_whatever_order_they_came_in(lab: Lab) -> None:
    ids = [lab.good(1, volts={"P1": 0.1 * n}) for n in range(5)]
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == max(ids)
    assert [other.state.hex for other in answer.alternatives] == sorted(ids, reverse=True)[1:]


def test_many_newer_states_are_counted_and_the_once_good_ones_still_shown(lab: Lab) -> None:
    tuning = lab.good(1)
    fallen = lab.good(2)
    withdraw(lab.registry, fallen, why="wrong sample", at=day(3))
    lab.flood(30, None, 4)
    answer = last_good(lab.registry, lab.device)
    assert answer.state is not None
    assert answer.state.hex == tuning
    assert answer.passed_over_count == 31
    assert len(answer.passed_over) == MOST_PASSED_OVER
    assert answer.passed_over[-1].id == fallen


@pytest.mark.parametrize(("standing", "extra"), [("good", 1), ("poor", 3), (None, 3)])
def test_ten_thousand_states_in_tables_no_one_analysed_cost_few_statements(
    lab: Lab, standing: str | None, extra: int
) -> None:
    lab.good(1)
    few = _statements(lab)
    lab.flood(10_000, standing, 2)
    # A count of the newer states, a look for once-good ones, their judgements.
    assert _statements(lab) <= few + extra + 4
    answer = last_good(lab.registry, lab.device)
    assert answer.passed_over_count == (0 if standing == "good" else 10_000)


def test_ten_thousand_good_states_broken_by_one_gate_are_walked_in_growing_chunks(lab: Lab) -> None:
    older = lab.good(0.5, volts={"P2": 0.3})
    lab.flood(10_000, "good", 1)
    lab.mark("P1", "grounded", 3)
    assert _statements(lab) < 120
    assert _found(lab) == older


def test_both_engines_give_the_same_bytes_whatever_the_order_of_entry(lab: Lab, tmp_path: Path) -> None:
    with create(tmp_path / "other") as registry:
        other = Lab(registry)
        for one, order in ((other, (1, 2, 3)), (lab, (3, 1, 2))):
            for number in order:
                one.good(number, volts={"P1": 0.1 * number})
        first, second = (json.dumps(last_good(one.registry, one.device).to_json()) for one in (lab, other))
    assert first == second


def _found(lab: Lab, **asked: object) -> str | None:
    state = last_good(lab.registry, lab.device, **asked).state  # type: ignore[arg-type]
    return None if state is None else state.hex


def _statements(lab: Lab) -> int:
    """How many statements one question takes."""
    seen: list[str] = []
    engine = lab.registry.side.reading

    def count(connection: object, cursor: object, statement: str, *rest: object) -> None:
        seen.append(statement)

    event.listen(engine, "before_cursor_execute", count)
    last_good(lab.registry, lab.device)
    event.remove(engine, "before_cursor_execute", count)
    return len(seen)
