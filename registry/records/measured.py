"""How a value with its uncertainty is written for people: digits that mean something.

The unit follows after a space and takes a prefix of a thousand (SI writing rules, NIST
SP 811); two significant digits of the standard uncertainty decide how many of the value.
"""

from __future__ import annotations

import math

__all__ = ["measured"]

_PREFIXES = {-18: "a", -15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}
_BOUNDS = {"upper": "at most", "lower": "at least"}
# Units whose first letter takes a prefix; others (eV/V, 1, V/s) are shown as they are.
_PREFIXED = frozenset({"V", "A", "S", "K", "T", "s", "Hz", "eV", "F", "C", "W", "ohm", "eV/√Hz", "V/√Hz"})


def measured(
    value: float | None, standard_uncertainty: float | None, unit: str, bound: str | None = None
) -> str:
    """``100.3 ± 1.2 mK``: rounded to two significant digits of the standard uncertainty.

    A one-sided 95 % bound reads ``at most 1.2 mK``.
    """
    if value is None:
        return "no value"
    if bound is not None:
        power = _power(abs(value)) if unit in _PREFIXED else 0
        return f"{_BOUNDS[bound]} {value / 10.0**power:.4g}{_unit(unit, power)}"
    power = _power(max(abs(value), standard_uncertainty or 0.0)) if unit in _PREFIXED else 0
    shown_unit = _unit(unit, power)
    scaled = value / 10.0**power
    if standard_uncertainty is None:
        return f"{scaled:.6g}{shown_unit} (uncertainty unknown)"
    uncertainty = standard_uncertainty / 10.0**power
    if uncertainty == 0.0:
        return f"{scaled:.6g}{shown_unit} (exact)"
    decimals = 1 - math.floor(math.log10(uncertainty))
    # 0.0996 rounds to 0.10: two digits of the rounded uncertainty, not three.
    decimals = 1 - math.floor(math.log10(float(f"{uncertainty:.1e}"))) if decimals > 0 else decimals
    if not -4 < decimals < 12:
        return f"{scaled:.4g} ± {uncertainty:.1e}{shown_unit}"
    places = max(decimals, 0)
    return f"{round(scaled, decimals):.{places}f} ± {round(uncertainty, decimals):.{places}f}{shown_unit}"


def _unit(unit: str, power: int) -> str:
    return f" {_PREFIXES[power]}{unit}" if unit != "1" else ""


def _power(size: float) -> int:
    """The power of a thousand that makes ``size`` a number between 1 and 1000."""
    if size == 0.0 or not math.isfinite(size):
        return 0
    return min(max(3 * math.floor(math.log10(size) / 3), min(_PREFIXES)), max(_PREFIXES))
