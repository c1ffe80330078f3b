"""Which quantities does one turn-on sweep give, and which not, and why?

Words the findings of ``turn_on`` and ``subthreshold`` as quantities: levels, units, shared
uncertainty of the bias, one-sided bounds, reasons.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from registry.physics.catalogue import facts, number
from registry.physics.result import Given, Quantity
from registry.physics.turn_on import Estimate, TurnOn

__all__ = ["LEVEL_SHARE", "SweepFindings", "sweep_quantities", "with_value", "without_value"]

METHOD = facts("pinch-off")

#: Default level of pinch_off_voltage, as a share of the rise (our choice, no source).
LEVEL_SHARE = 0.1
#: A level must lie this many rms of the noise above the off-level.
LEVEL_NOISE = 2.0
#: max_transconductance is given only with a smaller relative standard uncertainty.
WIDEST_SLOPE = 0.5
#: Standard normal deviate of one-sided 95 % bounds.
ONE_SIDED = 1.645
#: The off-current is told from zero at this many standard uncertainties.
OFF_SEEN = 2.0


@dataclass(frozen=True, eq=False)
class SweepFindings:
    """What one direction says.

    Attributes:
        found: its turn-on.
        swing: V per decade, or why there is none.
        signal_unit: ``A`` or ``S``.
        conditions: of every quantity.
    """

    found: TurnOn
    swing: Estimate | str
    signal_unit: str
    conditions: Mapping[str, str | float]


def sweep_quantities(sweep: SweepFindings, given: Mapping[str, Given]) -> list[Quantity]:
    """Return the quantities of one direction, in the order of the catalogue."""
    found, conditions = sweep.found, sweep.conditions
    swing = sweep.swing
    return [
        with_value("threshold_voltage", found.threshold, conditions),
        _pinch_off(sweep, given),
        _transconductance(sweep, given),
        without_value("subthreshold_swing", swing, conditions)
        if isinstance(swing, str)
        else with_value("subthreshold_swing", swing, conditions),
        _on_off(found, conditions),
    ]


def with_value(name: str, estimate: Estimate, conditions: Mapping[str, str | float]) -> Quantity:
    """Return a quantity that has a value."""
    return Quantity(
        name, METHOD.quantities[name], estimate.value, estimate.uncertainty, conditions=dict(conditions)
    )


def without_value(name: str, why: str, conditions: Mapping[str, str | float]) -> Quantity:
    """Return a quantity that has no value."""
    return Quantity(name, METHOD.quantities[name], None, why=why, conditions=dict(conditions))


def _pinch_off(sweep: SweepFindings, given: Mapping[str, Given]) -> Quantity:
    """Return the voltage where the curve passes the level, above the off-level."""
    found, name = sweep.found, "pinch_off_voltage"
    level, bias = number(given, "level"), number(given, "bias")
    if level is None:
        conditions = {**sweep.conditions, "level_share": LEVEL_SHARE}
        height = LEVEL_SHARE * found.rise
    else:
        conditions = {**sweep.conditions, "level": level}
        if sweep.signal_unit == "A" and bias is None:
            return without_value(name, "a level in S needs the bias of a current: give bias", conditions)
        height = level if sweep.signal_unit == "S" else level * abs(float(bias or 0.0))
    if height < LEVEL_NOISE * found.rise / found.snr:
        return without_value(
            name, f"the level, {height:.3g} {sweep.signal_unit}, lies in the noise", conditions
        )
    crossing = found.crossing(height)
    if crossing is None:
        return without_value(
            name,
            f"the curve does not surely reach the level, {height:.3g} {sweep.signal_unit}",
            conditions,
        )
    shared = {}
    if level is not None and sweep.signal_unit == "A" and given["bias"].standard_uncertainty > 0.0:
        # dV/d(bias) = (level / slope there): a larger bias moves the crossing further on.
        further = found.crossing(1.02 * height) or crossing
        per_share = (further.value - crossing.value) / 0.02
        shared = {"bias": per_share * given["bias"].standard_uncertainty / float(given["bias"].value)}
    uncertainty = float(np.hypot(crossing.uncertainty, sum(shared.values())))
    return Quantity(name, "V", crossing.value, uncertainty, shared=shared, conditions=conditions)


def _transconductance(sweep: SweepFindings, given: Mapping[str, Given]) -> Quantity:
    """Return the largest |dI/dV|: of a conductance only where the bias is given."""
    name, slope, bias = "max_transconductance", sweep.found.slope, given.get("bias")
    if slope.uncertainty > WIDEST_SLOPE * slope.value:
        return without_value(
            name, f"the slope is uncertain by {slope.uncertainty / slope.value:.0%}", sweep.conditions
        )
    if sweep.signal_unit == "A":
        return with_value(name, slope, sweep.conditions)
    if bias is None:
        return without_value(
            name,
            "the signal is a conductance, its slope is in S/V: give bias for a current",
            sweep.conditions,
        )
    size = abs(float(bias.value))
    sign = 1.0 if float(bias.value) > 0.0 else -1.0
    shared = {"bias": sign * slope.value * bias.standard_uncertainty} if bias.standard_uncertainty else {}
    uncertainty = float(np.hypot(size * slope.uncertainty, sum(shared.values())))
    return Quantity(name, "S", size * slope.value, uncertainty, shared=shared, conditions=sweep.conditions)


def _on_off(found: TurnOn, conditions: Mapping[str, str | float]) -> Quantity:
    """Return largest over pinched-off |signal|; a lower bound where the latter is not told from 0."""
    level = found.off.value + found.sign * found.on.value
    on = Estimate(abs(level), float(np.hypot(found.on.uncertainty, found.off.uncertainty)))
    off = Estimate(abs(found.off.value), found.off.uncertainty)
    if off.value > OFF_SEEN * off.uncertainty:
        ratio = on.value / off.value
        relative = np.hypot(on.uncertainty / on.value, off.uncertainty / off.value)
        return with_value("on_off_ratio", Estimate(ratio, float(ratio * relative)), conditions)
    least = (on.value - ONE_SIDED * on.uncertainty) / (off.value + ONE_SIDED * off.uncertainty)
    return Quantity("on_off_ratio", "1", float(least), bound="lower", conditions=dict(conditions))
