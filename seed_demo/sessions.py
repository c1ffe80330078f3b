"""Which raw files one evening of measuring leaves behind.

A planned file knows everything needed to simulate it; nothing is simulated here.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from seed_demo.calendar import Stretch
from seed_demo.devices import BOLTZMANN_EV, Device, Site

__all__ = ["FORMATS", "PlannedFile", "session_files", "tune_up_files"]

# Which way of writing files each device's instruments have.
FORMATS = {"ferry": "nexus", "stile": "nexus", "copse": "slip", "kiln": "slip-comma"}
_SUFFIX = {"nexus": ".h5", "slip": ".txt", "slip-comma": ".txt"}


@dataclass(frozen=True, eq=False)
class PlannedFile:
    """One raw file to be simulated and written.

    Attributes:
        path: below the folder of raw files, with forward slashes.
        device: the device as it is in this stretch.
        kind: name of the method that understands it.
        gate, subject: the swept gate; the gate or site the values belong to.
        low, high, count: V at the gate, samples a run; ``both_ways`` for up and down.
        volts, shifts: V at the gate of all gates, and how far history moved them.
        form: ``nexus``, ``slip`` or ``slip-comma``.
        sensor: the site that watches a transition.
    """

    path: str
    device: Device
    cooldown: str
    stretch: str
    at: datetime
    kind: str
    gate: str
    subject: str
    low: float
    high: float
    count: int
    volts: Mapping[str, float]
    shifts: Mapping[str, float]
    form: str
    both_ways: bool = False
    sensor: str | None = None


def tune_up_files(
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    gates: Sequence[str],
) -> list[PlannedFile]:
    """Pinch-off curves of ``gates``, up and down, one every quarter of an hour."""
    return [
        _pinch_off(device, stretch, at + timedelta(minutes=15 * i), volts, shifts, gate)
        for i, gate in enumerate(gates)
    ]


def session_files(
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    extra: Sequence[str] = (),
) -> list[PlannedFile]:
    """Peaks of the sensors (of the dot where there is none), transitions of the dots, extra gates."""
    files: list[PlannedFile] = []

    def moment() -> datetime:
        return at + timedelta(minutes=12 * len(files))

    sensors = [site for site in device.sites if site.kind == "sensor"]
    dots = [site for site in device.sites if site.kind == "dot"]
    for site in sensors or dots:
        files.append(_peaks(device, stretch, moment(), volts, shifts, site))
    for dot in dots if sensors else ():
        nearest = max(sensors, key=lambda sensor: _coupling(device, dot, sensor))
        files.append(_transition(device, stretch, moment(), volts, shifts, dot, nearest))
    for gate in extra:
        if device.gate(gate).role == "plunger":
            files.append(_leakage(device, stretch, moment(), volts, shifts, gate))
        else:
            files.append(_pinch_off(device, stretch, moment(), volts, shifts, gate))
    return files


def _coupling(device: Device, one: Site, other: Site) -> float:
    names = [site.name for site in device.sites]
    return float(device.mutual[names.index(one.name), names.index(other.name)])


def _pinch_off(
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    gate: str,
) -> PlannedFile:
    turn_on = device.gate(gate).threshold + shifts[gate]
    # from well below the turn-on to where the series resistance flattens the curve
    ends = sorted((turn_on - 0.12 * device.sign, turn_on + 0.20 * device.sign))
    low, high = (round(end, 3) for end in ends)
    return _file(device, stretch, at, volts, shifts, "pinch-off", gate, gate, low, high, 241, both_ways=True)


def _leakage(
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    gate: str,
) -> PlannedFile:
    return _file(device, stretch, at, volts, shifts, "leakage", gate, gate, 0.0, 1.45, 117)


def _peaks(
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    site: Site,
) -> PlannedFile:
    # four peaks, the working point in the valley between the middle ones
    half = 2.1 * site.addition_energy / device.lever_arm(site.name)
    low, high = round(volts[site.gate] - half, 4), round(volts[site.gate] + half, 4)
    return _file(device, stretch, at, volts, shifts, "coulomb-peaks", site.gate, site.name, low, high, 1201)


def _transition(
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    dot: Site,
    sensor: Site,
) -> PlannedFile:
    place = device.transition_volts(dot.name, dot.charges, volts, shifts)
    # a window of 24 thermal widths: the step is narrow in it and well inside
    half = 12 * 3.5255 * BOLTZMANN_EV * device.electron_temperature / device.lever_arm(dot.name)
    # the person at the cryostat centres to a millivolt
    middle = round(place, 3)
    return _file(
        device,
        stretch,
        at,
        volts,
        shifts,
        "dot-transition",
        dot.gate,
        dot.name,
        round(middle - half, 4),
        round(middle + half, 4),
        321,
        sensor=sensor.name,
    )


def _file(
    device: Device,
    stretch: Stretch,
    at: datetime,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    kind: str,
    gate: str,
    subject: str,
    low: float,
    high: float,
    count: int,
    *,
    both_ways: bool = False,
    sensor: str | None = None,
) -> PlannedFile:
    form = FORMATS[device.name]
    name = f"{at:%H%M}-{kind}-{subject}{_SUFFIX[form]}"
    return PlannedFile(
        path=f"{device.name}/{at:%Y-%m-%d}/{name}",
        device=device,
        cooldown=stretch.cooldown,
        stretch=stretch.name,
        at=at,
        kind=kind,
        gate=gate,
        subject=subject,
        low=low,
        high=high,
        count=count,
        volts=volts,
        shifts=shifts,
        form=form,
        both_ways=both_ways,
        sensor=sensor,
    )
