"""Whether a device's thermal life is cut where it should be.  Pure."""

from __future__ import annotations

import pytest

from registry.questions.devices import Stay
from registry.questions.happenings import Happening
from registry.questions.stretches import cut

FIRST = Stay(1, b"a", "C1", "Blue", None, 0)
SECOND = Stay(2, b"b", "C2", "Blue", None, 1000)


def happening(event: str, at: int, *, stay: int = 1, **more: object) -> Happening:
    """An event in a stay."""
    return Happening(at, bytes([at % 256]), stay, event, at, **more)  # type: ignore[arg-type]


def spans(*events: Happening, stays: tuple[Stay, ...] = (FIRST,), gate: str | None = None) -> list[object]:
    """Begin, end and whether partial, of each stretch."""
    return [(s.begins, s.ends, s.partial) for s in cut(stays, events, gate=gate)]


def test_a_cooldown_without_events_is_one_stretch() -> None:
    assert spans() == [(0, None, False)]


@pytest.mark.parametrize(
    ("event", "partial"),
    [
        (happening("illumination", 10), False),
        (happening("power-loss", 10), True),
        (happening("discharge", 10), True),
        (happening("cycled", 10, kelvin=60.0), True),
        (happening("cycled", 10, kelvin=200.0), False),
    ],
    ids=lambda value: value.event if isinstance(value, Happening) else str(value),
)
def test_an_event_that_resets_ends_a_stretch_and_begins_the_next(event: Happening, partial: bool) -> None:
    assert spans(event) == [(0, 10, False), (10, None, partial)]


@pytest.mark.parametrize(
    "event",
    [
        happening("cycled", 10, kelvin=4.0),
        happening("charge-jump", 10, site="Q1"),
        happening("field-change", 10),
        happening("rewired", 10),
        happening("bias-cooling", 10),
        happening("base-reached", 10),
        happening("gate-stress", 10, gate="P1"),
        happening("illumination", 10, stay=2),
    ],
    ids=lambda event: f"{event.event} {event.cooldown_no}",
)
def test_an_event_that_resets_nothing_ends_no_stretch(event: Happening) -> None:
    assert spans(event) == [(0, None, False)]


def test_stress_cuts_the_history_of_the_stressed_gate_alone() -> None:
    event = happening("gate-stress", 10, gate="P1")
    assert spans(event, gate="P1") == [(0, 10, False), (10, None, True)]
    assert spans(event, gate="P2") == [(0, None, False)]


def test_between_a_warming_and_base_there_is_no_stretch() -> None:
    events = (happening("warm-up", 10, kelvin=77.0), happening("base-reached", 30))
    assert spans(*events) == [(0, 10, False), (30, None, True)]


def test_a_second_stronger_warming_before_base_makes_the_reset_full() -> None:
    events = (
        happening("warm-up", 10, kelvin=77.0),
        happening("warm-up", 20, kelvin=200.0),
        happening("base-reached", 30),
    )
    assert spans(*events) == [(0, 10, False), (30, None, False)]


def test_an_event_with_a_duration_leaves_its_time_out_of_both_stretches() -> None:
    assert spans(happening("cycled", 10, kelvin=200.0, until=20)) == [(0, 10, False), (20, None, False)]


def test_two_resets_at_one_moment_make_no_empty_stretch_and_the_stronger_counts() -> None:
    events = (happening("power-loss", 10), happening("illumination", 10))
    assert spans(*events) == [(0, 10, False), (10, None, False)]
    assert spans(*events[::-1]) == [(0, 10, False), (10, None, False)]


def test_a_warm_up_to_room_temperature_ends_the_cooldown() -> None:
    assert spans(happening("warm-up", 10), happening("base-reached", 20)) == [(0, 10, False)]


def test_the_next_begin_ends_a_cooldown_that_was_left_open() -> None:
    assert spans(stays=(FIRST, SECOND)) == [(0, 1000, False), (1000, None, False)]


def test_an_event_entered_after_the_end_of_its_cooldown_opens_nothing() -> None:
    late = happening("illumination", 1500)
    assert spans(late, stays=(FIRST, SECOND)) == [(0, 1000, False), (1000, None, False)]


def test_stretches_are_numbered_over_the_life_of_the_device() -> None:
    found = cut((FIRST, SECOND), (happening("power-loss", 10),))
    assert [(s.number, s.stay.label) for s in found] == [(1, "C1"), (2, "C1"), (3, "C2")]
    assert found[1].opening == "power-loss at 1970-01-01T00:00:00.000010Z"
