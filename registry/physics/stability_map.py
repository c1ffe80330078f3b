"""How do two gates pull on the dots of a charge-stability map?

Lines where a dot takes a charge from its lead are found (``line_finding``), followed with
sub-pixel places (``line_places``), and each family of parallel ones gets a common slope
under charge drift from row to row (``line_drift``).  Two families are the two dots: the
one that follows the fast gate more is its dot, the other the slow gate's; slopes give
the pull ratios, which are the off-diagonal entries of the virtual-gate matrix (own gate
1); spacings and jumps at crossings give addition voltages and, with lever arms, energies
(``honeycomb``, ``double_dot``).  One family, or three and more, are reported as they are.

Domain: steps at least 7 times the white noise of a pixel, thermal width w 0.2 to 1 pixel,
lines at least 6 degrees (in pixels) off the fast axis, 20 pixels from line to line, 1/f
noise in a row half the white noise, charge drift up to 0.05 pixels a root row.  Measured
over 120 simulated maps of 110 x 100 pixels (steps 10 and 7 times the white noise; white
noise, with 1/f noise, with drift in equal parts; 68 % / 95 % intervals cover, mean score,
share of maps with a value):

    ratio of the fast gate's dot       72 / 93 %   +0.28   100 %
    ratio of the slow gate's dot       76 / 96 %   -0.18    97 %
    addition voltage, fast gate        60 / 92 %   -0.23    97 %
    addition voltage, slow gate        95 / 98 %   +0.07    91 %  (wider than need be)
    interdot charging energy           70 / 94 %   +0.16    96 %
    mutual capacitance                 84 / 95 %   +0.12    91 %

None was refused.  Featureless maps (white, 1/f, ramp, glitch, step in time, mains)
answered: 1 of 600.  Limits: the walk of one dot is not used for the other; lines in a
steady drift of charge get a wrong slope; where the sensor turns over its peak inside the
map, lines of the turned sign are not seen; families nearer than 9 degrees are one;
of crossings that show no jump at all one family may be lost (then it says one family).
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from registry.errors import InputError
from registry.physics.catalogue import check_given, facts, word
from registry.physics.double_dot import Dot, energy_quantities
from registry.physics.gate_map import GateMap, level_rows, pick_map
from registry.physics.honeycomb import DotLines, dot_lines, jump_of, spacing_of, triple_points
from registry.physics.line_drift import fit_slope
from registry.physics.line_finding import find_families, respond, shrink
from registry.physics.line_places import Family, place_lines
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.sources import source_digest
from registry.samples import Samples

__all__ = ["run"]

METHOD = facts("stability-map")

#: Pixels along either axis below which no family can be followed.
FEWEST_PIXELS = 32
#: Places a family must have, in all and as a share of the largest family's.
FEWEST_PLACES = 14
PLACES_SHARE = 0.1
#: Its longest segment must have this many places.
LONGEST_SEGMENT = 9
#: A step must be this many times its uncertainty in the segment that shows it best.
STEP_SIGNIFICANCE = 8.0
#: Largest scatter of places about the lines, pixels of the map lines were found in.
LARGEST_SCATTER = 1.5
#: Largest standard uncertainty of a ratio.
RATIO_UNCERTAINTY = 0.1
#: Pairs that differ by so many standard uncertainties from their mean are worth a word.
UNEQUAL = 4.0


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Find and fit the transition lines of a map.

    Args:
        samples: a map over two gate voltages, slow axis first; any signal unit.
        given: ``signal``, ``lines``, ``lever_arm_<axis>`` of either axis.

    Returns:
        cross_capacitance_ratio of either dot (subject ``P1<-P2``) or family, and of two
        dots addition_voltage and addition_energy (subject: the axis),
        interdot_charging_energy, mutual_capacitance.

    Raises:
        InputError: the samples are no such map, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    _check_axes(samples, given)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    settings["lines"] = word(given, "lines", "steps")
    conditions: dict[str, str | float] = {}
    warnings: tuple[str, ...] = ()
    try:
        grid = pick_map(samples, given, FEWEST_PIXELS)
        conditions, warnings = grid.conditions(), grid.warnings
        settings["signal"] = grid.signal
        return _answer(grid, given, settings)
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


def _check_axes(samples: Samples, given: Mapping[str, Given]) -> None:
    """Refuse a lever arm of an axis that the map does not have."""
    known = [f"lever_arm_{axis.name}" for axis in samples.axes]
    for name in given:
        if name.startswith("lever_arm_") and name not in known:
            raise InputError(
                f"{name} belongs to no axis", where="given to stability-map", remedy=f"use {', '.join(known)}"
            )


def _answer(grid: GateMap, given: Mapping[str, Given], settings: dict[str, float | str | bool]) -> Result:
    """Find, follow, fit, and word the result."""
    ridges = settings["lines"] == "ridges"
    z = (grid.z - np.median(grid.z)) / float(np.ptp(grid.z))
    small, block = shrink(level_rows(z))
    warnings = list(grid.warnings)
    families = _judged(place_lines(z, find_families(respond(small, ridges)), block, ridges), warnings)
    dots = _dots(families, grid, max(block))
    settings["families"] = float(len(dots))
    two = len(dots) == 2
    quantities = _two_dots(dots, grid, given, warnings) if two else _families(dots, grid, warnings)
    size = len(dots)
    covariance = np.diag([one.ratio_u**2 for one in dots])
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=quantities,
        warnings=tuple(warnings),
        parameters=tuple(f"ratio {k + 1}" for k in range(size)),
        covariance=covariance,
        curves=_curves(dots, grid),
        settings=settings,
    )


def _judged(families: list[Family], warnings: list[str]) -> list[Family]:
    """Return the families that can be trusted; refuse if there is none."""
    most = max((sum(s.at.size for s in one.segments) for one in families), default=0)
    kept, why = [], "no line is long enough"
    for one in families:
        places = sum(s.at.size for s in one.segments)
        best = max(abs(s.height) / max(s.height_u, 1e-12) for s in one.segments)
        fault = None
        if places < max(FEWEST_PLACES, PLACES_SHARE * most):
            fault = f"{places} places on lines are too few"
        elif max(s.at.size for s in one.segments) < LONGEST_SEGMENT:
            fault = "no line is long enough"
        elif best < STEP_SIGNIFICANCE:
            fault = f"the best line is {best:.2g} times its uncertainty, {STEP_SIGNIFICANCE:g} are needed"
        if fault is None:
            kept.append(one)
        else:
            why = fault
            warnings.append(f"lines with normal {one.normal:.0f} degrees were left out: {fault}")
    if not kept:
        raise Refusal(why)
    return kept


def _dots(families: list[Family], grid: GateMap, block: int) -> list[DotLines]:
    """Fit every family; the fast gate's dot first where there are two."""
    fits = [fit_slope(one.segments, one.by_row) for one in families]
    per_pixel = float((grid.y[1] - grid.y[0]) / (grid.x[1] - grid.x[0]))
    tilts = [_tilt(one, fit.slope, per_pixel) for one, fit in zip(families, fits, strict=True)]
    order = np.argsort(tilts)
    axes = [int(tilt > 1.0) for tilt in tilts]
    if len(families) == 2:
        axes[int(order[0])], axes[int(order[1])] = 0, 1
    found = []
    for k in order:
        one, fit = families[int(k)], fits[int(k)]
        if fit.error > LARGEST_SCATTER * block:
            raise Refusal(f"places scatter by {fit.error:.2g} pixels about parallel lines")
        lines = dot_lines(one, fit, grid, axes[int(k)])
        if lines.ratio_u > RATIO_UNCERTAINTY:
            raise Refusal(f"a line's slope is uncertain: ratio {lines.ratio:.2g} +- {lines.ratio_u:.2g}")
        if lines.ratio < -3.0 * lines.ratio_u:
            raise Refusal(f"lines rise (ratio {lines.ratio:.2g}): not those of dots between two plungers")
        found.append(lines)
    return found


def _tilt(family: Family, slope: float, per_pixel: float) -> float:
    """Return -dx/dy of lines in volts: the pull of the slow gate in units of the fast one's."""
    if family.by_row:
        return -slope / per_pixel
    return -1.0 / (slope * per_pixel) if slope < 0.0 else float("inf")


def _subject(lines: DotLines, grid: GateMap) -> str:
    """Word a ratio's subject: ``P1<-P2``."""
    return f"{grid.names[lines.axis]}<-{grid.names[1 - lines.axis]}"


def _ratio(lines: DotLines, subject: str, grid: GateMap) -> Quantity:
    """Word a ratio."""
    return Quantity(
        "cross_capacitance_ratio",
        "1",
        lines.ratio,
        lines.ratio_u,
        subject=subject,
        degrees_of_freedom=lines.freedom,
        conditions=grid.conditions(),
    )


def _families(dots: list[DotLines], grid: GateMap, warnings: list[str]) -> tuple[Quantity, ...]:
    """Word one family, or three and more."""
    conditions = grid.conditions()
    if len(dots) == 1:
        warnings.append("one family of lines only: its slope cannot be told from a steady drift")
        ratios = [_ratio(dots[0], _subject(dots[0], grid), grid)]
        why = "one family of lines only, two are needed"
    else:
        warnings.append(f"{len(dots)} families of lines: more than two dots, which is whose is not told")
        ratios = [_ratio(one, f"family {k + 1} {_subject(one, grid)}", grid) for k, one in enumerate(dots)]
        why = f"{len(dots)} families of lines, two are needed"
    rest = [
        Quantity(name, unit, None, why=why, conditions=conditions)
        for name, unit in METHOD.quantities.items()
        if name != METHOD.main_quantity
    ]
    return (*ratios, *rest)


def _two_dots(
    dots: list[DotLines], grid: GateMap, given: Mapping[str, Given], warnings: list[str]
) -> tuple[Quantity, ...]:
    """Word a double dot."""
    x, y = dots
    steps = (float(grid.x[1] - grid.x[0]), float(grid.y[1] - grid.y[0]))
    seen = (
        Dot(grid.names[0], x, spacing_of(x, y), jump_of(x, y, steps)),
        Dot(grid.names[1], y, spacing_of(y, x), jump_of(y, x, steps[::-1])),
    )
    conditions = grid.conditions()
    found = [_ratio(one, _subject(one, grid), grid) for one in dots]
    for dot in seen:
        if dot.spacing is None:
            why = "no two successive lines of this dot lie side by side"
            found.append(
                Quantity("addition_voltage", "V", None, subject=dot.axis, why=why, conditions=conditions)
            )
            continue
        if dot.spacing.spread > UNEQUAL:
            warnings.append(f"spacings of the lines of {dot.axis} differ from pair to pair: a mean is given")
        found.append(
            Quantity(
                "addition_voltage",
                "V",
                dot.spacing.value,
                float(np.sqrt(dot.spacing.variance(dot.lines))),
                subject=dot.axis,
                degrees_of_freedom=dot.lines.freedom,
                conditions=conditions,
            )
        )
    if any(one.ratio >= 1.0 for one in dots):
        warnings.append("a gate pulls more on the other dot than on its own: which dot is whose is a guess")
    if any(name.startswith("lever_arm_") for name in given):
        warnings.append("addition energies hold level spacings: mutual_capacitance takes them as charging")
    return (*found, *energy_quantities(seen, given, conditions))


def _curves(dots: list[DotLines], grid: GateMap) -> tuple[Curve, ...]:
    """Return every segment as a line over the fast gate's volts, and the triple points."""
    curves = []
    for number, lines in enumerate(dots):
        for k, ends in enumerate(lines.ends):
            own = lines.own(k, ends)
            x, y = (own, ends) if lines.axis == 0 else (ends, own)
            curves.append(Curve(f"family {number + 1} line {k + 1}", x, y))
    if len(dots) == 2:
        steps = (float(grid.x[1] - grid.x[0]), float(grid.y[1] - grid.y[0]))
        points = triple_points(dots[0], dots[1], steps).reshape(-1, 2)
        if points.size:
            curves.append(Curve("triple points", points[:, 0], points[:, 1]))
    return tuple(curves)
