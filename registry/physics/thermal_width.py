"""Which temperature or lever arm does a thermal width in gate volts mean?

    lever_arm * width = (k_B/e) * electron_temperature        (eV = V eV/V = eV/K K)

One of the two must be given to learn the other.  What the given one contributes to the
uncertainty is kept apart (``shared``), because many results hang on the same one.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from registry.physics.lineshapes import BOLTZMANN_EV
from registry.physics.result import Given, Quantity

__all__ = ["Estimate", "lever_arm_from", "temperature_from", "thermal_quantities"]


@dataclass(frozen=True)
class Estimate:
    """A value with its standard uncertainty and degrees of freedom (None: infinite)."""

    value: float
    u: float
    degrees_of_freedom: float | None = None


def temperature_from(width: Estimate, given: Given) -> tuple[float, float, float]:
    """Return electron temperature (K), its uncertainty, and the lever arm's signed part of it.

    Args:
        width: k_B T in gate volts.
        given: the lever arm in eV/V.
    """
    lever_arm = float(given.value)
    own = lever_arm * width.u / BOLTZMANN_EV
    shared = width.value * given.standard_uncertainty / BOLTZMANN_EV
    return lever_arm * width.value / BOLTZMANN_EV, float(np.hypot(own, shared)), shared


def lever_arm_from(width: Estimate, given: Given) -> tuple[float, float, float]:
    """Return lever arm (eV/V), its uncertainty, and the temperature's signed part of it.

    Args:
        width: k_B T in gate volts.
        given: the electron temperature in K.
    """
    value = BOLTZMANN_EV * float(given.value) / width.value
    own = value * width.u / width.value
    shared = BOLTZMANN_EV * given.standard_uncertainty / width.value
    return value, float(np.hypot(own, shared)), shared


def thermal_quantities(
    width: Estimate | None,
    why: str | None,
    given: Mapping[str, Given],
    conditions: Mapping[str, str | float],
) -> tuple[Quantity, ...]:
    """Return electron_temperature or lever_arm, whichever can be learnt, and say why not.

    Args:
        width: k_B T in gate volts; None if it is not to be trusted, then ``why`` says why.
        why: the reason for no width.
        given: with ``lever_arm``, ``electron_temperature``, both (then the temperature is
            measured against the lever arm) or neither.
        conditions: of both quantities.
    """
    if "lever_arm" in given:
        learnt, unit, source, convert = "electron_temperature", "K", "lever_arm", temperature_from
    elif "electron_temperature" in given:
        learnt, unit, source, convert = "lever_arm", "eV/V", "electron_temperature", lever_arm_from
    else:
        return (
            Quantity("electron_temperature", "K", None, why="no lever_arm was given", conditions=conditions),
            Quantity(
                "lever_arm", "eV/V", None, why="no electron_temperature was given", conditions=conditions
            ),
        )
    if width is None:
        return (Quantity(learnt, unit, None, why=why, conditions=conditions),)
    value, u, shared = convert(width, given[source])
    return (
        Quantity(
            learnt,
            unit,
            value,
            u,
            degrees_of_freedom=width.degrees_of_freedom,
            shared={source: shared} if shared else {},
            conditions=conditions,
        ),
    )
