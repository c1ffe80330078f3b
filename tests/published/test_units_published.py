"""Units and times against what the standards say."""

from __future__ import annotations

import pytest

from registry.errors import InputError
from registry.reading.times import microseconds
from registry.records.units import canonical

# NIST SP 811 (2008) and SI Brochure 9th ed. section 5; ronna, quetta, ronto and quecto: 27th
# CGPM (2022), Resolution 3 (these four from memory).
SI_PREFIXES = {
    **{"Q": 30, "R": 27, "Y": 24, "Z": 21, "E": 18, "P": 15, "T": 12, "G": 9, "M": 6, "k": 3, "h": 2},
    **{"da": 1, "d": -1, "c": -2, "m": -3, "µ": -6, "n": -9, "p": -12, "f": -15, "a": -18, "z": -21},
    **{"y": -24, "r": -27, "q": -30},
}


@pytest.mark.parametrize("prefix", SI_PREFIXES)
def test_every_si_prefix_is_its_power_of_ten(prefix: str) -> None:
    assert canonical(f"{prefix}V") == (float(f"1e{SI_PREFIXES[prefix]}"), 0.0, "V")


# The Unified Code for Units of Measure, version 2.2 (2024): codes, case sensitive.
UCUM = {
    "V": (1.0, "V"),
    "mV": (1e-3, "V"),
    "uV": (1e-6, "V"),
    "eV": (1.0, "eV"),
    "ueV": (1e-6, "eV"),
    "K": (1.0, "K"),
    "mK": (1e-3, "K"),
    "Hz": (1.0, "Hz"),
    "kHz": (1e3, "Hz"),
    "GHz": (1e9, "Hz"),
    "V/s": (1.0, "V/s"),
    "mV/min": (1e-3 / 60.0, "V/s"),
    "eV/V": (1.0, "eV/V"),
    "F": (1.0, "F"),
    "aF": (1e-18, "F"),
    "A": (1.0, "A"),
    "nA": (1e-9, "A"),
    "pA": (1e-12, "A"),
    "Ohm": (1.0, "ohm"),
    "kOhm": (1e3, "ohm"),
    "MOhm": (1e6, "ohm"),
    "S": (1.0, "S"),
    "uS": (1e-6, "S"),
    "T": (1.0, "T"),
    "mT": (1e-3, "T"),
    "s": (1.0, "s"),
    "min": (60.0, "s"),
    "h": (3600.0, "s"),
    "1": (1.0, "1"),
    "V2/Hz": (1.0, "V^2/Hz"),
    "ueV2/Hz": (1e-12, "eV^2/Hz"),
    "%": (1e-2, "1"),
}


@pytest.mark.parametrize("code", UCUM)
def test_every_ucum_code_of_the_trade_is_read(code: str) -> None:
    factor, unit = UCUM[code]
    assert canonical(code)[1:] == (0.0, unit)
    assert canonical(code)[0] == pytest.approx(factor, rel=1e-15)


def test_joule_and_conductance_quantum_follow_from_the_defining_constants() -> None:
    # SI Brochure 9th ed. (2019), table 1: e = 1.602176634e-19 C, h = 6.62607015e-34 J s, exact.
    e, h = 1.602176634e-19, 6.62607015e-34
    assert canonical("J")[0] == pytest.approx(1.0 / e, rel=2e-16)
    assert canonical("e^2/h")[0] == pytest.approx(e * e / h, rel=1e-15)
    assert canonical("e")[0] == pytest.approx(e, rel=1e-15)


# RFC 3339 (2002), section 5.8: the five examples; seconds recomputed from the text.
RFC_3339 = {
    "1985-04-12T23:20:50.52Z": 482196050.52,
    "1996-12-19T16:39:57-08:00": 851042397.0,
    "1990-12-31T23:59:60Z": 662688000.0,  # a leap second: the first instant of 1991
    "1990-12-31T15:59:60-08:00": 662688000.0,
    "1937-01-01T12:00:27.87+00:20": -1041337172.13,
}


@pytest.mark.parametrize("text", RFC_3339)
def test_the_examples_of_rfc_3339_are_their_instants(text: str) -> None:
    assert microseconds(text, where="x") == (round(RFC_3339[text] * 1e6), True)


@pytest.mark.parametrize(
    "text", ["1985-W15-5", "1985-102T23:20Z", "19850412T232050Z", "1985-04-31T00:00:00Z"]
)
def test_iso_8601_forms_outside_rfc_3339_are_refused(text: str) -> None:
    # RFC 3339 section 5.6: no week dates, ordinal dates or basic form.
    with pytest.raises(InputError, match="no date and time"):
        microseconds(text, where="x")
