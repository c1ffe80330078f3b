"""The controlled list of quantities: name, unit, meaning, and how long a value holds."""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

__all__ = ["QUANTITIES", "VALID_UNTIL", "QuantityKind", "ValidUntil"]

ValidUntil = Literal["jump", "stretch", "cooldown", "device"]
VALID_UNTIL: tuple[ValidUntil, ...] = ("jump", "stretch", "cooldown", "device")


@dataclass(frozen=True)
class QuantityKind:
    """One quantity.

    Attributes:
        unit: the one unit its values are kept in.
        valid_until: what ends a value's life: a charge jump, the cold stretch, the
            cooldown, or nothing as long as the device lives.
    """

    name: str
    unit: str
    meaning: str
    valid_until: ValidUntil


_ALL = (
    QuantityKind("threshold_voltage", "V", "zero-current intercept of the steepest tangent", "stretch"),
    QuantityKind("pinch_off_voltage", "V", "gate volts at a stated conductance or current level", "stretch"),
    QuantityKind("max_transconductance", "S", "largest |dI/dV|", "stretch"),
    QuantityKind("subthreshold_swing", "V", "gate volts per decade of current below threshold", "stretch"),
    QuantityKind("hysteresis_voltage", "V", "threshold going up minus threshold going down", "stretch"),
    QuantityKind("on_off_ratio", "1", "largest over smallest current of a pinch-off trace", "stretch"),
    QuantityKind("leakage_current", "A", "largest leak of a gate in the measured range", "cooldown"),
    QuantityKind("contact_resistance", "ohm", "series resistance of an ohmic contact", "cooldown"),
    QuantityKind("peak_position", "V", "gate volts of a Coulomb peak", "jump"),
    QuantityKind("peak_width", "V", "full width at half maximum of a Coulomb peak", "stretch"),
    QuantityKind("addition_voltage", "V", "gate volts from one charge to the next", "stretch"),
    QuantityKind("addition_energy", "eV", "lever arm times peak spacing", "stretch"),
    QuantityKind("lever_arm", "eV/V", "shift of a level per gate volt, positive for holes too", "cooldown"),
    QuantityKind("charging_energy", "eV", "e squared over total capacitance", "cooldown"),
    QuantityKind("gate_capacitance", "F", "gate to dot", "cooldown"),
    QuantityKind("source_capacitance", "F", "source to dot", "cooldown"),
    QuantityKind("drain_capacitance", "F", "drain to dot", "cooldown"),
    QuantityKind("total_capacitance", "F", "all that the dot couples to", "cooldown"),
    QuantityKind(
        "cross_capacitance_ratio", "1", "pull of another gate in units of the own gate's pull", "cooldown"
    ),
    QuantityKind("mutual_capacitance", "F", "dot to dot", "cooldown"),
    QuantityKind("interdot_charging_energy", "eV", "shift of one dot by a charge on the other", "cooldown"),
    QuantityKind("transition_voltage", "V", "gate volts of a charge transition", "jump"),
    QuantityKind("tunnel_coupling", "eV", "t in sqrt(detuning^2 + 4 t^2)", "stretch"),
    QuantityKind("tunnel_rate", "Hz", "tunnelling between a dot and its lead", "stretch"),
    QuantityKind("electron_temperature", "K", "temperature of the electrons in the leads", "cooldown"),
    QuantityKind(
        "base_electron_temperature", "K", "electron temperature with a cold refrigerator", "cooldown"
    ),
    QuantityKind("sensor_sensitivity", "S", "sensor current per gate volt at the operating point", "jump"),
    QuantityKind("sensor_step", "A", "change of the sensor signal at a charge transition", "jump"),
    QuantityKind("sensor_snr", "1", "step over noise for a stated integration time", "jump"),
    QuantityKind("charge_noise_amplitude", "eV/√Hz", "root of the energy spectrum at 1 Hz", "cooldown"),
    QuantityKind("noise_exponent", "1", "exponent b of a 1/f^b spectrum", "cooldown"),
    QuantityKind("valley_splitting", "eV", "splitting of the two lowest valleys", "stretch"),
    QuantityKind("g_factor", "1", "Zeeman energy over Bohr magneton and field", "device"),
    QuantityKind("exchange_energy", "eV", "exchange between two spins", "jump"),
    QuantityKind("readout_fidelity", "1", "probability that a spin is read as it is", "jump"),
    QuantityKind("resonator_frequency", "Hz", "resonance of a readout resonator", "cooldown"),
    QuantityKind(
        "loaded_quality_factor", "1", "quality factor of a readout resonator with its load", "cooldown"
    ),
)
QUANTITIES: MappingProxyType[str, QuantityKind] = MappingProxyType({kind.name: kind for kind in _ALL})
