"""Which curves the simulated devices show: channel turn-on, Coulomb peak, occupation step."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from seed_demo.devices import BOLTZMANN_EV, FloatArray

__all__ = ["ChannelLaw", "fermi_step", "peak_shape"]

# Beyond this many thermal energies every line shape is below 1e-15 of its height.
_FAR = 40.0


@dataclass(frozen=True)
class ChannelLaw:
    """Conductance of a channel against its gate: soft turn-on, then a series resistance.

    g = gain w ln(1 + exp((V - V_t)/w)),  G = g / (1 + R g).  The values are common practice, no
    source: a few mV per decade of swing at low temperature, tens of kilo-ohms in series.

    Attributes:
        gain: S/V.
        softness: w in V; the subthreshold swing is w ln 10 per decade.
        series: R in ohm, contacts and the rest of the channel.
        hysteresis: V by which the up sweep turns on later than the down sweep.
    """

    gain: float = 2.0e-4
    softness: float = 6.0e-3
    series: float = 2.5e4
    hysteresis: float = 3.0e-3

    def conductance(self, overdrive: FloatArray) -> FloatArray:
        """Conductance in S at ``overdrive`` V beyond the turn-on."""
        channel = self.gain * self.softness * np.logaddexp(0.0, overdrive / self.softness)
        return channel / (1.0 + self.series * channel)

    def intercept(self) -> float:
        """Overdrive in V where the tangent of largest slope meets zero current.

        The same definition as threshold_voltage; found on a grid of 10 uV.
        """
        grid = np.arange(-0.05, 0.25, 1e-5)
        conductance = self.conductance(grid)
        slope = np.gradient(conductance, grid)
        steepest = int(np.argmax(slope))
        return float(grid[steepest] - conductance[steepest] / slope[steepest])


def peak_shape(energy: FloatArray, temperature: float, line_shape: str) -> FloatArray:
    """Height of a Coulomb peak relative to its top, ``energy`` in eV away from it.

    cosh^-2(x/2) for a single level and x/sinh(x) for many, x = energy/kT (C. W. J. Beenakker,
    Phys. Rev. B 44 (1991) 1646).
    """
    x = np.minimum(np.abs(energy) / (BOLTZMANN_EV * temperature), _FAR)
    if line_shape == "single-level":
        return 1.0 / np.cosh(0.5 * x) ** 2
    safe = np.maximum(x, 1e-9)
    return safe / np.sinh(safe)


def fermi_step(energy: FloatArray, temperature: float) -> FloatArray:
    """Mean occupation of a level ``energy`` eV below the lead: 1/(1 + exp(-energy/kT))."""
    return 0.5 * (1.0 + np.tanh(0.5 * energy / (BOLTZMANN_EV * temperature)))
