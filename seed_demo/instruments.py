"""What the simulated instruments record: traces as arrays in SI, the truth beside them.

Sweep volts are at the gate and come from the caller, who knows the grid of the sources.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from seed_demo.devices import BOLTZMANN_EV, Device, FloatArray
from seed_demo.noise import Noise
from seed_demo.shapes import ChannelLaw, fermi_step, peak_shape

__all__ = [
    "Trace",
    "Truth",
    "coulomb_peaks",
    "dot_transition",
    "leakage_trace",
    "pinch_off",
    "up_and_down",
]

# Smallest step of the current meter's converter in A: values are whole multiples of it.
METER_STEP = 1e-14


@dataclass(frozen=True)
class Truth:
    """One number that a correct analysis of the trace must find, SI or eV."""

    quantity: str
    value: float
    unit: str
    subject: str | None = None
    direction: str | None = None


@dataclass(frozen=True, eq=False)
class Trace:
    """One swept record.

    Attributes:
        kind: name of the method that understands it.
        gate: the swept gate.
        subject: gate or site that the values belong to.
        volts: shape (n,), V at the gate, in the order of time.
        signal, unit: name and unit (SI) of what was recorded.
        values: shape (n,).
        truths: what a correct analysis must find.
    """

    kind: str
    gate: str
    subject: str
    volts: FloatArray
    signal: str
    unit: str
    values: FloatArray
    truths: tuple[Truth, ...]

    def truth(self, quantity: str, subject: str | None = None, direction: str | None = None) -> float:
        """Return the one true value with these names, or raise ``KeyError``."""
        for truth in self.truths:
            if (truth.quantity, truth.subject, truth.direction) == (quantity, subject, direction):
                return truth.value
        raise KeyError(quantity)


def up_and_down(low: float, high: float, count: int) -> FloatArray:
    """Volts of a sweep up and back down, shape (2 count,); each run has ``count`` samples."""
    up = np.linspace(low, high, count)
    return np.concatenate([up, up[::-1]])


def pinch_off(
    device: Device,
    gate: str,
    sweep: FloatArray,
    shifts: Mapping[str, float],
    *,
    bias: float,
    noise: Noise,
    rng: np.random.Generator,
    law: ChannelLaw | None = None,
) -> Trace:
    """Current through the channel under ``gate``; rising runs turn on later than falling ones.

    Args:
        device: which device.
        gate: which gate is swept.
        sweep: V at the gate in the order of time, rising and/or falling runs.
        shifts: V by which the thermal history moved each gate.
        bias: V across the channel.
        noise: in A.
        rng: source of the noise.
        law: how the channel turns on.
    """
    law = ChannelLaw() if law is None else law
    turn_on = device.gate(gate).threshold + shifts.get(gate, 0.0)
    steps = np.diff(sweep, append=sweep[-1] + (sweep[-1] - sweep[-2]))
    rising = steps > 0
    # the sample at the turning point still belongs to the run that reached it
    rising[1:] |= rising[:-1] & (steps[1:] == 0)
    late = np.where(rising, 0.5 * law.hysteresis, -0.5 * law.hysteresis)
    current = bias * law.conductance(device.sign * (sweep - turn_on - late))
    truths = []
    for direction, there, half in (("up", rising.any(), 0.5), ("down", not rising.all(), -0.5)):
        if there:
            value = turn_on + half * law.hysteresis + device.sign * law.intercept()
            truths.append(Truth("threshold_voltage", value, "V", direction=direction))
    if len(truths) == 2:
        truths.append(Truth("hysteresis_voltage", law.hysteresis, "V"))
    values = _metered(current + noise.draw(sweep.size, rng))
    return Trace("pinch-off", gate, gate, sweep, "channel_current", "A", values, tuple(truths))


def coulomb_peaks(
    device: Device,
    site: str,
    sweep: FloatArray,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    *,
    height: float,
    noise: Noise,
    rng: np.random.Generator,
    temperature: float | None = None,
) -> Trace:
    """Current through ``site`` against its own gate: one peak for each charge it takes.

    Args:
        device: which device.
        site: a dot or sensor.
        sweep: V at the site's own gate.
        volts: V of all gates; the swept one is ignored.
        shifts: V by which the thermal history moved each gate.
        height: A at the top of the peak of the working charge; others vary by a few percent.
        noise: in A.
        rng: source of the noise.
        temperature: K of the electrons; the device's own by default.
    """
    own = device.site(site)
    kelvin = device.electron_temperature if temperature is None else temperature
    arm = device.lever_arm(site)
    low, high = float(sweep.min()), float(sweep.max())
    current = np.full(sweep.size, 0.002 * height)
    inside = []
    for charge in range(1, own.charges + 200):
        position = device.transition_volts(site, charge, volts, shifts)
        # peaks just outside still lend their tails
        if not low - own.addition_energy / arm < position < high + own.addition_energy / arm:
            continue
        # a slow variation of the tunnel rates with the charge number, made up
        top = height * (1.0 + 0.08 * np.sin(1.7 * charge))
        current += top * peak_shape(arm * (sweep - position), kelvin, own.line_shape)
        if low < position < high:
            inside.append(position)
    values = _metered(current + noise.draw(sweep.size, rng))
    truths = _peak_truths(sorted(inside), arm, kelvin, own.line_shape)
    return Trace("coulomb-peaks", own.gate, site, sweep, f"current_{site}", "A", values, truths)


def _peak_truths(positions: list[float], arm: float, kelvin: float, line_shape: str) -> tuple[Truth, ...]:
    # full widths at half maximum in kT: 4 arccosh(sqrt 2), and the root of x/sinh x = 1/2 twice over
    in_kt = 4 * np.arccosh(np.sqrt(2.0)) if line_shape == "single-level" else 4.354637969930614
    width = float(in_kt * BOLTZMANN_EV * kelvin / arm)
    truths = [Truth("peak_position", p, "V", f"peak {i}") for i, p in enumerate(positions, 1)]
    truths.append(Truth("peak_width", width, "V"))
    truths.append(Truth("electron_temperature", kelvin, "K"))
    if len(positions) > 1:
        spacing = (positions[-1] - positions[0]) / (len(positions) - 1)
        truths.append(Truth("addition_voltage", spacing, "V"))
        truths.append(Truth("addition_energy", spacing * arm, "eV"))
    return tuple(truths)


def dot_transition(
    device: Device,
    site: str,
    sensor: str,
    charge: int,
    sweep: FloatArray,
    volts: Mapping[str, float],
    shifts: Mapping[str, float],
    *,
    height: float,
    noise: Noise,
    rng: np.random.Generator,
) -> Trace:
    """Sensor current while ``site`` takes its ``charge``-th carrier from the lead.

    The sensor is held on the steepest point of a peak of ``height`` A (slope
    2/(3 sqrt 3) height/kT, single level); the swept gate's direct pull on the sensor is
    compensated but for a twentieth, which leaves a straight background.

    Args:
        device: which device.
        site: the dot.
        sensor: the site that senses.
        charge: which carrier, 1 for the first.
        sweep: V at the dot's own gate.
        volts: V of all gates; the swept one is ignored.
        shifts: V by which the thermal history moved each gate.
        height: A at the top of the sensor's peak.
        noise: in A.
        rng: source of the noise.
    """
    own = device.site(site)
    arm = device.lever_arm(site)
    kelvin = device.electron_temperature
    steepness = 2.0 / (3.0 * np.sqrt(3.0)) * height / (BOLTZMANN_EV * kelvin)
    names = [s.name for s in device.sites]
    coupling = float(device.mutual[names.index(site), names.index(sensor)])
    step = -steepness * coupling
    position = device.transition_volts(site, charge, volts, shifts)
    leftover = 0.05 * device.sign * device.lever_arm(sensor, own.gate) * steepness
    current = 0.75 * height + leftover * (sweep - position)
    current += step * fermi_step(device.sign * arm * (sweep - position), kelvin)
    truths = (
        Truth("transition_voltage", position, "V"),
        # the step is the signal change with growing volts: for holes the charge leaves
        Truth("sensor_step", float(device.sign * step), "A"),
        Truth("electron_temperature", kelvin, "K"),
        Truth("lever_arm", arm, "eV/V"),
    )
    values = _metered(current + noise.draw(sweep.size, rng))
    return Trace("dot-transition", own.gate, site, sweep, f"current_{sensor}", "A", values, truths)


def leakage_trace(
    gate: str, sweep: FloatArray, onset: float, conductance: float, *, noise: Noise, rng: np.random.Generator
) -> Trace:
    """Current into a gate that leaks in proportion to the volts beyond ``onset``, conductance in S."""
    beyond = np.clip(np.abs(sweep) - abs(onset), 0.0, None)
    current = np.sign(sweep) * conductance * beyond
    values = _metered(current + noise.draw(sweep.size, rng))
    truths = (Truth("leakage_current", float(np.max(np.abs(current))), "A"),)
    return Trace("leakage", gate, gate, sweep, "gate_current", "A", values, truths)


def _metered(current: FloatArray) -> FloatArray:
    """Round to the converter's step."""
    return np.round(current / METER_STEP) * METER_STEP
