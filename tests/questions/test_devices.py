"""Whether records that are one device answer as one."""

from __future__ import annotations

from registry.keeping.changing import amend, same_as, withdraw
from registry.keeping.cooling import begin_cooldown
from registry.keeping.describing import add_chip, add_device
from registry.keeping.judging import judge
from registry.keeping.tunings import record_tuning
from registry.questions.last_good import last_good
from registry.records.descriptions import Gate

from .conftest import Lab, day


def _twin(lab: Lab) -> tuple[str, str]:
    """The same device under another chip label, good in a later cooldown; state, same-as."""
    add_chip(lab.registry, "K7b")
    gates = [Gate("P1", "plunger", 0.0, 0.0, -1, 1, 0.01, 0.1)]
    add_device(lab.registry, "K7b/D1", gates=gates, at=day(20))
    begin_cooldown(lab.registry, "C9", cryostat="Red", chips=["K7b"], at=day(20))
    tuning = record_tuning(lab.registry, "K7b/D1", {"P1": 0.1}, cooldown="C9", at=day(21)).hex
    judge(lab.registry, tuning, "good", why="fine", at=day(22))
    return tuning, same_as(lab.registry, "K7", "K7b", why="relabelled box", at=day(23)).hex


def test_states_of_two_records_that_are_one_chip_stand_in_one_history(lab: Lab) -> None:
    older = lab.good(1)
    newer, _ = _twin(lab)
    answer = last_good(lab.registry, "K7/D1")
    assert answer.state is not None
    assert answer.state.hex == newer
    assert answer.cooldown == "C9"
    assert [other.state.hex for other in answer.alternatives] == [older]
    assert str(answer.alternatives[0].freshness) == "stale since begin of cooldown C9 at 2026-01-21T00:00:00Z"


def test_a_withdrawn_same_as_parts_them_again(lab: Lab) -> None:
    older = lab.good(1)
    _, act = _twin(lab)
    withdraw(lab.registry, act, why="two chips after all", at=day(24))
    answer = last_good(lab.registry, "K7/D1")
    assert answer.state is not None
    assert answer.state.hex == older


def test_amended_labels_are_what_people_see(lab: Lab) -> None:
    cooldown = lab.begin("C2", 5).hex
    lab.good(6)
    amend(lab.registry, cooldown, "label", "C2-helium", why="two C2 in the book", at=day(7))
    assert last_good(lab.registry, lab.device).cooldown == "C2-helium"


def test_before_a_cooldown_means_the_devices_own_where_another_chip_has_one_of_that_name(lab: Lab) -> None:
    first = lab.good(1)
    add_chip(lab.registry, "K8")
    begin_cooldown(lab.registry, "C2", cryostat="Red", chips=["K8"], at=day(0.5))
    lab.begin("C2", 5)
    lab.good(6)
    answer = last_good(lab.registry, lab.device, before="C2")
    assert answer.state is not None
    assert answer.state.hex == first
