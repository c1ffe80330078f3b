"""Whether a number leads to its file and code, and a file to all that hangs on it."""

from __future__ import annotations

import hashlib
import json

import pytest

from registry.errors import LookupFailed
from registry.keeping.changing import amend, withdraw
from registry.questions.lineage import Lineage, lineage

from .conftest import Lab, day


def _kinds(answer: Lineage) -> set[str]:
    return {node.kind for node in answer.nodes}


def _detail(answer: Lineage, kind: str) -> dict[str, object]:
    return next(node.details for node in answer.nodes if node.kind == kind)


def test_a_value_leads_up_to_file_code_settings_state_and_chip(lab: Lab) -> None:
    value = lab.value(lab.state(1), 1.1)
    answer = lineage(lab.registry, value)
    expected = "parameter analysis measurement raw_file tuning gate_sheet cooldown device chip"
    assert _kinds(answer) == set(expected.split())
    assert answer.nodes[0].id == value
    assert _detail(answer, "analysis")["source_digest"] == hashlib.sha256(b"1").hexdigest()
    assert _detail(answer, "analysis")["settings"] == {"model": "auto"}
    sha256 = hashlib.sha256(f"electron_temperature 1.1.h5 {1.1}".encode()).hexdigest()
    assert answer.to_json()["files"] == [sha256]
    json.dumps(answer.to_json(), allow_nan=False)


def test_every_edge_joins_two_nodes_of_the_answer(lab: Lab) -> None:
    answer = lineage(lab.registry, lab.value(lab.state(1), 1.1))
    ids = {node.id for node in answer.nodes}
    assert {edge.record for edge in answer.edges} | {edge.target for edge in answer.edges} == ids
    assert len(answer.edges) >= len(answer.nodes) - 1


def test_a_file_leads_down_to_all_that_falls_with_it(lab: Lab) -> None:
    tuning = lab.state(1)
    measurement = lab.measurement(tuning, 1.1)
    value = lab.value(tuning, 1.1, measurement=measurement)
    judgement = lab.judge_by(tuning, lab.criteria(), [value], 2)
    (file,) = [node.id for node in lineage(lab.registry, value).nodes if node.kind == "raw_file"]
    answer = lineage(lab.registry, file, down=True)
    assert _kinds(answer) == {"raw_file", "measurement", "analysis", "parameter", "standing"}
    assert {measurement, value, judgement} < {node.id for node in answer.nodes}


def test_what_falls_is_exactly_what_a_withdrawal_taints(lab: Lab) -> None:
    tuning = lab.state(1)
    value = lab.value(tuning, 1.1)
    lab.judge_by(tuning, lab.criteria(), [value], 2)
    lab.state(2, parent=tuning)
    fallen = {node.id for node in lineage(lab.registry, tuning, down=True).nodes}
    withdraw(lab.registry, tuning, why="wrong", at=day(3))
    answer = lineage(lab.registry, value)
    assert {node.id for node in answer.nodes if node.withdrawn} == fallen & {node.id for node in answer.nodes}
    assert not lineage(lab.registry, lab.state(4)).nodes[0].withdrawn


def test_a_state_leads_up_to_its_parents_but_a_value_does_not(lab: Lab) -> None:
    first = lab.state(1)
    second = lab.state(2, parent=first)
    value = lab.value(second, 2.1)
    assert first in {node.id for node in lineage(lab.registry, second).nodes}
    assert first not in {node.id for node in lineage(lab.registry, value).nodes}


def test_amendments_and_withdrawals_are_told_beside_the_record(lab: Lab) -> None:
    tuning = lab.state(1, purpose="readout")
    amend(lab.registry, tuning, "purpose", "exchange", why="renamed", at=day(2))
    withdraw(lab.registry, tuning, why="never set", at=day(3))
    (node, *_) = lineage(lab.registry, tuning).nodes
    assert node.amended == {"purpose": ["exchange"]}
    assert "never set" in node.withdrawn[0]


def test_an_earlier_judgement_is_no_part_of_a_later_ones_lineage(lab: Lab) -> None:
    tuning = lab.state(1)
    first = lab.judge(tuning, "good", 2)
    second = lab.judge(tuning, "poor", 3)
    assert first not in {node.id for node in lineage(lab.registry, second).nodes}
    assert second not in {node.id for node in lineage(lab.registry, first, down=True).nodes}


def test_an_unknown_id_is_an_error(lab: Lab) -> None:
    with pytest.raises(LookupFailed):
        lineage(lab.registry, "0123456789abcdef")
