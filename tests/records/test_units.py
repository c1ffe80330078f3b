"""Unit texts as people and instruments write them."""

from __future__ import annotations

import numpy as np
import pytest

from registry.errors import InputError
from registry.records.units import CANONICAL_UNITS, canonical, to_si

SPELLINGS = [
    ("mV", 1e-3, "V"),
    ("µV", 1e-6, "V"),  # U+00B5
    ("μV", 1e-6, "V"),  # U+03BC
    ("uV", 1e-6, "V"),
    ("Volts", 1.0, "V"),
    ("nA", 1e-9, "A"),
    ("kOhm", 1e3, "ohm"),
    ("MΩ", 1e6, "ohm"),
    ("meV", 1e-3, "eV"),
    ("", 1.0, "1"),
    ("a.u.", 1.0, "1"),
    ("%", 1e-2, "1"),
    ("ppm", 1e-6, "1"),
    ("min", 60.0, "s"),
    ("V2/Hz", 1.0, "V^2/Hz"),
    ("µeV²/Hz", 1e-12, "eV^2/Hz"),
    ("µeV/√Hz", 1e-6, "eV/√Hz"),
    ("nV/sqrt(Hz)", 1e-9, "V/√Hz"),
    ("pA/Hz^(1/2)", 1e-12, "A/√Hz"),
    ("meV/mV", 1.0, "eV/V"),
    ("nA/mV", 1e-6, "S"),
    ("cm^2/(V s)", 1e-4, "m^2/(V s)"),
    ("1/cm^2", 1e4, "1/m^2"),
    ("kG", 0.1, "T"),
    ("mbar", 100.0, "Pa"),
    ("1/s", 1.0, "Hz"),
    ("mV·s⁻¹", 1e-3, "V/s"),
]


@pytest.mark.parametrize(("text", "factor", "unit"), SPELLINGS)
def test_a_unit_text_becomes_its_canonical_unit(text: str, factor: float, unit: str) -> None:
    assert canonical(text)[1:] == (0.0, unit)
    assert canonical(text)[0] == pytest.approx(factor, rel=1e-15)


@pytest.mark.parametrize("unit", CANONICAL_UNITS)
def test_a_canonical_unit_is_its_own(unit: str) -> None:
    assert canonical(unit) == (1.0, 0.0, unit)


@pytest.mark.parametrize("unit", [u for u in CANONICAL_UNITS if u not in ("1", "1/Hz", "rad")])
def test_a_thousandth_of_a_canonical_unit_is_found_by_dimension_too(unit: str) -> None:
    times_a_thousand = f"kHz*s*{unit}" if unit[0] != "1" else f"kHz*s/({unit[2:]})"
    assert canonical(times_a_thousand)[1:] == (0.0, unit)
    assert canonical(times_a_thousand)[0] == pytest.approx(1e3, rel=1e-14)


def test_degrees_celsius_have_an_offset() -> None:
    values, unit = to_si([-273.15, 0.0], "degC")
    assert unit == "K"
    assert values == pytest.approx([0.0, 273.15])


def test_millivolts_become_the_nearest_double_of_the_decimal() -> None:
    written = np.arange(1, 5000)
    values, _ = to_si(written, "mV")
    assert values.tolist() == [float(f"{n}e-3") for n in written]


def test_a_joule_per_volt_is_a_lever_arm_and_a_coulomb_a_charge() -> None:
    assert canonical("J/V")[2] == "eV/V"
    assert canonical("aC")[2] == "C"


BAD = {
    "unknown": ("Quux", "known are"),
    "wrong case": ("hz", "'Hz'"),
    "wrong case of a prefix": ("mv", "'mV'"),
    "kelvin for kilo": ("KOhm", "'kohm'"),
    "decibel": ("dB", "convert"),
    "decibel milliwatt": ("dBm", "10^(dBm/10)"),
    "angular frequency": ("rad/s", "angles alone"),
    "two meanings": ("cm^2/V s", "brackets"),
    "dimension not kept": ("V*s", "kept dimensions"),
    "open bracket": ("(V", "mean"),
    "no denominator": ("V/", "mean"),
    "gigasecond or gauss": ("Gs", "mean"),
    "far too long": ("V" * 5000, "known"),
    "deeply nested": ("(" * 40, "known"),
    "large power": ("V^9999", "known"),
}


@pytest.mark.parametrize("flaw", BAD)
def test_a_unit_that_has_no_single_meaning_is_refused_with_a_remedy(flaw: str) -> None:
    text, hint = BAD[flaw]
    with pytest.raises(InputError) as caught:
        canonical(text, where="data.txt, column 2")
    assert caught.value.where == "data.txt, column 2"
    assert hint in caught.value.remedy
