"""How time and thermal cycles change the simulated devices.

A full thermal cycle moves all gates of a device together by about 20 mV and each by about
8 mV of its own, a partial warm-up by half of it (scales from memory, no source).  One gate
drifts, one sensor changes for good; the rest of the patterns lies in ``seed_demo.year``.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import replace
from datetime import datetime, timedelta

import numpy as np

from seed_demo import calendar
from seed_demo.calendar import Stretch
from seed_demo.devices import Device

__all__ = ["COMMON_SHIFT", "DRIFT", "JUMP", "OWN_SHIFT", "device_in", "draw_shifts", "rng_for", "shifts_on"]

COMMON_SHIFT = 0.020  # V, all gates of a device together
OWN_SHIFT = 0.008  # V, each gate by itself
PARTIAL = 0.5  # a partial warm-up moves gates by this part of a full one
WANDER = 5.0e-5  # V, from session to session within a stretch
DRIFT = ("copse", "B3", 4.0e-4)  # device, gate, V per day: the gate that drifts
JUMP = ("ferry", "S1", "B4", 0.92)  # device, site, first cooldown, factor on its energy
SCATTER = 0.004  # relative, of charging energies between stretches


def rng_for(seed: int, *names: str) -> np.random.Generator:
    """Random source that depends on the seed and the names only."""
    digest = hashlib.sha256("/".join((str(seed), *names)).encode()).digest()
    return np.random.default_rng(int.from_bytes(digest[:16], "big"))


def device_in(device: Device, stretch: Stretch, seed: int) -> Device:
    """Return the device as it is in ``stretch``: charging energies scatter, one jumps for good."""
    rng = rng_for(seed, "energies", device.path, stretch.name)
    sites = []
    for site in device.sites:
        factor = 1.0 + SCATTER * rng.standard_normal()
        if (device.name, site.name) == JUMP[:2] and stretch.cooldown >= JUMP[2]:
            factor *= JUMP[3]
        charging, spacing = factor * site.charging_energy, factor * site.level_spacing
        sites.append(replace(site, charging_energy=charging, level_spacing=spacing))
    return replace(device, sites=tuple(sites))


def draw_shifts(made: tuple[Device, ...], seed: int) -> dict[tuple[str, str], Mapping[str, float]]:
    """Shift in V of each gate in each stretch, by device and stretch name."""
    shifts: dict[tuple[str, str], Mapping[str, float]] = {}
    for device in made:
        before: Mapping[str, float] = {}
        for stretch in (s for s in calendar.STRETCHES if s.chip == device.chip):
            rng = rng_for(seed, "shift", device.path, stretch.name)
            common = COMMON_SHIFT * rng.standard_normal()
            own = OWN_SHIFT * rng.standard_normal(len(device.gates))
            fresh = {gate.name: float(common + part) for gate, part in zip(device.gates, own, strict=True)}
            if stretch.reset == "partial":
                fresh = {name: before[name] + PARTIAL * value for name, value in fresh.items()}
            before = shifts[device.name, stretch.name] = fresh
    return shifts


def shifts_on(
    device: Device, stretch: Stretch, start: Mapping[str, float], at: datetime, seed: int
) -> dict[str, float]:
    """Shift of each gate at a moment of a stretch: start, wander, and the one that drifts."""
    rng = rng_for(seed, "wander", device.path, at.isoformat())
    now = {name: value + WANDER * float(rng.standard_normal()) for name, value in start.items()}
    if device.name == DRIFT[0]:
        now[DRIFT[1]] += DRIFT[2] * (at - stretch.base) / timedelta(days=1)
    for event in calendar.EVENTS:
        inside = event.cooldown == stretch.cooldown and event.at <= at
        if inside and event.device == device.name and event.site is not None and event.shift is not None:
            now[device.site(event.site).gate] += event.shift
    return now
