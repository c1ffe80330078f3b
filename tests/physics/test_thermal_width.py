from __future__ import annotations

import numpy as np
import pytest

from registry.physics.lineshapes import BOLTZMANN_EV
from registry.physics.result import Given
from registry.physics.thermal_width import Estimate, lever_arm_from, temperature_from, thermal_quantities

WIDTH = Estimate(8e-5, 4e-6, 50.0)


def test_temperature_and_lever_arm_are_each_others_inverse() -> None:
    kelvin, _, _ = temperature_from(WIDTH, Given(0.1))
    lever_arm, _, _ = lever_arm_from(WIDTH, Given(kelvin))
    assert kelvin == pytest.approx(8e-6 / BOLTZMANN_EV)
    assert lever_arm == pytest.approx(0.1)


def test_relative_uncertainties_add_in_squares() -> None:
    for convert, given in ((temperature_from, Given(0.1, 0.005)), (lever_arm_from, Given(0.1, 0.005))):
        value, u, shared = convert(WIDTH, given)
        assert u / value == pytest.approx(np.hypot(0.05, 0.05))
        assert shared / value == pytest.approx(0.05)


def test_of_both_given_the_lever_arm_is_used() -> None:
    given = {"lever_arm": Given(0.1), "electron_temperature": Given(3.0)}
    (only,) = thermal_quantities(WIDTH, None, given, {})
    assert only.quantity == "electron_temperature"
    assert only.degrees_of_freedom == 50.0


def test_no_width_gives_no_value_but_the_reason() -> None:
    (only,) = thermal_quantities(None, "hidden", {"lever_arm": Given(0.1)}, {})
    assert (only.value, only.standard_uncertainty, only.why) == (None, None, "hidden")
