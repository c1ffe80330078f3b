"""By how much two values differ, shared parts of their uncertainty counted once.  Pure."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from registry.questions.parameters import Point

__all__ = ["Difference", "covariance", "difference_of"]

# Expanded uncertainty in an E_n number: U = k u with k = 2 (ISO 13528:2022, 9.7).
EN_COVERAGE = 2.0


@dataclass(frozen=True)
class Difference:
    """b - a.

    Attributes:
        value: None where one side has no value or only a bound.
        standard_uncertainty: of the difference; None where unknown.
        e_n: difference over its expanded uncertainty (k = 2), sign kept.
    """

    value: float | None
    standard_uncertainty: float | None
    e_n: float | None


def covariance(a: Mapping[str, float], b: Mapping[str, float]) -> float:
    """Covariance through shared sources: the sum of products of signed uncertainties."""
    return math.fsum(a[source] * b[source] for source in sorted(a.keys() & b.keys()))


def difference_of(a: Point | None, b: Point | None) -> Difference:
    """b - a with u^2 = u_a^2 + u_b^2 - 2 cov(a, b) (JCGM 100:2008, equation 13)."""
    if a is None or b is None or a.value is None or b.value is None or a.bound or b.bound:
        return Difference(None, None, None)
    value = b.value - a.value
    if a.id == b.id:
        return Difference(value, 0.0, None)
    if a.standard_uncertainty is None or b.standard_uncertainty is None:
        return Difference(value, None, None)
    variance = a.standard_uncertainty**2 + b.standard_uncertainty**2 - 2 * covariance(a.shared, b.shared)
    u = math.sqrt(max(variance, 0.0))
    return Difference(value, u, value / (EN_COVERAGE * u) if u > 0 else None)
