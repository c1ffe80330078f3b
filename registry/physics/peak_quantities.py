"""Which quantities follow from fitted Coulomb peaks, and what hangs on what?

peak_position and peak_width of each peak (subjects ``peak 1`` ...), the weighted mean of
the widths, addition_voltage of neighbours (``peak 1-2`` ...) and over all (last minus
first over n - 1), addition_energy = lever arm x addition_voltage, electron_temperature or
lever_arm.  Parts that come from a given number are kept apart in ``shared``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from registry.physics.peak_windows import Model
from registry.physics.result import Given, Quantity
from registry.physics.thermal_width import Estimate, lever_arm_from, thermal_quantities
from registry.samples import FloatArray

__all__ = ["Peaks", "peak_quantities"]

#: Largest relative uncertainty of a thermal width.
WIDTH_UNCERTAINTY = 0.3
#: Widths that differ more than this improbably get a warning and a scaled uncertainty.
WIDTHS_DIFFER = 0.01
#: A gap this much larger than the median spacing may hide a peak.
GAP = 1.6


@dataclass(frozen=True, eq=False)
class Peaks:
    """Judged peaks: position, full width at half maximum, k_B T, all in gate volts.

    Attributes:
        position, width, thermal: shape (P,); ..._u: their standard uncertainties.
        broken: True after a peak behind which a dropped one was, shape (P-1,).
        freedom: degrees of freedom of the noise.
    """

    position: FloatArray
    position_u: FloatArray
    width: FloatArray
    width_u: FloatArray
    thermal: FloatArray
    thermal_u: FloatArray
    broken: NDArray[np.bool_]
    freedom: float


def _weighted_mean(value: FloatArray, u: FloatArray, freedom: float) -> tuple[Estimate, bool]:
    """Return the weighted mean, and whether the values differ more than their uncertainties.

    Then the uncertainty is enlarged by the Birge ratio.
    """
    weight = u**-2
    mean = float(np.sum(weight * value) / np.sum(weight))
    mean_u = float(np.sum(weight) ** -0.5)
    excess = float(np.sum(weight * (value - mean) ** 2))
    count = value.size - 1
    differ = count > 0 and float(chdtrc(count, excess)) < WIDTHS_DIFFER
    if differ:
        return Estimate(mean, mean_u * float(np.sqrt(excess / count)), float(count)), True
    return Estimate(mean, mean_u, freedom), False


def peak_quantities(
    peaks: Peaks,
    model: Model,
    undecided: str | None,
    given: Mapping[str, Given],
    conditions: Mapping[str, str | float],
    warnings: list[str],
) -> tuple[Quantity, ...]:
    """Word all quantities.

    Args:
        peaks: in order of volts.
        model: the line shape they were fitted with.
        undecided: why the thermal width is not told, or None.
        given: what the user gave.
        conditions: of every quantity.
        warnings: plain sentences are added to it.
    """
    quantities = []
    for k in range(peaks.position.size):
        for name, value, u in (
            ("peak_position", peaks.position[k], peaks.position_u[k]),
            ("peak_width", peaks.width[k], peaks.width_u[k]),
        ):
            quantities.append(
                Quantity(
                    name,
                    "V",
                    float(value),
                    float(u),
                    subject=f"peak {k + 1}",
                    degrees_of_freedom=peaks.freedom,
                    conditions=conditions,
                )
            )
    width, differ = _weighted_mean(peaks.width, peaks.width_u, peaks.freedom)
    thermal, _ = _weighted_mean(peaks.thermal, peaks.thermal_u, peaks.freedom)
    if differ:
        warnings.append("the widths differ more than their uncertainties: that of the mean was enlarged")
    quantities.append(
        Quantity(
            "peak_width",
            "V",
            width.value,
            width.u,
            degrees_of_freedom=width.degrees_of_freedom,
            conditions=conditions,
        )
    )
    why = undecided
    if model == "lifetime" and thermal.u > WIDTH_UNCERTAINTY * thermal.value:
        why = "lifetime broadening hides the thermal width"
    learnt = thermal_quantities(thermal if why is None else None, why, given, conditions)
    if "lever_arm" in given and "electron_temperature" in given:
        warnings.append("lever_arm and electron_temperature are both given: the temperature was not used")
    if undecided and not given.keys() & {"lever_arm", "electron_temperature"}:
        warnings.append(undecided)
    spacings = _spacings(peaks, conditions, warnings)
    arm, source, relative = _lever_arm(thermal if why is None else None, given)
    return (*quantities, *spacings, *_energies(spacings, arm, source, relative, why), *learnt)


def _spacings(
    peaks: Peaks, conditions: Mapping[str, str | float], warnings: list[str]
) -> tuple[Quantity, ...]:
    """Word addition_voltage of each pair of neighbours and over all."""
    count = peaks.position.size
    if count < 2:
        why = "one peak has no spacing"
        return (Quantity("addition_voltage", "V", None, why=why, conditions=conditions),)
    spacing = np.diff(peaks.position)
    pair_u = np.hypot(peaks.position_u[1:], peaks.position_u[:-1])
    gap = "a peak between them was left out"
    pairs = [
        Quantity(
            "addition_voltage",
            "V",
            None if peaks.broken[k] else float(spacing[k]),
            None if peaks.broken[k] else float(pair_u[k]),
            subject=f"peak {k + 1}-{k + 2}",
            why=gap if peaks.broken[k] else None,
            degrees_of_freedom=None if peaks.broken[k] else peaks.freedom,
            conditions=conditions,
        )
        for k in range(count - 1)
    ]
    for k in np.flatnonzero(spacing > GAP * np.median(spacing)):
        warnings.append(f"the gap between peak {k + 1} and peak {k + 2} is wide: a peak may be missing there")
    broken = bool(np.any(peaks.broken))
    mean = float((peaks.position[-1] - peaks.position[0]) / (count - 1))
    mean_u = float(np.hypot(peaks.position_u[-1], peaks.position_u[0]) / (count - 1))
    summary = Quantity(
        "addition_voltage",
        "V",
        None if broken else mean,
        None if broken else mean_u,
        why="a peak between the first and the last was left out" if broken else None,
        degrees_of_freedom=None if broken else peaks.freedom,
        conditions=conditions,
    )
    return (*pairs, summary)


def _lever_arm(width: Estimate | None, given: Mapping[str, Given]) -> tuple[Estimate | None, str, float]:
    """Return the lever arm for energies, the given it hangs on, and that one's relative part."""
    if "lever_arm" in given:
        one = given["lever_arm"]
        value = float(one.value)
        return Estimate(value, one.standard_uncertainty), "lever_arm", one.standard_uncertainty / value
    if "electron_temperature" in given and width is not None:
        value, u, shared = lever_arm_from(width, given["electron_temperature"])
        return Estimate(value, u), "electron_temperature", shared / value
    return None, "", 0.0


def _energies(
    spacings: tuple[Quantity, ...], arm: Estimate | None, source: str, relative: float, why: str | None
) -> tuple[Quantity, ...]:
    """Word addition_energy = lever arm x spacing for every spacing."""
    energies = []
    for one in spacings:
        if arm is None or one.value is None or one.standard_uncertainty is None:
            reason = one.why or why or "neither lever_arm nor electron_temperature was given"
            if one.subject is None:
                energies.append(
                    Quantity("addition_energy", "eV", None, why=reason, conditions=one.conditions)
                )
            continue
        energy = arm.value * one.value
        u = float(np.hypot(arm.value * one.standard_uncertainty, arm.u * one.value))
        energies.append(
            Quantity(
                "addition_energy",
                "eV",
                energy,
                u,
                subject=one.subject,
                degrees_of_freedom=one.degrees_of_freedom,
                shared={source: energy * relative} if relative else {},
                conditions=one.conditions,
            )
        )
    return tuple(energies)
