"""What the demo laboratory did in its year: states, raw files, judgements, old values.

The plan is data: no array is simulated and no file is written here.  All draws come from
one seed and from names, so that a plan does not depend on the order of building it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

from seed_demo import calendar
from seed_demo.ageing import DRIFT, JUMP, device_in, draw_shifts, rng_for, shifts_on
from seed_demo.calendar import Event, Health, Stay, Stretch
from seed_demo.catalogue import CHIPS, Chip, devices
from seed_demo.devices import Device
from seed_demo.sessions import PlannedFile, session_files, tune_up_files
from seed_demo.wiring import Line, lines, rewired_lines

__all__ = ["Judgement", "Lesson", "PlannedState", "Year", "build_year", "wiring_at"]

SEED = 20_251_006

_PURPOSE = {"ferry": "exchange", "copse": "shuttle", "stile": "thermometer", "kiln": "drive"}
# The last hours before a warm-up belong to the last visit and to ramping down.
_QUIET_END = timedelta(hours=30)
_DAYS_BETWEEN = {"ferry": 5.0, "copse": 12.0, "stile": 7.0, "kiln": 2.0}


@dataclass(frozen=True, eq=False)
class PlannedState:
    """A tuning state that somebody types in: volts at the gate.

    Attributes:
        key, parent: names inside the plan; ``revisit`` marks the same volts again.
    """

    key: str
    device: str
    cooldown: str
    at: datetime
    volts: Mapping[str, float]
    purpose: str
    sites: tuple[str, ...]
    occupation: Mapping[str, int]
    parent: str | None = None
    revisit: bool = False


@dataclass(frozen=True)
class Judgement:
    """A dated standing of a planned state."""

    state: str
    standing: str
    why: str
    at: datetime


@dataclass(frozen=True)
class Lesson:
    """A pattern that is hidden in the year on purpose."""

    device: str
    quantity: str
    subject: str
    pattern: str
    what: str


@dataclass(frozen=True, eq=False)
class Year:
    """The whole plan."""

    seed: int
    chips: tuple[Chip, ...]
    devices: tuple[Device, ...]
    stays: tuple[Stay, ...]
    stretches: tuple[Stretch, ...]
    events: tuple[Event, ...]
    health: tuple[Health, ...]
    shifts: Mapping[tuple[str, str], Mapping[str, float]]
    files: tuple[PlannedFile, ...]
    states: tuple[PlannedState, ...]
    judgements: tuple[Judgement, ...]
    lessons: tuple[Lesson, ...]

    def device(self, name: str) -> Device:
        """Return the device with this bare name."""
        return next(device for device in self.devices if device.name == name)


LESSONS = (
    Lesson(*JUMP[:1], "addition_voltage", "S1", "jumps by cooldown", "8 % smaller from cooldown B4 on"),
    Lesson(
        "ferry",
        "electron_temperature",
        "S1",
        "jumps by code",
        "the old script divides the width of a single-level peak by 4.3546 instead of 3.5255 kT",
    ),
    Lesson("copse", "threshold_voltage", "B3", "drifts", "0.4 mV a cold day upwards"),
    Lesson("copse", "addition_voltage", "SW", "quiet", "only the scatter between cooldowns"),
)


def wiring_at(device: Device, at: datetime) -> tuple[Line, ...]:
    """Lines of ``device`` in force at a time."""
    return rewired_lines(device) if device.name == "ferry" and at >= calendar.REWIRED else lines(device)


def build_year(seed: int = SEED, *, stretches: tuple[str, ...] | None = None) -> Year:
    """Plan the year.

    Args:
        seed: another seed is another year in the same laboratory.
        stretches: names of the stretches to fill with states and files; all by default.
    """
    made = devices()
    shifts = draw_shifts(made, seed)
    files: list[PlannedFile] = []
    states: list[PlannedState] = []
    judgements: list[Judgement] = []
    for stretch in calendar.STRETCHES:
        if stretches is not None and stretch.name not in stretches:
            continue
        for device in (d for d in made if d.chip == stretch.chip):
            _fill(device, stretch, shifts[device.name, stretch.name], seed, files, states, judgements)
    return Year(
        seed=seed,
        chips=CHIPS,
        devices=made,
        stays=calendar.STAYS,
        stretches=calendar.STRETCHES,
        events=calendar.EVENTS,
        health=calendar.gate_findings(),
        shifts=shifts,
        files=tuple(files),
        states=tuple(states),
        judgements=tuple(judgements),
        lessons=LESSONS,
    )


def _settled(device: Device, volts: Mapping[str, float], at: datetime) -> dict[str, float]:
    """Volts on the grid of the sources."""
    by_gate = {line.gate: line for line in wiring_at(device, at)}
    return {gate: float(by_gate[f"{device.path}:{gate}"].settled(v)) for gate, v in volts.items()}


def _fill(
    device: Device,
    stretch: Stretch,
    start: Mapping[str, float],
    seed: int,
    files: list[PlannedFile],
    states: list[PlannedState],
    judgements: list[Judgement],
) -> None:
    """Plan all that is done with one device in one stretch."""
    rng = rng_for(seed, "fill", device.path, stretch.name)
    actual = device_in(device, stretch, seed)
    first = stretch.base + timedelta(hours=5 + 2 * [d.name for d in devices()].index(device.name))
    tuned = device.name in stretch.tuned
    wanted = {
        gate.name: gate.working + start[gate.name] + (0.003 * rng.standard_normal()) for gate in device.gates
    }
    base = _settled(device, actual.retuned(wanted, start), first)
    gates = [gate.name for gate in device.gates if gate.role in ("barrier", "reservoir")]
    shifts = shifts_on(device, stretch, start, first, seed)
    files += tune_up_files(actual, stretch, first, base, shifts, gates if tuned else gates[:2])
    if not tuned:
        return
    parent = f"{device.name}/{stretch.name}/tuned"
    ready = first + timedelta(hours=6)
    states.append(_state(parent, device, stretch, ready, base))
    judgements.append(Judgement(parent, "good", "all sites where they belong, sensor quiet", ready))
    at, number = first + timedelta(days=1), 0
    while at < _end_of(stretch) - _QUIET_END:
        number += 1
        shifts = shifts_on(device, stretch, start, at, seed)
        volts = _settled(device, actual.retuned(base, shifts), at)
        extra = _extra_gates(device, at)
        files += session_files(actual, stretch, at, volts, shifts, extra)
        key = f"{device.name}/{stretch.name}/{number}"
        states.append(_state(key, device, stretch, at + timedelta(hours=2), volts, parent))
        parent = key
        at += timedelta(days=_DAYS_BETWEEN[device.name])
    _close(device, stretch, states, judgements)


def _end_of(stretch: Stretch) -> datetime:
    return calendar.YEAR_END if stretch.end is None else stretch.end


def _extra_gates(device: Device, at: datetime) -> tuple[str, ...]:
    """Gates looked at in every session: the one that drifts, the one that came to leak."""
    if device.name != "copse":
        return ()
    return (DRIFT[1], "P3") if at >= calendar.LEAK_SEEN - timedelta(days=60) else (DRIFT[1],)


def _state(
    key: str,
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    parent: str | None = None,
) -> PlannedState:
    dots = tuple(site for site in device.sites if site.kind == "dot")
    return PlannedState(
        key=key,
        device=device.path,
        cooldown=stretch.cooldown,
        at=at,
        volts=volts,
        purpose=_PURPOSE[device.name],
        sites=tuple(site.name for site in dots),
        occupation={site.name: site.charges for site in dots},
        parent=parent,
    )


def _close(device: Device, stretch: Stretch, states: list[PlannedState], judgements: list[Judgement]) -> None:
    """Judge the end of a stretch.

    Mostly an earlier state is visited again and found good.  After the power cut, and always in
    the row of four, the newest state is poor and the one before it was the last good one.
    """
    before, last = states[-2:]
    if stretch.reset == "partial" or device.name == "copse":
        judgements.append(Judgement(before.key, "good", "transitions sharp, sensor quiet", before.at))
        judgements.append(Judgement(last.key, "poor", "a switching charge near the last dot", last.at))
        return
    key, at = f"{device.name}/{stretch.name}/again", last.at + timedelta(hours=20)
    states.append(replace(before, key=key, at=at, parent=before.key, revisit=True))
    judgements.append(Judgement(key, "good", "same volts, same transitions", at))
