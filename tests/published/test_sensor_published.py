"""The sensitivity of a sensor dot against what its published line shape means."""

from __future__ import annotations

import numpy as np
import pytest

from registry.physics import sensor_response
from registry.physics.lineshapes import BOLTZMANN_EV, single_level, single_level_slope
from registry.physics.result import Given
from registry.samples import Axis, Samples, Signal

#: 100 mK at a lever arm of 0.1 eV/V: k_B T in gate volts.
THERMAL = BOLTZMANN_EV * 0.1 / 0.1
#: C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646: cosh^-2(u/2); steepest where
#: tanh^2(u/2) = 1/3, with the slope 2/(3 sqrt 3) per k_B T (derived).
STEEPEST = 2.0 / (3.0 * np.sqrt(3.0))
PLACE = 2.0 * np.arctanh(1.0 / np.sqrt(3.0))


def test_the_thermal_peak_is_steepest_where_derived() -> None:
    u = np.linspace(0.0, 5.0, 100_001)
    slope = -single_level_slope(u)
    assert float(np.max(slope)) == pytest.approx(STEEPEST, rel=1e-9)
    assert u[np.argmax(slope)] == pytest.approx(PLACE, abs=1e-4)


def test_a_sensor_dot_at_100_millikelvin_has_its_derived_sensitivity() -> None:
    x = np.linspace(-1e-3, 1e-3, 401)
    y = 1e-10 * single_level(x / THERMAL) + 1e-14 * np.random.default_rng(1).normal(size=401)
    samples = Samples("trace", (Axis("S1", "V", x, "gate"),), (Signal("current", "A", y),))
    result = sensor_response.run(samples, {"flank": Given("falling"), "shift": Given(1e-6)})
    found = {one.quantity: one.value for one in result.quantities}
    assert found["sensor_sensitivity"] == pytest.approx(1e-10 * STEEPEST / THERMAL, rel=5e-3)
    assert found["sensor_step"] == pytest.approx(1e-16 * STEEPEST / THERMAL, rel=5e-3)
    point = next(curve for curve in result.curves if curve.name == "operating point")
    assert point.x[0] == pytest.approx(PLACE * THERMAL, abs=0.05 * THERMAL)
