"""How strongly does a gate pull on a dot, and what does a charge cost: Coulomb diamonds.

In a map over gate and bias the edges of every transport window are found as two families of
lines (``diamond_lines``), placed row by row below a sample (``diamond_edges``), and fitted with
straight lines under a drifting charge (``diamond_fit``).  With the inverse slopes s+ > 0 and
s- < 0 (gate volts per bias volt) and the spacing D of the transitions (``diamond_quantities``)

    lever arm = 1/(s+ - s-),   addition energy = lever arm x D (eV),   C_gate = e/D (F)

(constant-interaction model: R. Hanson et al., Rev. Mod. Phys. 79 (2007) 1217, section II).
The drain is grounded and the bias at the source unless ``bias_at`` says otherwise; the lever
arm does not depend on it, source and drain capacitances do.  Current or differential
conductance of either sign and unit; positive for holes too.

Domain: sharp edges (one level in the window) at least 10 times the white noise of a sample;
thermal width k_B T/(lever arm) of 0.4 to 1.3 gate samples and at most a tenth of a window
somewhere in the map; 1/f noise up to the white noise; zero-bias offset up to 4 % of the bias
range; bias the slow axis, charge drift up to 0.1 gate samples per root step, one charge jump.

Measured over 180 simulated maps (rate equation, 56 x 110, drift 0 to 0.1,
a quarter with a jump of 7 or 12 samples; 3 refused; 68 % / 95 % intervals cover):

    lever arm 66 / 93    charging energy 66 / 93    addition voltage 61 / 91
    source 62 / 90 and drain capacitance 63 / 93 %,   bias below 0.08 standard uncertainties

Source and drain capacitance, which hang on single slopes, were off by 4 to 9 standard
uncertainties in 2 of these maps; no lever arm was off by more than 3.7.
Gate the slow axis, without drift, 100 maps, 4 refused: lever arm 52 / 96, charging energy
50 / 95, capacitances 63 / 91 and 67 / 94 %, addition voltage 100 / 100 % (too wide: a drift the
map cannot exclude is in it).  With a drift of 0.05 samples per root step (50 maps) 58 / 88,
64 / 86 and, addition voltage, 57 / 82 %: outside the domain, and a warning says so.
Maps without diamonds (white, 1/f, ramp, saddle, glitch, step, mains, a bare conductor, one
family of lines, telegraph): 0 of 154 answered (and 0 of 330 before the last limits were set).

Limits: a current that rises from its edge as a ramp (very many levels) is refused; a jump
while a slow gate stands between lines passes into a spacing unseen; level degeneracy shifts
peaks by up to k_B T ln 2, so that spacings hold its change from charge to charge.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import cast

import numpy as np
from numpy.typing import NDArray

from registry.physics.catalogue import check_given, facts, word
from registry.physics.diamond_edges import Edges, fit_edges
from registry.physics.diamond_fit import LineFit, fit_lines
from registry.physics.diamond_lines import EdgeKind, Geometry, find_lines
from registry.physics.diamond_map import DiamondMap, pick_map
from registry.physics.diamond_quantities import Pooled, diamond_quantities, pool
from registry.physics.result import Curve, Given, Refusal, Result, refused_result
from registry.physics.sources import source_digest
from registry.samples import Samples

__all__ = ["run"]

METHOD = facts("coulomb-diamonds")

#: Share of the places where an edge must stand out of the noise.
EDGES_FOUND = 0.6
#: Edges may scatter about their lines by so many times their uncertainty, or ...
SCATTER = 2.5
#: ... by this share of their width where the map is nearly free of noise.
SCATTER_IN_WIDTHS = 0.3
#: Largest rise of the current over one width w beside an edge, in units of its step.
RAMP = 0.3
#: Share of the edges of one side of a line that must step the same way.
COHERENT = 0.9
#: Largest relative uncertainty of a lever arm.
LEVER_ARM_UNCERTAINTY = 0.25


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Fit the edges of all diamonds of a map.

    Args:
        samples: a map over a gate voltage and a source-drain bias, in either order; current
            or differential conductance of either sign in any unit.
        given: ``signal``, ``direction``, ``bias_axis``, ``bias_at``, ``bias_scale``,
            ``electrons``, ``edge``.

    Returns:
        lever_arm over all and for each ``diamond 1`` ... in order of volts; peak_position of
        each ``peak 1`` ...; addition_voltage and addition_energy over all and for each
        diamond; charging_energy and the four capacitances over all.

    Raises:
        InputError: the samples are no such map, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    settings |= {"bias_at": word(given, "bias_at", "source"), "electrons": word(given, "electrons", "many")}
    settings |= {"edge": word(given, "edge", "auto")}
    settings.setdefault("bias_scale", 1.0)
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        data = pick_map(samples, given)
        conditions, warnings = dict(data.conditions), data.warnings
        settings |= {
            "signal": data.signal,
            "direction": str(data.conditions["direction"]),
            "bias_axis": data.bias_name,
        }
        return _answer(data, given, settings)
    except Refusal as refusal:
        return refused_result(
            METHOD.name,
            METHOD.version,
            source_digest(METHOD.name),
            METHOD.quantities,
            refusal.reason,
            conditions=conditions,
            warnings=warnings,
            settings=settings,
        )


def _answer(data: DiamondMap, given: Mapping[str, Given], settings: dict[str, float | str | bool]) -> Result:
    """Find, fit, judge, and word the result."""
    warnings = list(data.warnings)
    wanted = word(given, "edge", "auto")
    geometry = find_lines(data, None if wanted == "auto" else cast(EdgeKind, wanted))
    edges = fit_edges(data, geometry)
    _judge_edges(edges)
    fit = fit_lines(edges, _time(data, geometry, edges), geometry.jump)
    pooled = pool(fit)
    _judge_lines(fit, pooled)
    settings["edge_used"] = geometry.kind
    _remark(fit, geometry, data, warnings)
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=diamond_quantities(fit, pooled, given, data.conditions, data.slow == "bias", warnings),
        warnings=tuple(warnings),
        parameters=tuple(
            f"peak {k + 1} {name}"
            for k in range(fit.transition.size)
            for name in ("position", "rising inverse slope", "falling inverse slope")
        ),
        covariance=fit.covariance,
        curves=_curves(fit, geometry),
        settings=settings,
    )


def _time(data: DiamondMap, geometry: Geometry, edges: Edges) -> NDArray[np.intp]:
    """Return the slow step at which every edge was passed, from its rough place.

    Not from its fitted place: a drift in terms of the measured volts could explain them all.
    """
    if data.slow == "bias":
        return data.order[edges.row]
    slope = np.where(edges.rising, geometry.rising, geometry.falling)
    rough = geometry.positions[edges.transition] + slope * edges.bias
    nearest = np.searchsorted(0.5 * (data.gate[1:] + data.gate[:-1]), rough)
    return data.order[nearest]


def _judge_edges(edges: Edges) -> None:
    """Refuse where what was fitted are no edges of a window."""
    if edges.gate.size < EDGES_FOUND * edges.tried:
        raise Refusal(
            f"only {edges.gate.size} of {edges.tried} edges stand out of the noise, "
            f"{EDGES_FOUND:.0%} are needed"
        )
    if edges.ramp > RAMP:
        raise Refusal(
            f"the signal rises beside its edges by {edges.ramp:.2g} of a step over one edge width, "
            f"{RAMP:g} are allowed: no sharp edges (many levels in the window?)"
        )
    agree, total = 0, 0
    for n in np.unique(edges.transition):
        for rising in (True, False):
            for positive in (True, False):
                own = (edges.transition == n) & (edges.rising == rising) & ((edges.bias > 0.0) == positive)
                up = int(np.count_nonzero(edges.height[own] > 0.0))
                agree += max(up, int(np.count_nonzero(own)) - up)
                total += int(np.count_nonzero(own))
    if agree < COHERENT * total:
        raise Refusal(f"edges step up and down at random: {agree} of {total} agree with their line")


def _judge_lines(fit: LineFit, pooled: Pooled) -> None:
    """Refuse lines the edges do not follow, and slopes that are not known."""
    typical = float(np.sqrt(np.mean(fit.used.u**2)))
    scatter = fit.scatter * typical
    if fit.scatter > SCATTER and scatter > SCATTER_IN_WIDTHS * fit.used.width:
        raise Refusal(
            f"edges scatter about straight lines by {fit.scatter:.2g} times their uncertainty "
            f"({scatter / fit.used.width:.2g} edge widths)"
        )
    rising, falling = pooled.values[:2]
    if rising <= 0.0 or falling >= 0.0:
        raise Refusal("the two families of edges do not slope against each other")
    turn = np.array([1.0, -1.0])
    u = float(np.sqrt(turn @ pooled.covariance[:2, :2] @ turn)) / (rising - falling)
    if not u < LEVER_ARM_UNCERTAINTY:
        raise Refusal(f"the lever arm is uncertain by {u:.0%}, {LEVER_ARM_UNCERTAINTY:.0%} are allowed")


def _remark(fit: LineFit, geometry: Geometry, data: DiamondMap, warnings: list[str]) -> None:
    """Say what the numbers rest on."""
    if fit.left_out:
        warnings.append(f"{fit.left_out} edges off their lines were left out")
    if data.slow == "gate":
        warnings.append(
            "the gate was stepped slowly: drift of the charge during the map passes into slopes and "
            "spacings (make the gate the fast axis)"
        )
    dropped = geometry.positions.size - fit.transition.size
    if dropped:
        warnings.append(f"{dropped} transitions do not show both edges and were left out")
    if fit.jump is not None:
        warnings.append(f"a charge jump lies before step {fit.jump[1] + 1} of the slow axis")


def _curves(fit: LineFit, geometry: Geometry) -> tuple[Curve, ...]:
    """Return the fitted edges (points) and the lines, bias over gate volts, for drawing."""
    zero = geometry.offset
    used = fit.used
    curves = [Curve("edges", used.gate, used.bias + zero)]
    for k, n in enumerate(fit.transition):
        own = used.bias[used.transition == n]
        bias = np.linspace(float(np.min(own)), float(np.max(own)), 41)
        position, rising, falling = fit.values[3 * k : 3 * k + 3]
        for name, slope in (("rising", rising), ("falling", falling)):
            curves.append(Curve(f"peak {k + 1} {name}", position + slope * (bias - fit.offset), zero + bias))
    return tuple(curves)
