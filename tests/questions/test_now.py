"""Whether the page for the night tells what stands and what does not."""

from __future__ import annotations

import json

from registry.keeping.changing import withdraw
from registry.keeping.cooling import revise_wiring
from registry.questions.now import now

from .conftest import Lab, day


def test_the_page_shows_cooldown_stretch_state_and_what_differs_from_the_last_good(lab: Lab) -> None:
    good = lab.good(1, volts={"P1": 0.5, "P2": 0.4})
    lab.event("illumination", 1.5)
    newest = lab.state(2, {"P1": 0.5, "P2": 0.45})
    page = now(lab.registry, lab.device, at=day(3)).to_json()
    assert (page["cooldown"], page["cryostat"], page["stretch"]["number"]) == ("C1", "Blue", 2)
    assert (page["state"]["id"], page["standing"], page["reason"]) == (newest, None, "no standing yet")
    assert page["last_good"]["id"] == good
    assert page["last_good"]["freshness"] == "stale since illumination at 2026-01-02T12:00:00Z"
    assert [gate["gate"] for gate in page["differences"]] == ["P2"]
    json.dumps(page, allow_nan=False)


def test_after_a_warm_up_there_is_neither_cooldown_nor_stretch(lab: Lab) -> None:
    lab.state(1)
    lab.event("warm-up", 2)
    page = now(lab.registry, lab.device)
    assert page.cooldown is None
    assert page.stretch is None
    assert str(page.freshness) == "stale since warm-up at 2026-01-03T00:00:00Z"


def test_values_are_stale_when_what_they_live_by_has_ended(lab: Lab) -> None:
    tuning = lab.state(1)
    lab.value(tuning, 1.1, "peak_position")
    lab.value(tuning, 1.1, "threshold_voltage")
    lab.value(tuning, 1.1, "electron_temperature")
    lab.value(tuning, 1.1, "g_factor")
    assert _stale(lab) == []
    lab.event("charge-jump", 2, site="Q1")
    assert _stale(lab) == ["peak_position"]
    lab.event("power-loss", 3)
    assert _stale(lab) == ["peak_position", "threshold_voltage"]
    lab.event("warm-up", 4)
    assert _stale(lab) == ["electron_temperature", "peak_position", "threshold_voltage"]


def test_a_value_measured_anew_is_not_stale(lab: Lab) -> None:
    lab.value(lab.state(1), 1.1, "threshold_voltage")
    lab.event("power-loss", 2)
    lab.value(lab.state(3), 3.1, "threshold_voltage")
    assert _stale(lab) == []


def test_unhealthy_gates_are_named_and_mended_ones_are_not(lab: Lab) -> None:
    lab.mark("P2", "shorted", 1, to_gate="B1")
    lab.mark("P1", "leaky", 1, above_v=0.8)
    lab.mark("P2", "ok", 2)
    page = now(lab.registry, lab.device).to_json()
    assert [(gate["gate"], gate["health"], gate["above_v"]) for gate in page["unhealthy"]] == [
        ("P1", "leaky", 0.8)
    ]


def test_a_rewiring_asks_for_a_wiring_until_one_since_then_is_on_record(lab: Lab) -> None:
    tuning = lab.good(1)
    lab.event("rewired", 2)
    page = now(lab.registry, lab.device)
    assert page.asks == ("record the wiring in force since rewired at 2026-01-03T00:00:00Z",)
    assert str(page.freshness).startswith("stale since rewired")
    revise_wiring(lab.registry, "C1", lab.lines(10.0), since=day(2), why="new box", at=day(3))
    page = now(lab.registry, lab.device)
    assert page.asks == ()
    assert str(page.freshness) == "ready"
    assert page.last_good.state is not None
    assert page.last_good.state.hex == tuning


def test_a_discharge_asks_to_check_the_gates_not_yet_checked_since(lab: Lab) -> None:
    lab.event("discharge", 1)
    lab.mark("P1", "ok", 2)
    asks = now(lab.registry, lab.device).asks
    assert "check 2 of 3 gates since discharge at 2026-01-02T00:00:00Z" in asks


def test_volts_read_back_after_a_power_loss_are_no_longer_asked_for(lab: Lab) -> None:
    lab.event("power-loss", 1)
    assert len(now(lab.registry, lab.device).asks) == 1
    lab.state(2)
    assert now(lab.registry, lab.device).asks == ()


def test_a_leak_makes_only_states_above_it_stale(lab: Lab) -> None:
    lab.good(1, volts={"P1": 0.5})
    lab.mark("P1", "leaky", 2, above_v=0.8)
    assert str(now(lab.registry, lab.device).freshness) == "ready"
    lab.mark("P1", "leaky", 3, above_v=0.4)
    assert "gate P1 leaky above 0.4 V" in str(now(lab.registry, lab.device).freshness)


def test_stress_on_a_gate_makes_only_states_that_use_it_stale(lab: Lab) -> None:
    lab.state(1, {"P2": 0.3})
    lab.event("gate-stress", 2, gate="P1")
    assert str(now(lab.registry, lab.device).freshness) == "ready"
    lab.event("gate-stress", 3, gate="P2")
    assert "gate-stress of P2" in str(now(lab.registry, lab.device).freshness)


def test_a_withdrawn_event_has_not_happened(lab: Lab) -> None:
    lab.good(1)
    event = lab.event("power-loss", 2)
    withdraw(lab.registry, event, why="only the lamp went out", at=day(3))
    page = now(lab.registry, lab.device)
    assert str(page.freshness) == "ready"
    assert page.asks == ()


def test_a_withdrawn_state_is_not_the_present_one(lab: Lab) -> None:
    first, second = lab.state(1), lab.state(2)
    withdraw(lab.registry, second, why="never set", at=day(3))
    page = now(lab.registry, lab.device)
    assert page.state is not None
    assert page.state.hex == first


def _stale(lab: Lab) -> list[str]:
    return [value.point.quantity for value in now(lab.registry, lab.device).stale]
