"""Which four invented devices the demo laboratory owns.

Two chips: ``brook-3`` (electrons in silicon) with a double dot, a row of four dots and a
single dot, and ``heath-7`` (holes in germanium) with one dot.  Every value lies in the
usual ranges of the field and is common practice, no source.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from seed_demo.devices import Device, FloatArray, Gate, PairLimit, Site, falloff_lever_arms

__all__ = ["CHIPS", "Chip", "devices"]

# Half the distance between neighbouring plungers in nm; barriers lie between them.
_HALF_PITCH = 45.0
# Depth of the dots below the gates in nm: sets how fast a gate's pull falls off.
_REACH = 60.0


@dataclass(frozen=True)
class Chip:
    """A die and the words that go with it."""

    label: str
    wafer: str
    lot: str
    die: str
    material: str
    note: str


CHIPS = (
    Chip("brook-3", "W-0417", "spring", "r2c5", "28Si/SiGe", "electrons; 8 nm well, 17 nm oxide"),
    Chip("heath-7", "W-0533", "autumn", "r4c1", "Ge/SiGe", "holes; 55 nm deep well"),
)


@dataclass(frozen=True)
class _Make:
    """What the gates of one make have in common: sign and size of the volts."""

    sign: int
    v_min: float
    v_max: float
    max_step: float = 0.01
    max_rate: float = 0.05

    def gate(
        self, name: str, role: str, x: float, y: float, threshold: float, working: float, order: int
    ) -> Gate:
        return Gate(
            name=name,
            role=role,
            x_nm=x,
            y_nm=y,
            v_min=self.v_min,
            v_max=self.v_max,
            max_step=self.max_step,
            max_rate=self.max_rate,
            ramp_order=order,
            threshold=self.sign * threshold,
            working=self.sign * working,
        )


_SILICON = _Make(sign=1, v_min=-1.0, v_max=2.2)
_GERMANIUM = _Make(sign=-1, v_min=-2.4, v_max=0.8)

# Ramp orders: reservoirs first, then barriers, plungers and sensors last.
_RESERVOIR, _BARRIER, _PLUNGER, _SENSOR = 1, 2, 3, 4


def devices() -> tuple[Device, ...]:
    """Build the four devices."""
    return (_double(), _row(), _single(), _hole())


def _double() -> Device:
    """Two dots and one sensor across from them."""
    make = _SILICON
    gates = (
        make.gate("RL", "reservoir", -3 * _HALF_PITCH, 0, 0.870, 1.450, _RESERVOIR),
        make.gate("B1", "barrier", -2 * _HALF_PITCH, 0, 0.412, 0.655, _BARRIER),
        make.gate("P1", "plunger", -_HALF_PITCH, 0, 0.731, 1.120, _PLUNGER),
        make.gate("B2", "barrier", 0, 0, 0.386, 0.590, _BARRIER),
        make.gate("P2", "plunger", _HALF_PITCH, 0, 0.744, 1.135, _PLUNGER),
        make.gate("B3", "barrier", 2 * _HALF_PITCH, 0, 0.403, 0.640, _BARRIER),
        make.gate("RR", "reservoir", 3 * _HALF_PITCH, 0, 0.862, 1.450, _RESERVOIR),
        make.gate("SB1", "barrier", -_HALF_PITCH, 200, 0.431, 0.700, _BARRIER),
        make.gate("SP", "sensor", 0, 200, 0.702, 1.060, _SENSOR),
        make.gate("SB2", "barrier", _HALF_PITCH, 200, 0.425, 0.705, _BARRIER),
    )
    sites = (
        Site("D1", "dot", "P1", ("B1", "P1", "B2"), 3.9e-3, 0.4e-3, 1),
        Site("D2", "dot", "P2", ("B2", "P2", "B3"), 3.8e-3, 0.5e-3, 1),
        Site("S1", "sensor", "SP", ("SB1", "SP", "SB2"), 1.9e-3, 0.0, 24),
    )
    own = {"D1": 0.105, "D2": 0.098, "S1": 0.072}
    pairs = (PairLimit("P1", "B2", -1.2, 1.2), PairLimit("P2", "B2", -1.2, 1.2))
    return _device("brook-3", "ferry", "ford", "electron", gates, sites, pairs, own, 0.118)


def _row() -> Device:
    """Four dots in a row and a sensor at each half."""
    make = _SILICON
    gates = [make.gate("RL", "reservoir", -5 * _HALF_PITCH, 0, 0.881, 1.480, _RESERVOIR)]
    barriers = ((0.402, 0.640), (0.391, 0.602), (0.377, 0.585), (0.395, 0.610), (0.409, 0.651))
    plungers = ((0.728, 1.105), (0.739, 1.118), (0.751, 1.124), (0.735, 1.110))
    for i, (threshold, working) in enumerate(barriers):
        place = (2 * i - 4) * _HALF_PITCH
        gates.append(make.gate(f"B{i + 1}", "barrier", place, 0, threshold, working, _BARRIER))
        if i < len(plungers):
            low, at_work = plungers[i]
            gates.append(make.gate(f"P{i + 1}", "plunger", place + _HALF_PITCH, 0, low, at_work, _PLUNGER))
    gates.append(make.gate("RR", "reservoir", 5 * _HALF_PITCH, 0, 0.875, 1.480, _RESERVOIR))
    gates.append(make.gate("SL", "sensor", -2 * _HALF_PITCH, 200, 0.699, 1.055, _SENSOR))
    gates.append(make.gate("SR", "sensor", 2 * _HALF_PITCH, 200, 0.707, 1.068, _SENSOR))
    energies = ((3.7e-3, 0.4e-3), (3.6e-3, 0.3e-3), (3.6e-3, 0.4e-3), (3.8e-3, 0.3e-3))
    sites = [
        Site(f"D{i}", "dot", f"P{i}", (f"B{i}", f"P{i}", f"B{i + 1}"), charging, spacing, 1)
        for i, (charging, spacing) in enumerate(energies, 1)
    ]
    sites.append(Site("SW", "sensor", "SL", ("SL",), 1.8e-3, 0.0, 30, "multi-level"))
    sites.append(Site("SE", "sensor", "SR", ("SR",), 1.8e-3, 0.0, 28, "multi-level"))
    own = {"D1": 0.101, "D2": 0.094, "D3": 0.096, "D4": 0.103, "SW": 0.070, "SE": 0.068}
    pairs = tuple(PairLimit(f"P{i}", f"B{i}", -1.2, 1.2) for i in range(1, 5))
    return _device("brook-3", "copse", "ford", "electron", tuple(gates), tuple(sites), pairs, own, 0.125)


def _single() -> Device:
    """One dot between two barriers, measured by its own current."""
    make = _SILICON
    gates = (
        make.gate("R", "reservoir", -2 * _HALF_PITCH, 0, 0.866, 1.420, _RESERVOIR),
        make.gate("BL", "barrier", -_HALF_PITCH, 0, 0.421, 0.668, _BARRIER),
        make.gate("P", "plunger", 0, 0, 0.722, 1.090, _PLUNGER),
        make.gate("BR", "barrier", _HALF_PITCH, 0, 0.418, 0.661, _BARRIER),
    )
    sites = (Site("D", "dot", "P", ("BL", "P", "BR"), 2.4e-3, 0.0, 12),)
    pairs = (PairLimit("P", "BL", -1.2, 1.2),)
    return _device("brook-3", "stile", "ford", "electron", gates, sites, pairs, {"D": 0.088}, 0.131)


def _hole() -> Device:
    """One hole dot and one sensor; all volts are negative."""
    make = _GERMANIUM
    gates = (
        make.gate("RL", "reservoir", -3 * _HALF_PITCH, 0, 0.612, 1.120, _RESERVOIR),
        make.gate("B1", "barrier", -_HALF_PITCH, 0, 0.298, 0.470, _BARRIER),
        make.gate("P1", "plunger", 0, 0, 0.534, 0.880, _PLUNGER),
        make.gate("B2", "barrier", _HALF_PITCH, 0, 0.306, 0.482, _BARRIER),
        make.gate("SP", "sensor", 0, 190, 0.521, 0.840, _SENSOR),
    )
    sites = (
        Site("D1", "dot", "P1", ("B1", "P1", "B2"), 3.1e-3, 0.3e-3, 1),
        Site("S1", "sensor", "SP", ("SP",), 2.2e-3, 0.0, 18),
    )
    pairs = (PairLimit("P1", "B1", -1.0, 1.0),)
    own = {"D1": 0.124, "S1": 0.090}
    return _device("heath-7", "kiln", "moor", "hole", gates, sites, pairs, own, 0.300)


def _device(
    chip: str,
    name: str,
    family: str,
    carrier: str,
    gates: tuple[Gate, ...],
    sites: tuple[Site, ...],
    pairs: tuple[PairLimit, ...],
    own: dict[str, float],
    electron_temperature: float,
) -> Device:
    return Device(
        chip=chip,
        name=name,
        family=family,
        carrier=carrier,
        gates=gates,
        sites=sites,
        pairs=pairs,
        lever_arms=falloff_lever_arms(gates, sites, own, _REACH),
        mutual=_mutual(gates, sites),
        electron_temperature=electron_temperature,
    )


def _mutual(gates: tuple[Gate, ...], sites: tuple[Site, ...]) -> FloatArray:
    """Mutual energies in eV: 80 ueV between dots at 90 nm, 6 ueV over 200 nm, as 1/d^3."""
    place = {gate.name: np.asarray([gate.x_nm, gate.y_nm]) for gate in gates}
    energies = np.zeros((len(sites), len(sites)))
    for i, one in enumerate(sites):
        for j, other in enumerate(sites):
            if i != j:
                distance = float(np.linalg.norm(place[one.gate] - place[other.gate]))
                energies[i, j] = 8.0e-5 * (2 * _HALF_PITCH / distance) ** 3
    return energies
