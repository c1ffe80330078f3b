"""Which lever arm, energies and capacitances do the lines of diamonds mean?

Constant-interaction model with the inverse slopes s+ > 0 and s- < 0 of the two families
(gate volts per bias volt), spacing D of the transitions at zero bias and e > 0

    lever arm     alpha = 1/(s+ - s-)             (1/alpha = 1/m+ + 1/|m-|, m = 1/s)
    addition      E_add = alpha e D,   D = e/C_g + (level spacing)/(alpha e)
    capacitances  C_g = e/D,  C_sum = C_g/alpha,  E_C = e^2/C_sum    (no level spacing)
      bias at the source, drain at ground     C_s = -C_g s-,           C_d = C_g (s+ - 1)
      bias at the drain, source at ground     C_d = -C_g s-,           C_s = C_g (s+ - 1)
      +-half of the bias at either            C_s = C_g (-s- - 1/2),   C_d = C_g (s+ - 1/2)

R. Hanson et al., Rev. Mod. Phys. 79 (2007) 1217, section II; L. P. Kouwenhoven et al.,
Rep. Prog. Phys. 64 (2001) 701.  Uncertainties are propagated to first order with the full
covariance; what a given ``bias_scale`` contributes is kept apart.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy import stats

from registry.physics.catalogue import facts, number, word
from registry.physics.diamond_fit import LineFit
from registry.physics.result import Given, Quantity
from registry.samples import FloatArray

__all__ = ["ELEMENTARY_CHARGE", "Pooled", "diamond_quantities", "pool"]

METHOD = facts("coulomb-diamonds")

#: Coulomb, exact (26th CGPM 2018, Resolution 1).
ELEMENTARY_CHARGE = 1.602176634e-19
#: Probability below which slopes of several transitions are said to differ.
DIFFER = 0.005
#: Addition energies that differ by more than this share, and significantly, hold level
#: spacings.
UNEQUAL = 0.05
#: A spacing this many times the least one may hide a transition that was not seen.
GAP = 1.6


@dataclass(frozen=True, eq=False)
class Pooled:
    """Common slopes and single positions.

    Attributes:
        values: rising slope, falling slope, then N positions, shape (2 + N,).
        covariance: of these.
        own: rising minus falling slope of every transition, shape (N,).
        own_covariance: of these, shape (N, N).
        birge: factor the uncertainty of the slopes was widened by, 1 or more.
    """

    values: FloatArray
    covariance: FloatArray
    own: FloatArray
    own_covariance: FloatArray
    birge: float


def pool(fit: LineFit) -> Pooled:
    """Return the generalised mean of the slopes of all transitions, beside the positions."""
    count = fit.transition.size
    slopes = np.ravel([[3 * k + 1, 3 * k + 2] for k in range(count)])
    design = np.tile(np.eye(2), (count, 1))
    inverse = np.linalg.pinv(fit.covariance[np.ix_(slopes, slopes)], hermitian=True)
    weights = np.linalg.solve(design.T @ inverse @ design, design.T @ inverse)
    mean = weights @ fit.values[slopes]
    rest = fit.values[slopes] - design @ mean
    chi2, freedom = float(rest @ inverse @ rest), slopes.size - 2
    birge = 1.0
    if freedom > 0 and chi2 > stats.chi2.isf(DIFFER, freedom):
        birge = float(np.sqrt(chi2 / freedom))
    turn = np.zeros((2 + count, 3 * count))
    turn[:2, slopes] = weights
    turn[np.arange(2, 2 + count), 3 * np.arange(count)] = 1.0
    covariance = turn @ fit.covariance @ turn.T
    covariance[:2, :] *= birge
    covariance[:, :2] *= birge
    apart = np.zeros((count, 3 * count))
    apart[np.arange(count), 3 * np.arange(count) + 1] = 1.0
    apart[np.arange(count), 3 * np.arange(count) + 2] = -1.0
    return Pooled(turn @ fit.values, covariance, apart @ fit.values, apart @ fit.covariance @ apart.T, birge)


class _Writer:
    """Makes quantities of values and gradients over the pooled parameters."""

    def __init__(
        self,
        pooled: Pooled,
        freedom: float,
        given: Mapping[str, Given],
        conditions: Mapping[str, str | float],
    ) -> None:
        self.pooled, self.freedom, self.conditions = pooled, freedom, conditions
        self.scale = number(given, "bias_scale") or 1.0
        self.scale_u = given["bias_scale"].standard_uncertainty if "bias_scale" in given else 0.0

    def spread(self, gradient: FloatArray) -> float:
        """Return the standard uncertainty along ``gradient``."""
        return float(np.sqrt(max(float(gradient @ self.pooled.covariance @ gradient), 0.0)))

    def value(
        self, name: str, value: float, gradient: FloatArray, by_scale: float, subject: str | None = None
    ) -> Quantity:
        """Return a quantity of known gradient; ``by_scale``: d value/d ln(bias_scale)."""
        return self.own(name, value, self.spread(gradient), by_scale, subject)

    def own(self, name: str, value: float, u: float, by_scale: float, subject: str | None = None) -> Quantity:
        """Return a quantity of known own uncertainty; ``by_scale``: d value/d ln(bias_scale)."""
        shared = by_scale * self.scale_u / self.scale
        return Quantity(
            name,
            METHOD.quantities[name],
            float(value),
            float(np.hypot(u, shared)),
            subject=subject,
            degrees_of_freedom=self.freedom,
            shared={"bias_scale": float(shared)} if shared else {},
            conditions=self.conditions,
        )

    def none(self, name: str, why: str, subject: str | None = None) -> Quantity:
        """Return a quantity without a value."""
        return Quantity(
            name, METHOD.quantities[name], None, subject=subject, why=why, conditions=self.conditions
        )


def diamond_quantities(
    fit: LineFit,
    pooled: Pooled,
    given: Mapping[str, Given],
    conditions: Mapping[str, str | float],
    safe_spacing: bool,
    warnings: list[str],
) -> tuple[Quantity, ...]:
    """Return all quantities of the method.

    Args:
        fit: lines of all transitions.
        pooled: from ``pool``.
        given: to the method.
        conditions: of every quantity.
        safe_spacing: whether the gate was the fast axis, so that drift moves all
            transitions together.
        warnings: grows by what is to be said of the quantities.
    """
    write = _Writer(pooled, fit.freedom, given, conditions)
    rising, falling = pooled.values[:2] / write.scale
    apart = rising - falling
    size = pooled.values.size
    to_arm = np.zeros(size)
    to_arm[:2] = np.array([-1.0, 1.0]) / apart**2 / write.scale
    arm = 1.0 / apart
    found = [write.value("lever_arm", arm, to_arm, arm)]
    if pooled.birge > 1.0:
        warnings.append(
            f"slopes differ from transition to transition (Birge ratio {pooled.birge:.2g}): "
            "the uncertainty of the pooled ones was widened"
        )
    found += _positions(fit, pooled, write)
    pairs = [int(k) for k in np.flatnonzero(fit.comparable)]
    why = "no whole diamond: two neighbouring transitions with the same edges are needed"
    if fit.jump is not None and not safe_spacing:
        why = "a charge jump lies in the map and the gate is its slow axis: it cannot be told from a spacing"
        pairs = []
    if not pairs:
        missing = [name for name in METHOD.quantities if name not in ("lever_arm", "peak_position")]
        return (*found, *(write.none(name, why) for name in missing))
    spacing = np.diff(pooled.values[2:])[pairs]
    to_spacing = np.zeros((len(pairs), size))
    for row, k in enumerate(pairs):
        to_spacing[row, 2 + k : 4 + k] = -1.0, 1.0
    found += _single(pairs, spacing, to_spacing, pooled, arm, to_arm, write)
    whole = len(pairs) == fit.transition.size - 1
    mean, to_mean = float(np.mean(spacing)), np.mean(to_spacing, axis=0)
    if whole:
        found.append(write.value("addition_voltage", mean, to_mean, 0.0))
    else:
        found.append(write.none("addition_voltage", "a transition in between was not usable"))
    found.append(write.value("addition_energy", arm * mean, arm * to_mean + mean * to_arm, arm * mean))
    lone, to_lone = _without_levels(spacing, to_spacing, given, write, warnings)
    energy = write.value("charging_energy", arm * lone, arm * to_lone + lone * to_arm, arm * lone)
    return (*found, energy, *_capacitances(lone, to_lone, pooled, given, write))


def _positions(fit: LineFit, pooled: Pooled, write: _Writer) -> list[Quantity]:
    """Return peak_position of every transition, in order of volts."""
    quantities = []
    for k in range(fit.transition.size):
        name = f"peak {k + 1}"
        if fit.jump is not None:
            why = "a charge jump lies in the map: the position before and after it differ"
            quantities.append(write.none("peak_position", why, name))
            continue
        gradient = np.zeros(pooled.values.size)
        gradient[2 + k] = 1.0
        quantities.append(write.value("peak_position", float(pooled.values[2 + k]), gradient, 0.0, name))
    return quantities


def _single(
    pairs: list[int],
    spacing: FloatArray,
    to_spacing: FloatArray,
    pooled: Pooled,
    arm: float,
    to_arm: FloatArray,
    write: _Writer,
) -> list[Quantity]:
    """Return what each diamond has of its own."""
    quantities = []
    for row, k in enumerate(pairs):
        name = f"diamond {row + 1}"
        apart = 0.5 * float(pooled.own[k] + pooled.own[k + 1]) / write.scale
        u = 0.5 * float(np.sqrt(np.sum(pooled.own_covariance[k : k + 2, k : k + 2]))) / write.scale
        d = float(spacing[row])
        quantities += [
            write.own("lever_arm", 1.0 / apart, u / apart**2, 1.0 / apart, name),
            write.value("addition_voltage", d, to_spacing[row], 0.0, name),
            write.value("addition_energy", arm * d, arm * to_spacing[row] + d * to_arm, arm * d, name),
        ]
    return quantities


def _without_levels(
    spacing: FloatArray,
    to_spacing: FloatArray,
    given: Mapping[str, Given],
    write: _Writer,
    warnings: list[str],
) -> tuple[float, FloatArray]:
    """Return the spacing that is e/C_g as nearly as the map can tell, and its gradient."""
    least = int(np.argmin(spacing))
    if spacing.size > 1:
        difference = to_spacing - to_spacing[least]
        u = np.sqrt(
            np.maximum(np.einsum("ki,ij,kj->k", difference, write.pooled.covariance, difference), 0.0)
        )
        excess = spacing - spacing[least]
        unequal = bool(np.any((excess > UNEQUAL * spacing[least]) & (excess > 4.0 * u)))
        if float(np.max(spacing)) > GAP * float(spacing[least]):
            warnings.append("spacings differ widely: a transition between may not have been seen")
    else:
        unequal = False
        warnings.append(
            "one diamond alone: charging energy and capacitances hold if its addition energy holds no "
            "level spacing"
        )
    if word(given, "electrons", "many") == "few" or unequal:
        warnings.append(
            "level spacings are in the addition energies: charging energy and capacitances are from the "
            "smallest diamond, and hold if that one holds none"
        )
        return float(spacing[least]), to_spacing[least]
    return float(np.mean(spacing)), np.mean(to_spacing, axis=0)


def _capacitances(
    spacing: float, to_spacing: FloatArray, pooled: Pooled, given: Mapping[str, Given], write: _Writer
) -> list[Quantity]:
    """Return gate, source, drain and total capacitance."""
    rising, falling = pooled.values[:2] / write.scale
    unit = np.zeros((2, pooled.values.size))
    unit[0, 0] = unit[1, 1] = 1.0 / write.scale
    gate = ELEMENTARY_CHARGE / spacing
    to_gate = -gate / spacing * to_spacing
    where = word(given, "bias_at", "source")
    less = 0.5 if where == "both" else 1.0
    with_falling = (-falling - (0.5 if where == "both" else 0.0), -unit[1], falling)
    with_rising = (rising - less, unit[0], -rising)
    source, drain = (with_rising, with_falling) if where == "drain" else (with_falling, with_rising)
    total = rising - falling
    quantities = [
        write.value("gate_capacitance", gate, to_gate, 0.0),
        write.value(
            "total_capacitance", gate * total, total * to_gate + gate * (unit[0] - unit[1]), -gate * total
        ),
    ]
    for name, (ratio, to_ratio, by_scale) in (("source_capacitance", source), ("drain_capacitance", drain)):
        gradient = ratio * to_gate + gate * to_ratio
        if ratio * gate < -2.0 * write.spread(gradient):
            why = (
                f"the slopes contradict a bias at the {where}: this capacitance would be negative "
                "(give bias_at, or the sign of the bias is reversed)"
            )
            quantities.append(write.none(name, why))
        else:
            quantities.append(write.value(name, gate * ratio, gradient, gate * by_scale))
    return quantities
