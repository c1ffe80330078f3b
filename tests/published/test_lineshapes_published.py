"""Coulomb-peak and charge-step shapes against published and independently computed values."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.optimize import brentq, minimize_scalar

from registry.physics import lineshapes

# C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646: cosh^-2(x/2kT) and (x/kT)/sinh(x/kT);
# tabulated values recomputed from the formulas.
ENERGIES = np.array([0.0, 0.5, 1.0, 2.0, 3.0, 4.0, 5.0, 8.0, 10.0])
SINGLE = [1, 0.940014849, 0.786447733, 0.419974342, 0.180706639, 0.0706508249, 0.0265922267]
SINGLE += [0.00134095068, 0.000181583231]
CLASSICAL = [1, 0.959517376, 0.850918128, 0.55144113, 0.299464709, 0.146574281, 0.0673825292]
CLASSICAL += [0.00536740265, 0.000907998597]


def test_boltzmann_over_charge_is_that_of_the_si() -> None:
    # 26th CGPM (2018), Resolution 1: both constants exact
    assert pytest.approx(8.617333262145179e-05, rel=1e-15) == lineshapes.BOLTZMANN_EV


def test_the_single_level_shape_has_its_tabulated_values() -> None:
    np.testing.assert_allclose(lineshapes.single_level(ENERGIES), SINGLE, rtol=3e-9)


def test_the_multi_level_shape_has_its_tabulated_values() -> None:
    np.testing.assert_allclose(lineshapes.multi_level(ENERGIES), CLASSICAL, rtol=3e-9)


def _half_width(shape: object) -> float:
    assert callable(shape)
    return float(brentq(lambda u: float(shape(np.array([u]))[0]) - 0.5, 0.1, 90.0, xtol=1e-14))


def test_the_full_widths_are_3_525_and_4_355_thermal_energies() -> None:
    # Beenakker 1991: 4 arccosh(sqrt 2) and the root of u = sinh(u)/2
    assert 2.0 * _half_width(lineshapes.single_level) == pytest.approx(3.5254943480781726, rel=1e-13)
    assert 2.0 * _half_width(lineshapes.multi_level) == pytest.approx(4.354637969930614, rel=1e-13)
    assert pytest.approx(3.5254943480781726, rel=1e-15) == lineshapes.SINGLE_LEVEL_FWHM
    assert pytest.approx(4.354637969930614, rel=1e-15) == lineshapes.MULTI_LEVEL_FWHM


def test_the_usual_approximation_of_the_multi_level_shape_is_off_by_0_0077() -> None:
    # Beenakker 1991 gives cosh^-2(x/2.5kT) as an approximation; its error recomputed
    def excess(u: float) -> float:
        approximate = lineshapes.single_level(np.array([u / 1.25]))
        return -float(np.abs(approximate - lineshapes.multi_level(np.array([u])))[0])

    worst = minimize_scalar(excess, bounds=(1.0, 3.0), method="bounded", options={"xatol": 1e-10})
    assert -float(worst.fun) == pytest.approx(0.0076546744, abs=1e-9)
    assert float(worst.x) == pytest.approx(1.88512, abs=1e-4)


@pytest.mark.parametrize(
    ("g", "width", "peak"),
    [
        (0.1, 3.59246, 0.243369),
        (0.5, 3.86381, 0.219611),
        (1.0, 4.21077, 0.195044),
        (2.0, 4.92944, 0.158073),
        (5.0, 7.25944, 0.0977408),
    ],
)
def test_the_thermal_lorentzian_has_the_widths_of_the_convolution(
    g: float, width: float, peak: float
) -> None:
    # E. B. Foxman et al., Phys. Rev. B 47 (1993) 10020: thermally broadened Lorentzian;
    # values by quadrature of the convolution
    assert float(lineshapes.thermal_lorentzian_fwhm(g)[0]) == pytest.approx(width, abs=6e-6)
    assert 2.0 * _half_width(lambda u: lineshapes.thermal_lorentzian(u, g)) == pytest.approx(width, abs=6e-6)

    def folded(v: float, u: float) -> float:
        return float(0.25 * np.cosh((u - v) / 2.0) ** -2 * (g / 2.0 / np.pi) / (v * v + g * g / 4.0))

    centre = quad(folded, -80.0, 80.0, args=(0.0,), points=[0.0], epsabs=1e-12, limit=200)[0]
    aside = quad(folded, -80.0, 80.0, args=(3.0,), points=[0.0, 3.0], epsabs=1e-12, limit=200)[0]
    assert centre == pytest.approx(peak, abs=6e-7)
    shape: NDArray[np.float64] = lineshapes.thermal_lorentzian(np.array([3.0]), g)
    assert float(shape[0]) == pytest.approx(aside / centre, rel=1e-8)


def test_the_charge_step_is_4_394_thermal_energies_wide() -> None:
    # Fermi function: 10-90 % width 2 ln 9 k_B T (derived)
    low, high = (
        brentq(
            lambda u, part=part: float(lineshapes.fermi_step(np.array([u]))[0]) - part, -9.0, 9.0, xtol=1e-14
        )
        for part in (0.1, 0.9)
    )
    assert high - low == pytest.approx(4.394449154672439, rel=1e-12)
    assert pytest.approx(4.394449154672439, rel=1e-15) == lineshapes.TEN_TO_NINETY
    at_100_mk = lineshapes.TEN_TO_NINETY * lineshapes.BOLTZMANN_EV * 0.1
    assert at_100_mk == pytest.approx(37.8684e-6, rel=2e-6)


@pytest.mark.parametrize(
    ("kelvin", "single_ev", "multi_ev"),
    [(300.0, 91.1411e-3, 112.576e-3), (4.2, 1275.98e-6, 1576.07e-6), (0.1, 30.3804e-6, 37.5254e-6)],
)
def test_thermal_widths_in_energy(kelvin: float, single_ev: float, multi_ev: float) -> None:
    # 3.5255 k_B T and 4.3546 k_B T (Beenakker 1991), recomputed with the SI of 2019
    assert lineshapes.SINGLE_LEVEL_FWHM * lineshapes.BOLTZMANN_EV * kelvin == pytest.approx(
        single_ev, rel=5e-6
    )
    assert lineshapes.MULTI_LEVEL_FWHM * lineshapes.BOLTZMANN_EV * kelvin == pytest.approx(multi_ev, rel=5e-6)
