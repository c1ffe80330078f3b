"""How a simulated gate-defined device answers to its gate voltages.

The constant-interaction model with a lever-arm matrix: each site's addition energy is
linear in the volts of all gates.  A thermal cycle shifts gates, as if a fixed voltage
stood in series with each of them.  No noise, no instruments and no files here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["BOLTZMANN_EV", "Device", "FloatArray", "Gate", "PairLimit", "Site", "falloff_lever_arms"]

FloatArray = NDArray[np.float64]
Volts = Mapping[str, float]

# Exact since the SI of 2019 (26th CGPM, Resolution 1): k_B / e.
BOLTZMANN_EV = 1.380649e-23 / 1.602176634e-19


@dataclass(frozen=True)
class Gate:
    """One electrode.  Volts are at the gate, lengths in nm.

    Attributes:
        name, role: role is ``plunger``, ``barrier``, ``reservoir`` or ``sensor``.
        x_nm, y_nm: centre of the electrode.
        v_min, v_max: limits in V.
        max_step, max_rate: in V and V/s.
        ramp_order: stages go up in this order, down in the reverse one.
        threshold: turn-on of the channel under the gate in V, without any shift.
        working: volts in a well tuned device, without any shift.
    """

    name: str
    role: str
    x_nm: float
    y_nm: float
    v_min: float
    v_max: float
    max_step: float
    max_rate: float
    ramp_order: int
    threshold: float
    working: float


@dataclass(frozen=True)
class PairLimit:
    """Allowed range in V of the volts of ``gate_a`` minus those of ``gate_b``."""

    gate_a: str
    gate_b: str
    low: float
    high: float


@dataclass(frozen=True)
class Site:
    """One dot or sensor.

    Attributes:
        name, kind: kind is ``dot`` or ``sensor``.
        gate: the electrode that belongs to it alone (its plunger).
        gates: all electrodes that form it.
        charging_energy, level_spacing: in eV; their sum is the addition energy.
        charges: occupation at the working volts.
        line_shape: ``single-level`` or ``multi-level`` Coulomb peaks.
    """

    name: str
    kind: str
    gate: str
    gates: tuple[str, ...]
    charging_energy: float
    level_spacing: float
    charges: int
    line_shape: str = "single-level"

    @property
    def addition_energy(self) -> float:
        """Energy between two successive charges, in eV."""
        return self.charging_energy + self.level_spacing


@dataclass(frozen=True, eq=False)
class Device:
    """A gated structure with known truth.

    Attributes:
        chip, name, family: where it is and of which make.
        carrier: ``electron`` or ``hole``.
        gates, sites, pairs: the parts of its gate sheet.
        lever_arms: shape (sites, gates), eV/V, positive for holes too.
        mutual: shape (sites, sites), eV: how far one more charge on one site raises
            the addition energy of another; zero diagonal, symmetric.
        electron_temperature: K, at base temperature.
    """

    chip: str
    name: str
    family: str
    carrier: str
    gates: tuple[Gate, ...]
    sites: tuple[Site, ...]
    pairs: tuple[PairLimit, ...]
    lever_arms: FloatArray
    mutual: FloatArray
    electron_temperature: float
    _gate_index: dict[str, int] = field(init=False, repr=False)
    _site_index: dict[str, int] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        """Remember where each gate and site stands in the matrices."""
        object.__setattr__(self, "_gate_index", {gate.name: i for i, gate in enumerate(self.gates)})
        object.__setattr__(self, "_site_index", {site.name: i for i, site in enumerate(self.sites)})

    @property
    def path(self) -> str:
        """``CHIP/NAME``."""
        return f"{self.chip}/{self.name}"

    @property
    def sign(self) -> int:
        """+1 where positive volts draw carriers in (electrons), -1 for holes."""
        return 1 if self.carrier == "electron" else -1

    def gate(self, name: str) -> Gate:
        """Return the gate called ``name``."""
        return self.gates[self._gate_index[name]]

    def site(self, name: str) -> Site:
        """Return the site called ``name``."""
        return self.sites[self._site_index[name]]

    def lever_arm(self, site: str, gate: str | None = None) -> float:
        """Lever arm in eV/V of ``gate`` (its own one by default) on ``site``."""
        chosen = self.site(site).gate if gate is None else gate
        return float(self.lever_arms[self._site_index[site], self._gate_index[chosen]])

    def working_volts(self) -> dict[str, float]:
        """Volts of the well tuned device without any shift."""
        return {gate.name: gate.working for gate in self.gates}

    def lever(self, site: str, volts: Volts, shifts: Volts) -> float:
        """Energy in eV by which the gates pull ``site`` below its working potential."""
        row = self.lever_arms[self._site_index[site]]
        away = [volts[g.name] - shifts.get(g.name, 0.0) - g.working for g in self.gates]
        return self.sign * float(row @ np.asarray(away))

    def addition_potential(
        self, site: str, charge: int, volts: Volts, shifts: Volts, others: Mapping[str, int] | None = None
    ) -> float:
        """Energy in eV needed to bring the ``charge``-th carrier from the lead to ``site``.

        mu(N) = (N - N_w - 1/2) E_add + sum_j E_ij (N_j - N_w,j) - s sum_g a_g (V_g - shift_g - w_g)
        with N_w the working occupation and w_g the working volts: the electrostatics of
        R. Hanson et al., Rev. Mod. Phys. 79 (2007) 1217, section II, linear in the gates.

        Args:
            site: a dot or sensor.
            charge: which carrier, 1 for the first.
            volts: V at the gate, every gate of the device.
            shifts: V, gates that are missing have none.
            others: occupation of the other sites; missing ones are at work.
        """
        own = self.site(site)
        energy = (charge - own.charges - 0.5) * own.addition_energy
        for name, count in (others or {}).items():
            other = self._site_index[name]
            energy += float(self.mutual[self._site_index[site], other]) * (count - self.sites[other].charges)
        return energy - self.lever(site, volts, shifts)

    def transition_volts(
        self,
        site: str,
        charge: int,
        volts: Volts,
        shifts: Volts,
        *,
        gate: str | None = None,
        others: Mapping[str, int] | None = None,
    ) -> float:
        """Volts of ``gate`` at which ``site`` takes its ``charge``-th carrier, all others as in ``volts``."""
        chosen = self.site(site).gate if gate is None else gate
        missing = self.addition_potential(site, charge, volts, shifts, others)
        return volts[chosen] + self.sign * missing / self.lever_arm(site, chosen)

    def retuned(self, volts: Volts, shifts: Volts) -> dict[str, float]:
        """Volts that bring every site back to its working potential by the plungers alone.

        The other gates keep ``volts``.  Solves the square system of the sites' own gates.
        """
        own = [self._gate_index[site.gate] for site in self.sites]
        off = [self.lever(site.name, volts, shifts) for site in self.sites]
        step = np.linalg.solve(self.lever_arms[:, own], -self.sign * np.asarray(off))
        result = dict(volts)
        for index, move in zip(own, step, strict=True):
            result[self.gates[index].name] += float(move)
        return result


def falloff_lever_arms(
    gates: tuple[Gate, ...], sites: tuple[Site, ...], own: Mapping[str, float], reach_nm: float
) -> FloatArray:
    """Lever arms that fall off with distance, shape (sites, gates), eV/V.

    The pull of a gate at distance d is own * w * (1 + (d / reach)^2)^(-3/2), the field of a
    small electrode above a plane; w is 1 for plungers and sensors, 0.6 for barriers and 0.25
    for reservoirs, which other gates screen.  Scales: common practice, no source.

    Args:
        gates: every gate of the device.
        sites: every site of it; a site sits under its own gate.
        own: lever arm of each site's own gate in eV/V.
        reach_nm: depth of the dot below the gates.
    """
    weight = {"plunger": 1.0, "sensor": 1.0, "barrier": 0.6, "reservoir": 0.25}
    place = {gate.name: (gate.x_nm, gate.y_nm) for gate in gates}
    rows = []
    for site in sites:
        x, y = place[site.gate]
        distances = np.asarray([np.hypot(gate.x_nm - x, gate.y_nm - y) for gate in gates])
        weights = np.asarray([weight[gate.role] for gate in gates])
        rows.append(own[site.name] * weights * (1 + (distances / reach_nm) ** 2) ** -1.5)
    return np.asarray(rows)
