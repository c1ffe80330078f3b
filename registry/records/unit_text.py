"""Which known unit symbols, to which powers, does a unit text consist of?

The grammar: symbols with at most one prefix, products, one level of quotient, powers,
roots and brackets.  Only the symbols of ``ATOMS`` are known: the large unit collections
hold names (``a`` for year, ``h`` beside Planck's constant) that would be read without a
word.  No numbers come out of here; ``registry.records.units`` turns symbols into factors.

Spelling rules: NIST SP 811 (2008) sections 6.1 and 7.2, SI Brochure 9th ed. section 5,
and the codes of UCUM 2.2.
"""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass
from typing import Final

from registry.errors import InputError

__all__ = [
    "ATOMS",
    "CANONICAL_UNITS",
    "OFFSETS",
    "PREFIXES",
    "Atom",
    "Parser",
    "normalised",
    "prefix_and_symbol",
]

CANONICAL_UNITS: Final[tuple[str, ...]] = (
    *("V", "A", "S", "ohm", "K", "T", "s", "Hz", "eV", "F", "C", "m", "rad", "W", "1", "H", "Pa"),
    *("V/s", "A/s", "K/s", "T/s", "Hz/s", "eV/V", "eV/T", "eV/K", "V/T", "V/K", "A/K", "Hz/V"),
    *("S/V", "1/V", "1/m^2", "m^2", "m^2/(V s)", "V^2", "A^2", "eV^2", "F/m^2", "V/m", "ohm m"),
    *("V/√Hz", "A/√Hz", "eV/√Hz", "T/√Hz", "K/√Hz", "1/√Hz"),
    *("V^2/Hz", "A^2/Hz", "eV^2/Hz", "1/Hz"),
)
"""All units in which values are kept; energies are in eV, lever arms in eV/V."""

MAX_TEXT: Final = 48
"""Characters in a unit text: the longest sensible one has about 20."""

PREFIXES: Final[dict[str, int]] = {
    **{"Q": 30, "R": 27, "Y": 24, "Z": 21, "E": 18, "P": 15, "T": 12, "G": 9, "M": 6, "k": 3, "h": 2},
    **{"da": 1, "d": -1, "c": -2, "m": -3, "u": -6, "n": -9, "p": -12, "f": -15, "a": -18, "z": -21},
    **{"y": -24, "r": -27, "q": -30},
}
_FRACTIONS: Final = frozenset({"m", "u", "n", "p", "f", "a"})


@dataclass(frozen=True)
class Atom:
    """One unit symbol: its name in pint, times ``scale``; which prefixes it may take."""

    pint_name: str
    scale: float = 1.0
    prefixes: frozenset[str] = frozenset()
    alone: bool = False


_ALL: Final = frozenset(PREFIXES)
ATOMS: Final[dict[str, Atom]] = {
    "V": Atom("volt", prefixes=_ALL),
    "A": Atom("ampere", prefixes=_ALL),
    "S": Atom("siemens", prefixes=_ALL),
    "ohm": Atom("ohm", prefixes=_ALL),
    "K": Atom("kelvin", prefixes=_ALL),
    "T": Atom("tesla", prefixes=_ALL),
    # "Gs" is read as gauss by some and gigasecond by others: seconds take fractions only.
    "s": Atom("second", prefixes=_FRACTIONS),
    "Hz": Atom("hertz", prefixes=_ALL),
    "eV": Atom("electron_volt", prefixes=_ALL),
    "J": Atom("joule", prefixes=_ALL),
    "F": Atom("farad", prefixes=_ALL),
    "C": Atom("coulomb", prefixes=_ALL),
    "m": Atom("meter", prefixes=_ALL),
    "W": Atom("watt", prefixes=_ALL),
    "H": Atom("henry", prefixes=_ALL),
    "Pa": Atom("pascal", prefixes=_ALL),
    "bar": Atom("bar", prefixes=frozenset({"m", "u"})),
    "rad": Atom("radian", prefixes=frozenset({"m", "u"}), alone=True),
    "deg": Atom("degree", alone=True),
    "min": Atom("minute"),
    "h": Atom("hour"),
    "d": Atom("day"),
    # pint's gauss is of the Gaussian system, whose dimension is not that of a tesla.
    "G": Atom("tesla", scale=1e-4, prefixes=frozenset({"k", "m", "u"})),
    "e": Atom("elementary_charge"),
    "angstrom": Atom("angstrom"),
    "%": Atom("percent"),
    "ppm": Atom("ppm"),
    "e^2/h": Atom("conductance_quantum", scale=0.5, alone=True),
    "2e^2/h": Atom("conductance_quantum", alone=True),
}
OFFSETS: Final[dict[str, tuple[float, float]]] = {
    "degC": (1.0, 273.15),
    "degF": (5.0 / 9.0, 459.67 * 5.0 / 9.0),
}
"""Temperatures with a zero of their own: kelvin = value x factor + offset."""

_WORDS: Final[dict[str, str]] = {
    **{"volt": "V", "volts": "V", "ampere": "A", "amperes": "A", "amp": "A", "amps": "A"},
    **{"siemens": "S", "ohms": "ohm", "kelvin": "K", "tesla": "T", "gauss": "G", "hertz": "Hz"},
    **{"second": "s", "seconds": "s", "sec": "s", "minute": "min", "minutes": "min", "hour": "h"},
    **{"hours": "h", "day": "d", "days": "d", "farad": "F", "coulomb": "C", "metre": "m", "meter": "m"},
    **{"watt": "W", "watts": "W", "henry": "H", "pascal": "Pa", "radian": "rad", "radians": "rad"},
    **{"degree": "deg", "degrees": "deg", "percent": "%", "joule": "J", "electronvolt": "eV"},
    **{"celsius": "degC", "dimensionless": "1", "none": "1", "count": "1", "counts": "1"},
    **{"arb": "1", "arb.": "1", "a.u.": "1", "arb. units": "1", "arb. unit": "1"},
}
"""Names written out, in any case; the symbols themselves are case sensitive."""

_SIGNS: Final[tuple[tuple[str, str], ...]] = (
    *(("µ", "u"), ("μ", "u"), ("Ω", "ohm"), ("Ω", "ohm"), ("Å", "angstrom"), ("Å", "angstrom")),
    *(("°C", "degC"), ("°F", "degF"), ("°", "deg"), ("·", "*"), ("⋅", "*"), ("×", "*")),
    *(("⁻", "^-"), ("²", "^2"), ("³", "^3"), ("¹", "^1"), ("^-^", "^-"), ("**", "^"), ("−", "-")),
    *(("sqrt", "√"), ("rtHz", "√Hz"), ("^(1/2)", "^0.5"), ("^1/2", "^0.5"), ("^(-1/2)", "^-0.5")),
)
_LOGARITHMIC: Final = re.compile(r"^(dB|Np|B$)")
_TOKEN: Final = re.compile(r"\s*(?:(?P<sign>[()*/√^.])|(?P<number>-?\d+(?:\.\d+)?)|(?P<name>[A-Za-z%]+))")


def normalised(unit: str) -> str:
    """Fold the spellings of one unit (both micro signs, Ω, superscripts, words).

    Raises:
        InputError: the unit is logarithmic, or longer than any unit.
    """
    text = " ".join(unit.split())
    if len(text) > MAX_TEXT:
        raise _unknown(unit[:MAX_TEXT] + "…", text[:MAX_TEXT])
    if text.casefold() in _WORDS:
        return _WORDS[text.casefold()]
    for written, meant in _SIGNS:
        text = text.replace(written, meant)
    text = re.sub(r"\b([a-zA-Z]{0,2})Ohms?\b", r"\1ohm", text)
    text = re.sub(r"^2 ?\*? ?e", "2e", text)
    if _LOGARITHMIC.match(text):
        raise InputError(
            f"unit {unit!r} is a logarithm of a ratio, not a unit that values can be kept in",
            where="unit",
            remedy="convert to W, V or a plain ratio first, e.g. W = 1e-3 x 10^(dBm/10), and give that unit",
        )
    return text or "1"


def prefix_and_symbol(name: str) -> tuple[int, str] | None:
    """Split ``mV`` into (-3, "V"); None if ``name`` is no known symbol with a prefix it may take."""
    if name in ATOMS:
        return 0, name
    for length in (1, 2):
        prefix, symbol = name[:length], name[length:]
        if symbol in ATOMS and prefix in ATOMS[symbol].prefixes:
            return PREFIXES[prefix], symbol
    return None


class Parser:
    """One reading of a compound unit; ``unit`` is the text as written, ``text`` normalised."""

    def __init__(self, unit: str, text: str) -> None:
        """Cut ``text`` into signs, numbers and names; InputError if something else is in it."""
        self.unit = unit
        self.text = text
        self.tokens: list[tuple[str, str]] = []
        at = 0
        while at < len(text):
            match = _TOKEN.match(text, at)
            if match is None:
                raise _unknown(unit, text)
            self.tokens.append((str(match.lastgroup), match.group(str(match.lastgroup))))
            at = match.end()
        self.at = 0

    def terms(self) -> dict[str, float]:
        """Return {symbol with prefix: exponent}.

        Raises:
            InputError: the text is no unit, or has more than one meaning.
        """
        found = self._product()
        if self.at < len(self.tokens):
            raise _unknown(self.unit, self.text)
        return found

    def _peek(self) -> tuple[str, str]:
        return self.tokens[self.at] if self.at < len(self.tokens) else ("end", "")

    def _take(self) -> tuple[str, str]:
        token = self._peek()
        self.at += 1
        return token

    def _product(self) -> dict[str, float]:
        total: dict[str, float] = {}
        sign, divided = 1.0, False
        while True:
            for name, power in self._power().items():
                total[name] = total.get(name, 0.0) + sign * power
            kind, text = self._peek()
            if kind == "end" or text == ")":
                return total
            if divided and text != "/":
                raise self._ambiguous()
            if text == "/":
                sign, divided = -1.0, True
            if text in ("/", "*", "."):
                self._take()

    def _power(self) -> dict[str, float]:
        kind, text = self._take()
        root = 1.0
        if text == "√":
            root = 0.5
            kind, text = self._take()
        if text == "(":
            base = self._product()
            if self._take()[1] != ")":
                raise _unknown(self.unit, self.text)
        elif kind == "name":
            base = self._symbol(text)
        elif text == "1":
            return {}
        else:
            raise _unknown(self.unit, self.text)
        exponent = root * self._exponent()
        return {name: power * exponent for name, power in base.items()}

    def _exponent(self) -> float:
        kind, text = self._peek()
        if text == "^":
            self._take()
            kind, text = self._peek()
            if kind != "number":
                raise _unknown(self.unit, self.text)
        elif kind != "number":
            return 1.0
        self._take()
        if abs(float(text)) > 4:
            raise _unknown(self.unit, self.text)
        return float(text)

    def _symbol(self, name: str) -> dict[str, float]:
        name = _WORDS.get(name.casefold(), name) if len(name) > 2 else name
        split = prefix_and_symbol(name)
        if name in OFFSETS or (split is not None and ATOMS[split[1]].alone):
            raise InputError(
                f"{name!r} inside the compound unit {self.unit!r} has no single meaning",
                where="unit",
                remedy="use K for temperature differences, Hz for frequencies, and angles alone",
            )
        if split is None:
            raise _unknown(self.unit, name, whole=self.text)
        return {name: 1.0}

    def _ambiguous(self) -> InputError:
        return InputError(
            f"unit {self.unit!r} has a product after a solidus, which can be read in two ways",
            where="unit",
            remedy="put the denominator into brackets, e.g. m^2/(V s)",
        )


def _unknown(unit: str, part: str, *, whole: str | None = None) -> InputError:
    near = _nearest(part)
    if near and whole and whole != part:
        near = whole.replace(part, near, 1)
    hint = f"did you mean {near!r}?" if near else f"known are e.g. {', '.join(CANONICAL_UNITS[:9])}."
    return InputError(
        f"unit {unit!r} is not known (units are case sensitive)",
        where="unit",
        remedy=f"{hint} Correct the file, or give the unit in a layout.",
    )


def _nearest(text: str) -> str | None:
    """Return the known spelling nearest to ``text``: same letters first, then similar."""
    common = ("", "m", "u", "n", "p", "f", "k", "M", "G")
    spellings = [p + s for s in ATOMS for p in common if not p or p in ATOMS[s].prefixes]
    spellings += [*CANONICAL_UNITS, *OFFSETS, *_WORDS]
    for spelling in spellings:
        if spelling.casefold() == text.casefold():
            return spelling
    close = difflib.get_close_matches(text, spellings, n=1, cutoff=0.6)
    return close[0] if close else None
