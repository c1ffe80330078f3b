"""By what factor does a unit text become the canonical unit of its dimension?

Every quantity is kept in one unit of its dimension, named in ``CANONICAL_UNITS``.
``canonical`` reads what people and instruments write (``mV``, ``µV``, ``kOhm``,
``V/√Hz``, ``V2/Hz``, ``degC``) and is case sensitive, because ``mV`` and ``MV`` are nine
orders apart.

Dimensions and factors of compound units come from pint, which is imported only when one
is met; a prefix before a canonical unit needs no pint.  Plane angles, offsets and
logarithms stand alone: they are refused inside a compound.
"""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import ArrayLike

from registry.errors import InputError
from registry.records.unit_text import ATOMS, CANONICAL_UNITS, OFFSETS, Parser, normalised, prefix_and_symbol
from registry.samples import FloatArray

if TYPE_CHECKING:
    import pint

__all__ = ["CANONICAL_UNITS", "canonical", "to_si"]

_SNAP: Final = 1e-15
"""Relative rounding error of a product of conversion factors; nearer decimals are meant."""


def canonical(unit: str, *, where: str | None = None) -> tuple[float, float, str]:
    """Return ``(factor, offset, canonical unit)``: canonical value = value x factor + offset.

    Args:
        unit: the text as written; an empty text or ``1`` means no unit.
        where: file and place for the message of an error.

    Raises:
        InputError: the unit is unknown (the nearest known spelling is named), or it is
            logarithmic, or its dimension is none of ``CANONICAL_UNITS``.
    """
    try:
        return _canonical(unit)
    except InputError as error:
        if where is None:
            raise
        raise InputError(error.what, where=where, remedy=error.remedy) from error


def to_si(values: ArrayLike, unit: str, *, where: str | None = None) -> tuple[FloatArray, str]:
    """Return ``values`` in the canonical unit, as a new float64 array, and that unit.

    Decimal fractions are divided for, not multiplied (300 mV is exactly 0.3 V).

    Raises:
        InputError: as ``canonical``.
    """
    factor, offset, name = canonical(unit, where=where)
    array = np.array(values, dtype=np.float64)
    inverse = float(round(1.0 / factor)) if 0.0 < factor < 1.0 else 0.0
    if inverse and 1.0 / inverse == factor:
        array /= inverse
    else:
        array *= factor
    return (array + offset if offset else array), name


@lru_cache(maxsize=4096)
def _canonical(unit: str) -> tuple[float, float, str]:
    text = normalised(unit)
    if text in CANONICAL_UNITS:
        return 1.0, 0.0, text
    if text in OFFSETS:
        factor, offset = OFFSETS[text]
        return factor, offset, "K"
    split = prefix_and_symbol(text)
    if split is not None and split[1] in CANONICAL_UNITS:
        return float(f"1e{split[0]}"), 0.0, split[1]
    terms = {text: 1.0} if text in ATOMS else Parser(unit, text).terms()
    return _through_pint(unit, terms)


@lru_cache(maxsize=1)
def _pint() -> pint.UnitRegistry[Any]:
    # Imported here: pint costs as much as half of the command line's start.
    import pint

    return pint.UnitRegistry()


def _quantity(terms: dict[str, float]) -> pint.facets.plain.PlainQuantity[Any]:
    registry = _pint()
    total = registry.Quantity(1.0, "dimensionless")
    for name, power in terms.items():
        split = prefix_and_symbol(name)
        if split is None:
            raise KeyError(name)
        atom = ATOMS[split[1]]
        scale = atom.scale * float(f"1e{split[0]}")
        total = total * registry.Quantity(scale, atom.pint_name) ** power
    return total


def _through_pint(unit: str, terms: dict[str, float]) -> tuple[float, float, str]:
    given = _quantity(terms).to_base_units()
    lever_arm = _is_energy_per_volt(terms)
    angle = any(
        ATOMS[split[1]].pint_name in ("radian", "degree") for split in map(prefix_and_symbol, terms) if split
    )
    for name in CANONICAL_UNITS:
        # A joule per volt is a coulomb: only the way it is written tells the two apart.
        # Percent is no angle, and a time is kept in seconds although 1/Hz has its dimension.
        if name == ("C" if lever_arm else "eV/V") or (name == "rad" and not angle):
            continue
        kept = _kept(name)
        if kept.dimensionality == given.dimensionality:
            return _snapped(float((given / kept).to_base_units().magnitude)), 0.0, name
    raise InputError(
        f"values in {unit!r} have a dimension that is not kept",
        where="unit",
        remedy=f"use one of the kept dimensions: {', '.join(CANONICAL_UNITS[:24])} …",
    )


def _snapped(factor: float) -> float:
    """Return the short decimal that ``factor`` missed by rounding, or ``factor`` itself."""
    short = float(f"{factor:.12g}")
    return short if abs(short - factor) <= _SNAP * factor else factor


def _is_energy_per_volt(terms: dict[str, float]) -> bool:
    powers = {"energy": 0.0, "volt": 0.0}
    for name, power in terms.items():
        split = prefix_and_symbol(name)
        symbol = split[1] if split else name
        if symbol in ("eV", "J"):
            powers["energy"] += power
        elif symbol == "V":
            powers["volt"] += power
    return powers == {"energy": 1.0, "volt": -1.0}


@lru_cache(maxsize=128)
def _kept(name: str) -> pint.facets.plain.PlainQuantity[Any]:
    terms = {name: 1.0} if name in ATOMS else Parser(name, name).terms()
    return _quantity(terms).to_base_units()
