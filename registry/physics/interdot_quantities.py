"""Which tunnel coupling, temperature or lever arm does a fitted interdot transition mean?

    t = lever_arm * gap / 2,     k_B T = lever_arm * width      (gap, width in gate volts)

with the differential lever arm along the sweep.  With lever arm and temperature given the
thermal width is known and only the gap is learnt; with one of them both are learnt from
the shape and the other one follows.  Values are means over the row of gaps
(``interdot_fit``); where zero gap is not excluded there is a 95 % bound instead.

The part of the uncertainty that each given makes is kept apart with its sign: through
the formula, and through the width that the fit was told.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from registry.physics.interdot_fit import EXACT_WIDTH, GapRow, Node, Prior
from registry.physics.lineshapes import BOLTZMANN_EV
from registry.physics.result import Given, Quantity
from registry.samples import FloatArray

__all__ = ["Findings", "Mean", "mean_of", "quantities", "shared_parts", "width_prior"]

#: Log-likelihood by which zero gap must be excluded for a value of the tunnel coupling.
GAP_SEEN = 4.0
#: The same where the thermal width is not known but fitted beside it.
GAP_SEEN_ALONE = 12.0
#: Log-likelihood below the best at which a one-sided bound stands.
BOUND_DROP = 2.2
#: The same where the thermal width is not known: 2.2 was found to hold in 89 % only.
BOUND_DROP_ALONE = 4.0
#: Normal quantile of a one-sided 95 % bound.
ONE_SIDED = 1.645
#: Largest relative uncertainty of a value.
WIDEST = 0.3

Conditions = Mapping[str, str | float]


@dataclass(frozen=True, eq=False)
class Findings:
    """A fitted transition and the scales that turn it into SI.

    Attributes:
        row: fits over the gaps; ``ungapped``: the fit without a gap.
        prior: of the log thermal width, None where it was free.
        half_span: volts of one unit of the reduced axis.
        freedom: degrees of freedom of the fit.
        contradiction: why the given width cannot be that of the trace, or None.
    """

    row: GapRow
    ungapped: Node
    prior: Prior | None
    half_span: float
    freedom: float
    contradiction: str | None = None

    @property
    def width_u(self) -> float:
        """Return the uncertainty of the log thermal width."""
        widths = np.array([node.parameters[5] for node in self.row.nodes])
        gradient = np.tile(np.eye(6)[5], (widths.size, 1))
        return mean_of(self.row, widths, gradient, self.prior).u

    @property
    def needed(self) -> float:
        """Return the evidence that a value of the tunnel coupling needs."""
        return GAP_SEEN if self.prior is not None else GAP_SEEN_ALONE

    @property
    def evidence(self) -> float:
        """Return the log-likelihood by which zero gap is excluded."""
        return self.row.best.log_likelihood - self.ungapped.log_likelihood


@dataclass(frozen=True)
class Mean:
    """A posterior mean, its standard deviation, and its slope by the prior's mean log width."""

    value: float
    u: float
    by_width: float


def width_prior(given: Mapping[str, Given], half_span: float) -> Prior | None:
    """Return what lever arm and temperature tell of the reduced thermal width, None if not both are given."""
    if not {"lever_arm", "electron_temperature"} <= given.keys():
        return None
    lever_arm, temperature = given["lever_arm"], given["electron_temperature"]
    width = BOLTZMANN_EV * float(temperature.value) / float(lever_arm.value) / half_span
    sd = float(np.hypot(_relative(lever_arm), _relative(temperature)))
    return Prior(float(np.log(width)), max(sd, EXACT_WIDTH))


def mean_of(row: GapRow, values: FloatArray, gradient: FloatArray, prior: Prior | None) -> Mean:
    """Average over the row.

    Args:
        row: the fits.
        values: the quantity at each gap, shape (K,).
        gradient: its derivatives by the six parameters there, shape (K, 6).
        prior: of the log width.
    """
    weight = row.weights()
    covariance = np.array([node.covariance for node in row.nodes])
    log_width = np.array([node.parameters[5] for node in row.nodes])
    with_all = np.einsum("kij,kj->ki", covariance, gradient)
    mean, middle = float(weight @ values), float(weight @ log_width)
    variance = weight @ ((values - mean) ** 2 + np.einsum("ki,ki->k", gradient, with_all))
    along = weight @ ((values - mean) * (log_width - middle) + with_all[:, 5])
    by_width = 0.0 if prior is None else float(along) / prior.sd**2
    return Mean(mean, float(np.sqrt(variance)), by_width)


def shared_parts(
    mean: Mean, given: Mapping[str, Given], explicit: Mapping[str, float], prior: Prior | None
) -> tuple[float, dict[str, float]]:
    """Return the whole uncertainty, and the signed part of each given.

    ``explicit``: derivative of the value by the logarithm of each given through its formula.
    The fit's own uncertainty holds already what the prior of the width adds.
    """
    variance, parts = mean.u**2, {}
    for name, sign in (("lever_arm", -1.0), ("electron_temperature", 1.0)):
        if name not in given or not given[name].standard_uncertainty:
            continue
        relative = _relative(given[name])
        through_width = sign * mean.by_width if prior is not None else 0.0
        formula = explicit.get(name, 0.0)
        variance += relative**2 * (formula**2 + 2.0 * formula * through_width)
        part = relative * (formula + through_width)
        if part:
            parts[name] = part
    least = sum(part**2 for part in parts.values())
    return float(np.sqrt(max(variance, least))), parts


def quantities(
    found: Findings, given: Mapping[str, Given], conditions: Conditions
) -> tuple[tuple[Quantity, ...], tuple[str, ...]]:
    """Return tunnel_coupling, what else can be learnt of temperature and lever arm, and warnings."""
    known = [name for name in ("lever_arm", "electron_temperature") if name in given]
    if not known:
        why = "neither lever_arm nor electron_temperature was given"
        return tuple(_none(name, why, conditions) for name in UNITS), ()
    coupling, warnings = _coupling(found, given, conditions)
    if len(known) == 2:
        return (coupling,), warnings
    learnt = "electron_temperature" if "lever_arm" in given else "lever_arm"
    return (coupling, _thermal(found, learnt, given, conditions)), warnings


#: The quantities of this module and their units.
UNITS = {"tunnel_coupling": "eV", "electron_temperature": "K", "lever_arm": "eV/V"}


def _coupling(
    found: Findings, given: Mapping[str, Given], conditions: Conditions
) -> tuple[Quantity, tuple[str, ...]]:
    """Return the tunnel coupling, or its upper bound with a warning."""
    name = "tunnel_coupling"
    if found.contradiction is not None:
        return _none(name, found.contradiction, conditions), (found.contradiction,)
    row = found.row
    gaps = np.array([node.gap for node in row.nodes])
    log_width = np.array([node.parameters[5] for node in row.nodes])
    gradient = np.zeros((gaps.size, 6))
    if "lever_arm" in given:
        values = 0.5 * float(given["lever_arm"].value) * found.half_span * gaps
        explicit = {"lever_arm": 1.0}
    else:  # t = k_B T gap / (2 width)
        values = 0.5 * BOLTZMANN_EV * float(given["electron_temperature"].value) * gaps / np.exp(log_width)
        gradient[:, 5] = -values
        explicit = {"electron_temperature": 1.0}
    mean = mean_of(row, values, gradient, found.prior)
    u, parts = shared_parts(mean, given, {k: c * mean.value for k, c in explicit.items()}, found.prior)
    if found.evidence > found.needed and max(u / mean.value, found.width_u) < WIDEST:
        value = Quantity(
            name,
            UNITS[name],
            mean.value,
            u,
            degrees_of_freedom=found.freedom,
            shared=parts,
            conditions=dict(conditions),
        )
        return value, ()
    return _upper(found, values, given, explicit, conditions)


def _upper(
    found: Findings,
    values: FloatArray,
    given: Mapping[str, Given],
    explicit: Mapping[str, float],
    conditions: Conditions,
) -> tuple[Quantity, tuple[str, ...]]:
    """Return the largest coupling that the trace allows, with a warning."""
    drop = BOUND_DROP if found.prior is not None else BOUND_DROP_ALONE
    top = float(np.max(values[found.row.profile() >= -drop]))
    # The formula's own scale: the width's part is in the profile already.
    top *= 1.0 + ONE_SIDED * sum(_relative(given[name]) for name in explicit)
    warning = (
        "the width is thermal, or cannot be told from it (log-likelihood of a gap "
        f"{max(found.evidence, 0.0):.2g}, {found.needed:g} needed): tunnel_coupling is an upper bound"
    )
    if found.evidence > found.needed:
        warning = "thermal and tunnelling width cannot be told apart: tunnel_coupling is an upper bound"
    bound = Quantity(
        "tunnel_coupling", UNITS["tunnel_coupling"], top, bound="upper", conditions=dict(conditions)
    )
    return bound, (warning,)


def _thermal(found: Findings, name: str, given: Mapping[str, Given], conditions: Conditions) -> Quantity:
    """Return electron temperature or lever arm from the thermal width, or a bound of it.

    Without a seen gap the whole width may be thermal: the temperature is then at most,
    the lever arm at least, what that width means.
    """
    power = 1.0 if name == "electron_temperature" else -1.0
    source = "lever_arm" if power > 0.0 else "electron_temperature"
    factor = float(given[source].value) * found.half_span / BOLTZMANN_EV
    if power < 0.0:
        factor = float(given[source].value) * BOLTZMANN_EV / found.half_span
    relative = _relative(given[source])
    if found.evidence <= found.needed:
        node = found.ungapped
        spread = float(np.hypot(np.sqrt(node.covariance[5, 5]), relative))
        value = factor * float(np.exp(power * (node.parameters[5] + ONE_SIDED * spread)))
        side: Literal["upper", "lower"] = "upper" if power > 0.0 else "lower"
        return Quantity(name, UNITS[name], value, bound=side, conditions=dict(conditions))
    values = factor * np.exp(power * np.array([node.parameters[5] for node in found.row.nodes]))
    gradient = np.zeros((values.size, 6))
    gradient[:, 5] = power * values
    mean = mean_of(found.row, values, gradient, None)
    u, parts = shared_parts(mean, given, {source: mean.value}, None)
    if mean.u > WIDEST * mean.value:
        why = f"the thermal part of the width is uncertain by {mean.u / mean.value:.0%}: tunnelling hides it"
        return _none(name, why, conditions)
    return Quantity(
        name,
        UNITS[name],
        mean.value,
        u,
        degrees_of_freedom=found.freedom,
        shared=parts,
        conditions=dict(conditions),
    )


def _none(name: str, why: str, conditions: Conditions) -> Quantity:
    """Return a quantity without a value."""
    return Quantity(name, UNITS[name], None, why=why, conditions=dict(conditions))


def _relative(given: Given) -> float:
    """Return the relative standard uncertainty of a given number."""
    return given.standard_uncertainty / abs(float(given.value))
