"""Simulated Coulomb diamonds with known truth: a rate equation over charge states."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from registry.samples import Axis, FloatArray, Samples, Signal

ELEMENTARY_CHARGE = 1.602176634e-19
ATTO = 1e-18


@dataclass(frozen=True)
class Dot:
    """A dot between two leads under one gate; capacitances in aF, energies in eV."""

    gate: float = 5.0
    source: float = 10.0
    drain: float = 15.0
    first: float = 0.020
    charges: int = 4
    thermal: float = 1.4e-4
    rate_ratio: float = 1.0
    degeneracy: float = 1.0
    levels: tuple[float, ...] = field(default=(0.0, 0.0, 0.0, 0.0))
    symmetric: bool = False

    @property
    def total(self) -> float:
        return self.gate + self.source + self.drain

    @property
    def lever_arm(self) -> float:
        return self.gate / self.total

    @property
    def spacing(self) -> float:
        return ELEMENTARY_CHARGE / (self.gate * ATTO)

    def current(self, gate: FloatArray, bias: FloatArray) -> FloatArray:
        """Stationary current of the birth-death chain of charges; one tunnel rate is 1."""
        source, drain = (0.5 * bias, -0.5 * bias) if self.symmetric else (bias, 0.0 * bias)
        charging = ELEMENTARY_CHARGE / (self.total * ATTO)
        induced = (self.gate * (gate - self.first) + self.source * source + self.drain * drain) / self.total
        flows, odds = [], []
        for k in range(self.charges):
            level = k * charging + self.levels[k] - induced
            from_source, from_drain = self._fermi(level + source), self._fermi(level + drain)
            enter, leave = self.degeneracy * from_source, 1.0 - from_source
            ratio = self.rate_ratio
            all_enter = enter + ratio * self.degeneracy * from_drain
            all_leave = leave + ratio * (1.0 - from_drain)
            flows.append((enter, leave))
            odds.append(np.log(np.maximum(all_enter, 1e-290)) - np.log(np.maximum(all_leave, 1e-290)))
        heights = np.concatenate([np.zeros((1, *odds[0].shape)), np.cumsum(np.stack(odds), axis=0)])
        chance = np.exp(heights - np.max(heights, axis=0))
        chance /= np.sum(chance, axis=0)
        parts = [chance[k + 1] * leave - chance[k] * enter for k, (enter, leave) in enumerate(flows)]
        return np.asarray(np.sum(parts, axis=0), dtype=float)

    def conductance(self, gate: FloatArray, bias: FloatArray) -> FloatArray:
        step = 1e-6
        return (self.current(gate, bias + step) - self.current(gate, bias - step)) / (2.0 * step)

    def _fermi(self, energy: FloatArray) -> FloatArray:
        return np.asarray(0.5 * (1.0 - np.tanh(energy / (2.0 * self.thermal))), dtype=float)


@dataclass(frozen=True)
class Scan:
    """How a map is taken: sizes in samples, drift and jump in gate samples."""

    columns: int = 110
    rows: int = 56
    largest_bias: float = 3.5e-3
    bias_slow: bool = True
    conductance: bool = False
    offset: float = 0.0
    drift: float = 0.0
    jump: float = 0.0
    noise: float = 0.05
    pink: float = 0.0

    def axes(self) -> tuple[FloatArray, FloatArray]:
        gate = np.linspace(0.0, 0.11, self.columns)
        return gate, np.linspace(-self.largest_bias, self.largest_bias, self.rows)

    def clean(self, dot: Dot, charge: FloatArray) -> FloatArray:
        gate, bias = self.axes()
        shift = charge[:, None] if self.bias_slow else charge[None, :]
        moved = np.broadcast_to(gate[None, :] - shift, (self.rows, self.columns))
        taken = dot.conductance if self.conductance else dot.current
        y = taken(moved, np.broadcast_to(bias[:, None] - self.offset, moved.shape))
        return y / float(np.percentile(np.abs(y), 99.0))

    def take(self, dot: Dot, rng: np.random.Generator) -> Samples:
        gate, _ = self.axes()
        steps = self.rows if self.bias_slow else self.columns
        charge = self.drift * np.cumsum(rng.normal(size=steps))
        charge[int(rng.uniform(0.3, 0.7) * steps) :] += self.jump
        y = self.clean(dot, charge * (gate[1] - gate[0]))
        y = y + self.noise * rng.normal(size=y.shape)
        if self.pink:
            low = _pink(y.size, rng)
            y += (
                self.noise
                * self.pink
                * (low.reshape(y.shape) if self.bias_slow else low.reshape(y.T.shape).T)
            )
        return self.samples(y)

    def samples(self, y: FloatArray) -> Samples:
        gate, bias = self.axes()
        axes = (Axis("bias", "V", bias), Axis("P1", "V", gate, "gate"))
        values, order = (y, axes) if self.bias_slow else (y.T, axes[::-1])
        return Samples("map", order, (Signal("signal", "S" if self.conductance else "A", 1e-10 * values),))


def _pink(count: int, rng: np.random.Generator) -> FloatArray:
    frequency = np.fft.rfftfreq(4 * count)
    frequency[0] = 1.0
    spectrum = (rng.normal(size=frequency.size) + 1j * rng.normal(size=frequency.size)) / np.sqrt(frequency)
    spectrum[0] = 0.0
    noise = np.fft.irfft(spectrum, 4 * count)[:count]
    return np.asarray(noise / np.std(noise), dtype=float)
