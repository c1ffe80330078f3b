"""How much does one gate pull on another gate's dot, compared with that dot's own gate?

A peak or transition of a dot lies where its level meets the lead,

    alpha_own V_own + alpha_other V_other = constant,

so its position in the own gate's volts moves with the other gate's volts by the slope
-alpha_other / alpha_own, and

    cross_capacitance_ratio = alpha_other / alpha_own = -dV_own / dV_other      (V/V, unit 1).

It is a ratio of lever arms, one entry of the virtual-gate matrix with 1 on its diagonal
(T. Hensgens et al., Nature 548 (2017) 70; R. Hanson et al., Rev. Mod. Phys. 79 (2007)
1217).  It is not a ratio of bare capacitances.

Samples: the axis is the other gate's volts, each signal a dot's position in volts of its
own gate, named by that gate; ``NAME_u`` beside it holds standard uncertainties.

Domain: 6 or more points, one straight line, at most one jump, 1/f noise (drift) of the
positions at most as large as the white one.  Measured over 2,400 simulated tables of 6 to 40
points (ratios -0.02 to 0.6), 68 % / 95 % intervals (Student's t with the degrees of freedom
stated) cover, by 1/f noise in units of the white:

    0     89 / 99 %        0.5    79 / 97 %        1     68 / 95 %

so they are too wide where there is no drift: few points cannot exclude it.  No good table was
refused; in 0.1 % a jump was fitted that was not there.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from registry.errors import InputError
from registry.physics.catalogue import check_given, facts, word
from registry.physics.cross_line import CrossLine, fit_cross_line
from registry.physics.cross_matrix import assemble
from registry.physics.points import pick_points, value_signals
from registry.physics.result import Curve, Given, Quantity, Refusal, Result, refused_result
from registry.physics.sources import source_digest
from registry.samples import FloatArray, Samples, Signal

__all__ = ["run"]

METHOD = facts("cross-talk")
QUANTITY = METHOD.main_quantity

#: Points below which slope, noise and straightness cannot be told apart.
FEWEST_POINTS = 6
#: A ratio is told if its uncertainty is below this, or below this share of it.
UNCERTAINTY = 0.05
RELATIVE_UNCERTAINTY = 0.3
#: Ratios this many uncertainties below 0 or above 1 are pointed out.
ODD_SIGMAS = 4.0


def run(samples: Samples, given: Mapping[str, Given]) -> Result:
    """Fit a line to each dot's positions.

    Args:
        samples: one axis in V; one or more signals in V.
        given: ``signal`` (only that one), ``gate`` (the own gate, if the signal's name is
            not that), ``against`` (the other gate, if the axis' name is not that).

    Returns:
        cross_capacitance_ratio with the subject ``OWN<-OTHER`` for each signal; without
        subject too if there is one signal only.

    Raises:
        InputError: the samples are no such table, or a given is unknown or impossible.
    """
    check_given(given, METHOD)
    settings: dict[str, float | str | bool] = {name: one.value for name, one in given.items()}
    signals = _position_signals(samples, given)
    other = word(given, "against", samples.axes[0].name)
    quantities: list[Quantity] = []
    warnings: list[str] = []
    lines: list[tuple[str, CrossLine, FloatArray]] = []
    for signal in signals:
        subject = f"{word(given, 'gate', signal.name)}<-{other}"
        if subject == f"{other}<-{other}":
            raise InputError(
                f"{other} would be both the own and the other gate",
                where=f"signal {signal.name}",
                remedy="name the dot's own gate with --given gate=NAME",
            )
        try:
            points = pick_points(samples, signal, "V", FEWEST_POINTS)
            warnings += points.warnings
            line = fit_cross_line(points)
            quantities.append(_ratio(line, subject, points.conditions()))
        except Refusal as refusal:
            quantities.append(Quantity(QUANTITY, "1", None, subject=subject, why=refusal.reason))
            continue
        warnings += (f"{subject}: {one}" for one in (*line.warnings, *_odd(line)))
        lines.append((subject, line, points.x))
    if not lines:
        return refused_result(
            METHOD.name,
            METHOD.version,
            source_digest(METHOD.name),
            METHOD.quantities,
            "; ".join(f"{one.subject}: {one.why}" for one in quantities),
            warnings=tuple(warnings),
            settings=settings,
        )
    if samples.axes[0].level == "source":
        warnings.append(f"volts of {other} are those at the source: the ratio holds for those")
    return _result(quantities, lines, warnings, settings)


def _position_signals(samples: Samples, given: Mapping[str, Given]) -> tuple[Signal, ...]:
    """Return the signals that hold positions.

    Raises:
        InputError: one of them is not in volts, or one name is to stand for several.
    """
    signals = value_signals(samples, given)
    faults = [f"signal {one.name!r} is in {one.unit!r}, V are wanted" for one in signals if one.unit != "V"]
    if "gate" in given and len(signals) > 1:
        faults.append(f"gate names one dot's gate, but there are {len(signals)} signals")
    if faults:
        raise InputError(
            faults[0],
            where=f"given to {METHOD.name}",
            remedy="name the signal that holds the positions with --given signal=NAME",
            faults=tuple(faults[1:]),
        )
    return signals


def _ratio(line: CrossLine, subject: str, conditions: Mapping[str, str | float]) -> Quantity:
    """Return the ratio.

    Raises:
        Refusal: it is too uncertain.
    """
    allowed = max(UNCERTAINTY, RELATIVE_UNCERTAINTY * abs(line.slope))
    if not line.u <= allowed:
        raise Refusal(
            f"the ratio is uncertain by {line.u:.2g}, {allowed:.2g} are allowed: move the other gate further"
        )
    return Quantity(
        QUANTITY,
        "1",
        -line.slope,
        line.u,
        subject=subject,
        degrees_of_freedom=line.degrees_of_freedom,
        conditions=conditions,
    )


def _odd(line: CrossLine) -> list[str]:
    """Say what is unusual for gates of one device."""
    if line.slope > ODD_SIGMAS * line.u:
        return ["the ratio is negative: check signs, and that the points follow one transition"]
    if -line.slope - 1.0 > ODD_SIGMAS * line.u:
        return ["the other gate pulls more than the own one: are the two exchanged?"]
    return []


def _result(
    quantities: list[Quantity],
    lines: list[tuple[str, CrossLine, FloatArray]],
    warnings: list[str],
    settings: Mapping[str, float | str | bool],
) -> Result:
    """Word the result; several dots' ratios are independent."""
    if len(quantities) == 1:
        fields = {**quantities[0].__dict__, "subject": None}
        quantities = [Quantity(**fields), *quantities]
    found = [one for one in quantities if one.subject is not None and one.value is not None]
    missing = assemble(found).missing
    if missing:
        warnings = [*warnings, f"matrix entries not in this table: {', '.join(missing)}"]
    sizes = [len(line.names) for _, line, _ in lines]
    covariance = np.zeros((sum(sizes), sum(sizes)))
    for start, size, (_, line, _) in zip(np.cumsum([0, *sizes[:-1]]), sizes, lines, strict=True):
        covariance[start : start + size, start : start + size] = line.covariance
    return Result(
        method=METHOD.name,
        version=METHOD.version,
        source_digest=source_digest(METHOD.name),
        quantities=tuple(quantities),
        warnings=tuple(warnings),
        parameters=tuple(f"{subject} {name}" for subject, line, _ in lines for name in line.names),
        covariance=covariance,
        curves=tuple(
            Curve(subject, x[np.argsort(x)], line.fitted[np.argsort(x)]) for subject, line, x in lines
        ),
        settings=settings,
    )
