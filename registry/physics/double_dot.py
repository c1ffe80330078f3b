"""What energies follow from spacings, jumps and lever arms of a double dot?

With lever arms a_i (eV/V, own gate, the other held; W. G. van der Wiel et al., Rev. Mod.
Phys. 75 (2003) 1, section II), spacing D_i and jump J_i in volts along gate i,

    E_i = a_i D_i,      E_m = a_i J_i,      C_m = e E_m / (E_1 E_2 - E_m^2)

(energies in eV; the last from inverting the capacitance matrix, level spacing neglected).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from registry.physics.honeycomb import DotLines, Spacing
from registry.physics.result import Given, Quantity
from registry.samples import FloatArray

__all__ = ["ELECTRON", "Dot", "energy_quantities"]

#: Elementary charge in C (exact, SI).
ELECTRON = 1.602176634e-19
#: A jump below this many standard uncertainties gives an upper bound only.
JUMP_SIGNIFICANCE = 3.0
#: Quantile of a one-sided 95 % bound.
ONE_SIDED = 1.645


@dataclass(frozen=True, eq=False)
class Dot:
    """What the map told of one dot.

    Attributes:
        axis: name of its gate.
        lines: its segments.
        spacing, jump: None where not seen.
    """

    axis: str
    lines: DotLines
    spacing: Spacing | None
    jump: Spacing | None

    def own(self) -> tuple[FloatArray, FloatArray]:
        """Return (spacing, jump) in V and their covariance; NaN where not seen."""
        size = self.lines.values.size
        contrasts = np.array(
            [np.full(size, np.nan) if one is None else one.contrast for one in (self.spacing, self.jump)]
        )
        values = np.array([np.nan if one is None else one.value for one in (self.spacing, self.jump)])
        return values, contrasts @ self.lines.covariance @ contrasts.T


def energy_quantities(
    dots: tuple[Dot, Dot], given: Mapping[str, Given], conditions: Mapping[str, str | float]
) -> tuple[Quantity, ...]:
    """Return addition energies, interdot charging energy, mutual capacitance."""
    names = [f"lever_arm_{dot.axis}" for dot in dots]
    arms = np.array([float(given[name].value) if name in given else np.nan for name in names])
    arm_u = np.array([given[name].standard_uncertainty if name in given else 0.0 for name in names])
    own = [dot.own() for dot in dots]
    values = np.concatenate([one[0] for one in own])
    covariance = np.zeros((4, 4))
    covariance[:2, :2], covariance[2:, 2:] = own[0][1], own[1][1]
    share = _share(arms, values, covariance)

    def interdot(v: FloatArray, a: FloatArray) -> float:
        return float(sum(s * a[i] * v[2 * i + 1] for i, s in enumerate(share) if s > 0.0))

    def mutual(v: FloatArray, a: FloatArray) -> float:
        coupling = interdot(v, a)
        return float(ELECTRON * coupling / (a[0] * v[0] * a[1] * v[2] - coupling**2))

    freedom = min(dot.lines.freedom for dot in dots)

    def worded(name: str, unit: str, subject: str | None, formula: _Formula, why: str) -> Quantity:
        return _quantity(
            name, unit, subject, formula, (values, covariance), (names, arms, arm_u), why, freedom, conditions
        )

    found = []
    for i, dot in enumerate(dots):
        why = f"no {names[i]} was given" if names[i] not in given else "no two successive lines were found"
        found.append(
            worded("addition_energy", "eV", dot.axis, lambda v, a, i=i: float(a[i] * v[2 * i]), why)  # type: ignore[misc]
        )
    no_jump = "no jump of a line at a crossing was seen"
    no_arm = "no lever arm of an axis was given"
    why = no_arm if not np.any(np.isfinite(arms)) else no_jump
    found.append(worded("interdot_charging_energy", "eV", None, interdot if share.any() else _nothing, why))
    why = "both lever arms, both spacings and a jump are needed"
    found.append(worded("mutual_capacitance", "F", None, mutual if share.any() else _nothing, why))
    return tuple(found)


_Formula = Callable[[FloatArray, FloatArray], float]


def _nothing(values: FloatArray, arms: FloatArray) -> float:
    """Return that there is no value."""
    return float("nan")


def _share(arms: FloatArray, values: FloatArray, covariance: FloatArray) -> FloatArray:
    """Return the weights of the two jumps in the interdot energy, by their own uncertainty."""
    variance = np.array([arms[i] ** 2 * covariance[2 * i + 1, 2 * i + 1] for i in range(2)])
    usable = np.isfinite(variance) & np.isfinite(values[1::2]) & (variance > 0.0)
    weight = np.where(usable, 1.0 / np.where(usable, variance, 1.0), 0.0)
    return weight / weight.sum() if usable.any() else weight


def _gradient(formula: Callable[[FloatArray], float], at: FloatArray) -> FloatArray:
    """Return central differences of a smooth formula; 0 for what it does not use."""
    gradient = np.zeros(at.size)
    for k in np.flatnonzero(np.isfinite(at)):
        step = np.zeros(at.size)
        step[k] = 1e-5 * max(abs(at[k]), 1e-9)
        gradient[k] = (formula(at + step) - formula(at - step)) / (2.0 * step[k])
    return gradient


def _quantity(
    name: str,
    unit: str,
    subject: str | None,
    formula: _Formula,
    measured: tuple[FloatArray, FloatArray],
    arms: tuple[list[str], FloatArray, FloatArray],
    why: str,
    freedom: float,
    conditions: Mapping[str, str | float],
) -> Quantity:
    """Propagate one formula; an insignificant coupling becomes an upper bound."""
    values, covariance = measured
    names, arm, arm_u = arms
    value = formula(values, arm)
    if not np.isfinite(value):
        return Quantity(name, unit, None, subject=subject, why=why, conditions=conditions)
    by_value = _gradient(lambda v: formula(v, arm), values)
    used = by_value != 0.0
    own = float(by_value[used] @ covariance[np.ix_(used, used)] @ by_value[used])
    parts = _gradient(lambda a: formula(values, a), arm) * arm_u
    u = float(np.sqrt(own + parts @ parts))
    shared = {one: float(part) for one, part in zip(names, parts, strict=True) if part}
    if subject is None and value < JUMP_SIGNIFICANCE * np.sqrt(own):
        bound = max(value, 0.0) + ONE_SIDED * u
        return Quantity(
            name, unit, float(bound), bound="upper", degrees_of_freedom=freedom, conditions=conditions
        )
    return Quantity(
        name,
        unit,
        float(value),
        u,
        subject=subject,
        degrees_of_freedom=freedom,
        shared=shared,
        conditions=conditions,
    )
