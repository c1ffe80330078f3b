"""A double dot's map by minimising over all charge states: no formula of the fit is used."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from registry.samples import Axis, FloatArray, Samples, Signal

ELECTRON = 1.602176634e-19


@dataclass(frozen=True, eq=False)
class DoubleDot:
    """Capacitances in aF; gates act on both dots."""

    gates: tuple[tuple[float, float], tuple[float, float]] = ((4.0, 0.8), (0.9, 5.0))
    total: tuple[float, float] = (34.0, 40.0)
    mutual: float = 10.0

    def energies(self) -> FloatArray:
        """Charging energies in eV, shape (2, 2)."""
        c1, c2 = self.total
        matrix = 1e-18 * np.array([[c1, -self.mutual], [-self.mutual, c2]])
        return np.asarray(ELECTRON * np.linalg.inv(matrix), dtype=float)

    def pulls(self) -> FloatArray:
        """Lever arms in eV/V, dots by gates."""
        return np.asarray(self.energies() @ (1e-18 * np.array(self.gates)) / ELECTRON, dtype=float)

    def truth(self) -> dict[tuple[str, str | None], float]:
        """What the method should find, by quantity and subject."""
        energy, pull = self.energies(), self.pulls()
        return {
            ("cross_capacitance_ratio", "P1<-P2"): pull[0, 1] / pull[0, 0],
            ("cross_capacitance_ratio", "P2<-P1"): pull[1, 0] / pull[1, 1],
            ("addition_voltage", "P1"): energy[0, 0] / pull[0, 0],
            ("addition_voltage", "P2"): energy[1, 1] / pull[1, 1],
            ("interdot_charging_energy", None): energy[0, 1],
            ("mutual_capacitance", None): 1e-18 * self.mutual,
        }


def occupation(dot: DoubleDot, x: FloatArray, y: FloatArray, thermal: float) -> FloatArray:
    """Mean charges (2, ...) at gate volts ``x``, ``y``: a Boltzmann mean over all states."""
    energy, pull = dot.energies(), dot.pulls()
    level = [pull[i, 0] * x + pull[i, 1] * y for i in range(2)]
    most = [int(np.max(level[i]) / energy[i, i]) + 2 for i in range(2)]
    states = [(a, b) for a in range(most[0] + 1) for b in range(most[1] + 1)]
    cost = np.array(
        [0.5 * np.array(n) @ energy @ np.array(n) - n[0] * level[0] - n[1] * level[1] for n in states]
    )
    weight = np.exp(-(cost - cost.min(axis=0)) / thermal)
    return np.asarray(np.tensordot(np.array(states).T, weight / weight.sum(axis=0), 1), dtype=float)


def charge_map(
    dot: DoubleDot,
    rng: np.random.Generator,
    noise: float = 0.1,
    pink: float = 0.0,
    drift: float = 0.0,
    size: tuple[int, int] = (110, 100),
    origin: tuple[float, float] = (0.02, 0.01),
    thermal: float = 6e-5,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Fast volts, slow volts, sensor signal: steps 1 and 0.7 on a bent background.

    ``noise`` is white, ``pink`` the 1/f noise over it (rms in a row), in order of time over
    the whole map; ``drift`` the random walk of either dot's own charge, pixels a root row.
    """
    nx, ny = size
    x, y = origin[0] + np.linspace(0.0, 0.1, nx), origin[1] + np.linspace(0.0, 0.1, ny)
    walk = drift * np.cumsum(rng.normal(size=(ny, 2)), axis=0) * (x[1] - x[0])
    pull = dot.pulls()
    # each dot's own level walks: found as volts of both gates that do just that
    shift = np.linalg.solve(pull, (walk * np.diag(pull)).T)
    charges = occupation(dot, x[None, :] + shift[0][:, None], y[:, None] + shift[1][:, None], thermal)
    q = charges[0] + 0.7 * charges[1] - 30.0 * (x[None, :] - x[0]) - 20.0 * (y[:, None] - y[0])
    error = rng.normal(size=nx * ny)
    if pink:
        frequency = np.fft.rfftfreq(2 * nx * ny)
        frequency[0] = 1.0
        wave = (rng.normal(size=frequency.size) + 1j * rng.normal(size=frequency.size)) / np.sqrt(frequency)
        slow = np.fft.irfft(wave, 2 * nx * ny)[: nx * ny]
        error += pink * slow / np.mean(slow.reshape(ny, nx).std(axis=1))
    return x, y, q + 0.01 * q**2 + noise * error.reshape(ny, nx)


def samples_of(x: FloatArray, y: FloatArray, z: FloatArray) -> Samples:
    """Samples of a map, slow gate P2, fast gate P1."""
    axes = (Axis("P2", "V", y, "gate"), Axis("P1", "V", x, "gate"))
    return Samples("map", axes, (Signal("sensor", "A", z),))
