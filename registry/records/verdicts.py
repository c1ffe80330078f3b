"""Whether a value meets a limit, its uncertainty considered; pure.

Guarded acceptance after JCGM 106:2012, 8.3: a value passes where value and guard band
k u lie inside the limit, fails where the band lies wholly outside, and is undecided in
between.  With few degrees of freedom k is widened to the t quantile of the same
probability.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from registry.records.descriptions import Requirement

__all__ = ["Outcome", "Ruling", "rule"]

Outcome = Literal["pass", "fail", "undecided"]


@dataclass(frozen=True)
class Ruling:
    """What one requirement says of one value.

    Attributes:
        outcome: pass, fail or undecided.
        probability: that the true value lies inside the limit; None where no
            uncertainty is known.
        sentence: the reason in words.
    """

    outcome: Outcome
    probability: float | None
    sentence: str


def rule(
    requirement: Requirement,
    value: float | None,
    standard_uncertainty: float | None,
    degrees_of_freedom: float | None,
    bound: str | None,
) -> Ruling:
    """Judge one value by one requirement.

    Args:
        requirement: with limits in the value's unit.
        value: None where there is none.
        standard_uncertainty: None where unknown: then only a guard of 0 can decide.
        degrees_of_freedom: None means infinite.
        bound: ``upper`` or ``lower`` where the value is a one-sided 95 % bound.
    """
    upper = requirement.at_most is not None
    limit = requirement.at_most if requirement.at_most is not None else requirement.at_least
    assert limit is not None
    word = "at most" if upper else "at least"
    said = f"{requirement.quantity} {word} {limit:.6g} {requirement.unit or ''}".strip()
    if value is None:
        return Ruling("undecided", None, f"{said}: there is no value")
    if bound is not None:
        return _by_bound(said, value, limit, bound, upper)
    room = limit - value if upper else value - limit
    if standard_uncertainty is None:
        if requirement.guard > 0:
            return Ruling("undecided", None, f"{said}: {value:.6g}, but its uncertainty is unknown")
        return Ruling("pass" if room >= 0 else "fail", None, f"{said}: {value:.6g}, taken as exact")
    band, probability = _band(requirement.guard, standard_uncertainty, degrees_of_freedom, room)
    outcome: Outcome = "pass" if room >= band else "fail" if room < -band else "undecided"
    return Ruling(
        outcome, probability, f"{said}: {value:.6g} ± {standard_uncertainty:.2g}, guard band {band:.2g}"
    )


def _by_bound(said: str, value: float, limit: float, bound: str, upper: bool) -> Ruling:
    word = "below" if bound == "upper" else "above"
    if upper and bound == "upper" and value <= limit:
        return Ruling("pass", None, f"{said}: {word} {value:.6g} (95 %)")
    if not upper and bound == "lower" and value >= limit:
        return Ruling("pass", None, f"{said}: {word} {value:.6g} (95 %)")
    if (upper and bound == "lower" and value > limit) or (not upper and bound == "upper" and value < limit):
        return Ruling("fail", None, f"{said}: {word} {value:.6g} (95 %)")
    return Ruling("undecided", None, f"{said}: only known to be {word} {value:.6g} (95 %)")


def _band(
    guard: float, standard_uncertainty: float, degrees_of_freedom: float | None, room: float
) -> tuple[float, float]:
    """Guard band and conformance probability."""
    from scipy import stats

    law = stats.norm() if degrees_of_freedom is None else stats.t(degrees_of_freedom)
    k = guard if degrees_of_freedom is None else float(law.ppf(stats.norm.cdf(guard)))
    if standard_uncertainty == 0:
        return 0.0, 1.0 if room >= 0 else 0.0
    return k * standard_uncertainty, float(law.cdf(room / standard_uncertainty))
