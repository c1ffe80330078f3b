from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from registry.physics import lineshapes
from registry.samples import FloatArray

Shape = Callable[[FloatArray], FloatArray]

PEAKS: dict[str, tuple[Shape, Shape]] = {
    "single-level": (lineshapes.single_level, lineshapes.single_level_slope),
    "multi-level": (lineshapes.multi_level, lineshapes.multi_level_slope),
    "lifetime": (
        lambda u: lineshapes.thermal_lorentzian(u, 1.3),
        lambda u: lineshapes.thermal_lorentzian_slopes(u, 1.3)[0],
    ),
}


@pytest.mark.parametrize("name", PEAKS)
def test_a_peak_has_height_one_and_is_even(name: str) -> None:
    shape, _ = PEAKS[name]
    u = np.linspace(-9.0, 9.0, 61)
    assert float(shape(np.zeros(1))[0]) == pytest.approx(1.0, abs=1e-14)
    np.testing.assert_allclose(shape(u), shape(-u), rtol=1e-12)


@pytest.mark.parametrize("name", PEAKS)
def test_a_slope_is_the_derivative_of_its_shape(name: str) -> None:
    shape, slope = PEAKS[name]
    u = np.linspace(-12.0, 12.0, 97)
    numerical = (shape(u + 1e-5) - shape(u - 1e-5)) / 2e-5
    np.testing.assert_allclose(slope(u), numerical, atol=2e-10)


@pytest.mark.parametrize("name", PEAKS)
@pytest.mark.parametrize("u", [0.0, 1e-320, 1e-9, 1e-4, 745.0, 1e5, 1e300])
def test_a_shape_is_finite_everywhere(name: str, u: float) -> None:
    for function in PEAKS[name]:
        both = function(np.array([u, -u]))
        assert np.all(np.isfinite(both))
        assert np.all(np.abs(both) <= 1.0 + 1e-12)


def test_the_multi_level_series_joins_its_quotient() -> None:
    u = lineshapes.SMALL * np.array([0.999, 1.001])
    np.testing.assert_allclose(lineshapes.multi_level(u), 1.0 - u**2 / 6.0, rtol=1e-14)
    np.testing.assert_allclose(lineshapes.multi_level_slope(u), -u / 3.0, rtol=1e-6)


def test_without_lifetime_the_folded_peak_is_the_thermal_one() -> None:
    u = np.linspace(-20.0, 20.0, 41)
    np.testing.assert_allclose(lineshapes.thermal_lorentzian(u, 0.0), lineshapes.single_level(u), atol=1e-14)


def test_far_above_temperature_the_folded_peak_is_a_lorentzian() -> None:
    u, g = np.linspace(-600.0, 600.0, 41), 400.0
    np.testing.assert_allclose(
        lineshapes.thermal_lorentzian(u, g), 1.0 / (1.0 + (2.0 * u / g) ** 2), atol=1e-4
    )


@pytest.mark.parametrize("g", [0.02, 0.7, 5.0, 60.0])
def test_the_lifetime_derivatives_are_those_of_shape_and_width(g: float) -> None:
    u, h = np.linspace(-8.0, 8.0, 17), 1e-5 * g
    upper, lower = (lineshapes.thermal_lorentzian(u, g + s * h) for s in (1.0, -1.0))
    np.testing.assert_allclose(
        lineshapes.thermal_lorentzian_slopes(u, g)[1], (upper - lower) / (2.0 * h), atol=1e-8
    )
    wide, narrow = (lineshapes.thermal_lorentzian_fwhm(g + s * h)[0] for s in (1.0, -1.0))
    assert float(lineshapes.thermal_lorentzian_fwhm(g)[1]) == pytest.approx(
        float(wide - narrow) / (2.0 * h), rel=1e-6
    )


def test_the_step_is_the_integral_of_the_thermal_peak() -> None:
    u = np.linspace(-30.0, 30.0, 6001)
    slope = np.gradient(lineshapes.fermi_step(u), u)
    np.testing.assert_allclose(slope, 0.25 * lineshapes.single_level(u), atol=1e-5)
