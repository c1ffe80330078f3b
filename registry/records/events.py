"""Which kinds of event there are in a cooldown, and what each does to its states.

The temperatures are common practice, no source; a laboratory that knows better records
the event kind that states the effect it saw.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

__all__ = ["EVENTS", "LOST_HEALTH", "ROOM_TEMPERATURE_K", "Effect", "EventKind", "effect_of", "ends_cooldown"]

Effect = Literal["begins", "resets", "partly-resets", "jump", "breaks", "asks-wiring", "informs"]

# Common practice, no source.
KEEPS_BELOW_K = 10.0
RESETS_ABOVE_K = 150.0
ROOM_TEMPERATURE_K = 273.0

# Findings after which a gate no longer does what the state asks of it.
LOST_HEALTH = frozenset({"grounded", "no-response", "shorted"})


@dataclass(frozen=True)
class EventKind:
    """One kind of event.

    Attributes:
        name: as typed on the command line.
        effect: what it does to states before it; ``effect_of`` refines it by temperature.
        needs: fields that must be given with it.
        loses_volts: present volts are unknown afterwards.
        asks_health: the gates should be checked afterwards.
    """

    name: str
    effect: Effect
    meaning: str
    needs: tuple[str, ...] = ()
    loses_volts: bool = False
    asks_health: bool = False


_ALL = (
    EventKind("base-reached", "begins", "the cryostat reached base; a stretch begins if it had warmed"),
    EventKind(
        "cycled",
        "resets",
        "warmed to --kelvin and cooled again; below 10 K nothing, to 150 K a partial reset, above a full one",
        needs=("kelvin",),
    ),
    EventKind(
        "warm-up", "resets", "warmed (to room temperature if no --kelvin is given), which ends the cooldown"
    ),
    EventKind(
        "power-loss", "partly-resets", "gate volts were lost; present volts are unknown", loses_volts=True
    ),
    EventKind("bias-cooling", "informs", "volts on the gates while cooling (--volts)", needs=("volts",)),
    EventKind("illumination", "resets", "light reached the device"),
    EventKind("gate-stress", "partly-resets", "volts beyond the seen extremes on one gate", needs=("gate",)),
    EventKind("charge-jump", "jump", "a charge moved near a site (--detail shift=VOLTS)", needs=("site",)),
    EventKind(
        "discharge",
        "partly-resets",
        "an electrostatic discharge is suspected; check every gate's health",
        loses_volts=True,
        asks_health=True,
    ),
    EventKind("rewired", "asks-wiring", "lines or dividers were changed; record the wiring with --since"),
    EventKind("field-change", "informs", "the magnetic field was changed"),
    EventKind("note", "informs", "a remark (--note)", needs=("note",)),
)
EVENTS: MappingProxyType[str, EventKind] = MappingProxyType({kind.name: kind for kind in _ALL})


def effect_of(event: str, kelvin: float | None) -> Effect:
    """What an event does, its temperature considered; an unknown kind informs."""
    kind = EVENTS.get(event)
    if kind is None:
        return "informs"
    if event in {"cycled", "warm-up"} and kelvin is not None:
        if kelvin < KEEPS_BELOW_K:
            return "informs"
        return "partly-resets" if kelvin <= RESETS_ABOVE_K else "resets"
    return kind.effect


def ends_cooldown(event: str, kelvin: float | None) -> bool:
    """Whether the event closes its cooldown: a warm-up to room temperature."""
    return event == "warm-up" and (kelvin is None or kelvin >= ROOM_TEMPERATURE_K)
