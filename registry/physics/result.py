"""What every method takes besides samples, and what every method returns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from registry.samples import FloatArray

__all__ = ["Curve", "Given", "Quantity", "Refusal", "Result", "refused_result"]


@dataclass(frozen=True)
class Given:
    """A number the user gives to a fit, in the quantity's SI unit.

    Attributes:
        value: the number, or a word (``model=single-level``).
        standard_uncertainty: one standard deviation, 0 where exact.
        components: source digest (hex) -> signed standard uncertainty that source
            contributes to ``value``; empty where typed by hand.
    """

    value: float | str
    standard_uncertainty: float = 0.0
    components: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class Quantity:
    """One extracted number, or the reason why there is none.

    Attributes:
        quantity: name from the controlled list, e.g. ``electron_temperature``.
        unit: its unit in the controlled list.
        value: None if not trustworthy (then ``why`` says why).
        standard_uncertainty: one standard deviation; None if unknown.
        subject: ``peak 3``, a site, an axis; None for the summary value.
        bound: ``upper`` or ``lower`` if ``value`` is a 95 % one-sided bound.
        why: the reason for no value, else None.
        degrees_of_freedom: of the standard uncertainty; None means infinite.
        shared: name of a given -> signed standard uncertainty (already inside
            ``standard_uncertainty``) which that given contributes; results that share
            a given are correlated through it.
        conditions: e.g. ``{"direction": "up"}``; makes a series of its own.
    """

    quantity: str
    unit: str
    value: float | None
    standard_uncertainty: float | None = None
    subject: str | None = None
    bound: Literal["upper", "lower"] | None = None
    why: str | None = None
    degrees_of_freedom: float | None = None
    shared: Mapping[str, float] = field(default_factory=dict)
    conditions: Mapping[str, str | float] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Curve:
    """A fitted curve for drawing: ``y`` over ``x``, both SI, shape (n,)."""

    name: str
    x: FloatArray
    y: FloatArray


@dataclass(frozen=True, eq=False)
class Result:
    """All that one run of a method gives.

    Attributes:
        method, version: which code; ``source_digest``: SHA-256 (hex) of its source
            with LF line ends.
        quantities: summary values and those with subjects.
        refused: the reason if the main quantity has no value (then no other quantity
            has one), else None.
        warnings: plain sentences.
        parameters, covariance: names of the fit's free parameters and their
            covariance, shape (k, k); None if no covariance could be determined.
        curves: for drawing.
        settings: every choice that determined the outcome (numbers and words), the
            defaults included; part of the analysis identity.
    """

    method: str
    version: str
    source_digest: str
    quantities: tuple[Quantity, ...]
    refused: str | None = None
    warnings: tuple[str, ...] = ()
    parameters: tuple[str, ...] = ()
    covariance: FloatArray | None = None
    curves: tuple[Curve, ...] = ()
    settings: Mapping[str, float | str | bool] = field(default_factory=dict)


class Refusal(Exception):
    """A trace cannot be trusted with a number; caught by the method, which answers with it."""

    def __init__(self, reason: str) -> None:
        """Take ``reason``: one plain sentence with the numbers that decided."""
        self.reason = reason
        super().__init__(reason)


def refused_result(
    method: str,
    version: str,
    source_digest: str,
    quantities: Mapping[str, str],
    reason: str,
    *,
    conditions: Mapping[str, str | float] | None = None,
    warnings: tuple[str, ...] = (),
    curves: tuple[Curve, ...] = (),
    settings: Mapping[str, float | str | bool] | None = None,
) -> Result:
    """Return the result of a method that refuses.

    Args:
        method, version, source_digest, warnings, curves, settings: as in ``Result``.
        quantities: name -> unit of all the method could have returned; each is there
            without value and with ``reason``.
        reason: why there is no value.
        conditions: of every quantity.
    """
    return Result(
        method=method,
        version=version,
        source_digest=source_digest,
        quantities=tuple(
            Quantity(name, unit, None, why=reason, conditions=dict(conditions or {}))
            for name, unit in quantities.items()
        ),
        refused=reason,
        warnings=warnings,
        curves=curves,
        settings=dict(settings or {}),
    )
