"""Each kind of event has one stated effect; temperature refines it."""

from __future__ import annotations

import pytest

from registry.records.events import EVENTS, Effect, effect_of, ends_cooldown

# Common practice, no source: below 10 K nothing, to 150 K partly, above that all is reset.
WARMINGS: list[tuple[float, Effect]] = [
    (0.0, "informs"),
    (9.999, "informs"),
    (10.0, "partly-resets"),
    (77.0, "partly-resets"),
    (150.0, "partly-resets"),
    (150.001, "resets"),
    (295.0, "resets"),
]


@pytest.mark.parametrize(("kelvin", "effect"), WARMINGS)
@pytest.mark.parametrize("event", ["cycled", "warm-up"])
def test_warming_resets_more_the_warmer_it_was(event: str, kelvin: float, effect: Effect) -> None:
    assert effect_of(event, kelvin) == effect


@pytest.mark.parametrize(
    ("event", "effect"),
    [
        ("base-reached", "begins"),
        ("warm-up", "resets"),
        ("power-loss", "partly-resets"),
        ("bias-cooling", "informs"),
        ("illumination", "resets"),
        ("gate-stress", "partly-resets"),
        ("charge-jump", "jump"),
        ("discharge", "partly-resets"),
        ("rewired", "asks-wiring"),
        ("field-change", "informs"),
        ("note", "informs"),
        ("of a later version", "informs"),
    ],
)
def test_an_event_without_temperature_has_its_stated_effect(event: str, effect: Effect) -> None:
    assert effect_of(event, None) == effect


def test_a_temperature_changes_only_warmings() -> None:
    assert effect_of("power-loss", 300.0) == "partly-resets"
    assert effect_of("illumination", 4.0) == "resets"


@pytest.mark.parametrize(
    ("event", "kelvin", "ends"),
    [("warm-up", None, True), ("warm-up", 273.0, True), ("warm-up", 272.9, False), ("cycled", 295.0, False)],
)
def test_only_a_warm_up_to_room_temperature_ends_a_cooldown(
    event: str, kelvin: float | None, ends: bool
) -> None:
    assert ends_cooldown(event, kelvin) is ends


def test_only_power_loss_and_discharge_lose_the_volts() -> None:
    assert {name for name, kind in EVENTS.items() if kind.loses_volts} == {"power-loss", "discharge"}
    assert {name for name, kind in EVENTS.items() if kind.asks_health} == {"discharge"}


def test_kinds_are_listed_under_their_own_names() -> None:
    assert all(name == kind.name and kind.meaning for name, kind in EVENTS.items())
