"""The interdot transition against published formulas and values computed from them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq

from registry.physics import interdot_transition
from registry.physics.interdot_shape import polarisation, polarisation_slopes
from registry.physics.lineshapes import BOLTZMANN_EV
from registry.physics.result import Given
from registry.samples import Axis, Samples, Signal

#: k_B T at 100 mK in microelectronvolt.
THERMAL = 1e6 * BOLTZMANN_EV * 0.1

# L. DiCarlo et al., Phys. Rev. Lett. 92 (2004) 226801: n = (1/2)[1 + (e/Omega) tanh(Omega/2kT)],
# Omega = sqrt(e^2 + 4 t^2); values recomputed from the formula for t = 10 ueV, 100 mK
DETUNING = np.array([-100.0, -50.0, -20.0, -10.0, 0.0, 10.0, 20.0, 50.0, 100.0])
OCCUPATION = [0.009716773, 0.037551968, 0.172033301, 0.307461425, 0.5]
OCCUPATION += [0.692538575, 0.827966699, 0.962448032, 0.990283227]


def test_the_occupation_has_its_tabulated_values() -> None:
    assert pytest.approx(8.617333262, abs=1e-9) == THERMAL
    np.testing.assert_allclose(0.5 * (1.0 + polarisation(DETUNING, 20.0, THERMAL)), OCCUPATION, atol=1e-9)


@pytest.mark.parametrize(
    ("t", "slope", "width"),
    [
        (0.0, 0.0580225906, 37.868433),
        (5.0, 0.0522829604, 43.240216),
        (10.0, 0.0410593535, 58.700589),
        (20.0, 0.0245225894, 106.923069),
    ],
)
def test_slope_and_width_have_their_tabulated_values(t: float, slope: float, width: float) -> None:
    by_detuning, _, _ = polarisation_slopes(np.zeros(1), 2.0 * t, THERMAL)
    assert by_detuning[0] == pytest.approx(slope, abs=1e-10)
    half = brentq(
        lambda e: float(polarisation(np.array([e]), 2.0 * t, THERMAL)[0]) - 0.8, 1.0, 400.0, xtol=1e-10
    )
    assert 2.0 * half == pytest.approx(width, abs=1e-6)


def test_a_cold_transition_is_sixteen_thirds_of_t_wide() -> None:
    # T -> 0 limit of the same formula
    half = brentq(lambda e: float(polarisation(np.array([e]), 20.0, 1e-3)[0]) - 0.8, 1.0, 400.0, xtol=1e-12)
    assert 2.0 * half == pytest.approx(16.0 / 3.0 * 10.0, rel=1e-9)


def test_the_whole_method_finds_the_published_coupling() -> None:
    x = np.linspace(-2e-3, 2e-3, 401)
    y = 1e-10 * polarisation(1e6 * 0.1 * (x - 1e-4), 20.0, THERMAL) / 2.0
    samples = Samples("trace", (Axis("detuning", "V", x, "gate"),), (Signal("sensor", "A", y),))
    given = {"lever_arm": Given(0.1), "electron_temperature": Given(0.1)}
    found = {one.quantity: one.value for one in interdot_transition.run(samples, given).quantities}
    assert found["tunnel_coupling"] == pytest.approx(10e-6, rel=1e-3)
    assert found["transition_voltage"] == pytest.approx(1e-4, abs=1e-9)
    assert found["sensor_step"] == pytest.approx(1e-10, rel=1e-3)
