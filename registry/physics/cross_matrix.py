"""Which virtual-gate matrix do measured ratios make, and which entries are unknown?

M has a row a dot (named by its own gate) and a column a gate; M_ii = 1, M_ij is the
ratio ``i<-j``; then V' = M V are the virtual gates (T. Hensgens et al., Nature 548 (2017)
70).  An entry never measured is NaN, never zero.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from registry.physics.result import Quantity
from registry.samples import FloatArray

__all__ = ["CrossMatrix", "assemble"]


@dataclass(frozen=True, eq=False)
class CrossMatrix:
    """A matrix of lever-arm ratios.

    Attributes:
        dots: own gates, one a row; ``gates``: one a column, the dots' own ones first.
        ratio: shape (rows, columns), unit 1; NaN where never measured.
        u: standard uncertainties, same shape; 0 on the diagonal, NaN where unknown.
        missing: subjects ``OWN<-OTHER`` of the entries never measured.
    """

    dots: tuple[str, ...]
    gates: tuple[str, ...]
    ratio: FloatArray
    u: FloatArray
    missing: tuple[str, ...]


def assemble(ratios: Sequence[Quantity]) -> CrossMatrix:
    """Put cross_capacitance_ratio values with subjects ``OWN<-OTHER`` into a matrix.

    An entry measured several times is the mean weighted by 1/u^2, its uncertainty at
    least what the values' scatter about that mean asks for (Birge ratio).

    Args:
        ratios: values with uncertainties; those without a value are passed over.
    """
    entries: dict[tuple[str, str], list[tuple[float, float]]] = {}
    for one in ratios:
        own, arrow, other = (one.subject or "").partition("<-")
        if arrow and one.value is not None and one.standard_uncertainty is not None:
            entries.setdefault((own, other), []).append((one.value, one.standard_uncertainty))
    dots = tuple(dict.fromkeys(own for own, _ in entries))
    gates = tuple(dict.fromkeys((*dots, *(other for _, other in entries))))
    ratio = np.full((len(dots), len(gates)), np.nan)
    u = np.full_like(ratio, np.nan)
    for row, own in enumerate(dots):
        for column, other in enumerate(gates):
            if own == other:
                ratio[row, column], u[row, column] = 1.0, 0.0
            elif (own, other) in entries:
                ratio[row, column], u[row, column] = _mean(entries[own, other])
    missing = tuple(f"{dots[row]}<-{gates[column]}" for row, column in np.argwhere(np.isnan(ratio)))
    return CrossMatrix(dots, gates, ratio, u, missing)


def _mean(values: list[tuple[float, float]]) -> tuple[float, float]:
    """Return the weighted mean of (value, u) and its uncertainty, scatter included."""
    value, u = np.array(values).T
    weight = 1.0 / np.maximum(u, np.finfo(float).tiny ** 0.25) ** 2
    mean = float(np.sum(weight * value) / np.sum(weight))
    spread = float(np.sum(weight * (value - mean) ** 2))
    birge = np.sqrt(spread / (value.size - 1)) if value.size > 1 else 1.0
    return mean, float(max(birge, 1.0) / np.sqrt(np.sum(weight)))
