"""Threshold and subthreshold swing against constructed laws of the literature."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.constants import Boltzmann, elementary_charge

from registry.physics.pinch_off import run
from registry.physics.result import Result
from registry.physics.turn_on import tangent_intercept
from registry.samples import Axis, FloatArray, Samples, Signal, Sweep

# D. K. Schroder, Semiconductor Material and Device Characterization, 3rd ed. (Wiley 2006),
# chapter 4, and A. Ortiz-Conde et al., Microelectron. Reliab. 42 (2002) 583-596 (both from
# memory): I = beta (V_G - V_T - V_DS/2) V_DS, so that the intercept is V_T + V_DS/2.  The
# JEDEC dictionary's "extrapolated threshold voltage" is the intercept itself.
V_T, V_DS, BETA = 0.5, 0.010, 1e-3
VOLTS: FloatArray = np.arange(1001, dtype=np.float64) * 1e-3
INTERCEPT = 0.505

# The same with a smooth turn-on, n = 1.2 at 300 K, and mobility falling by theta = 0.5 /V;
# numbers recomputed on a grid of 1 mV.
N_VT = 1.2 * Boltzmann * 300.0 / elementary_charge
SMOOTH = (
    BETA * V_DS * N_VT * np.logaddexp(0.0, (VOLTS - V_T) / N_VT) / (1.0 + 0.5 * np.maximum(VOLTS - V_T, 0.0))
)
SMOOTH_PEAK, SMOOTH_INTERCEPT = 0.610, 0.48940

# n ln(10) k_B T / e with n = 1, recomputed from the exact constants (CODATA 2018).
THERMAL_LIMIT_MV = {
    300.0: 59.5264,
    77.0: 15.2785,
    4.2: 0.833370,
    4.0: 0.793686,
    1.0: 0.198421,
    0.1: 0.0198421,
}


def _run(volts: FloatArray, current: FloatArray) -> Result:
    axis = Axis("gate", "V", volts, "gate")
    sweep = Sweep(0, volts.size, "up" if volts[-1] > volts[0] else "down")
    return run(Samples("trace", (axis,), (Signal("drain", "A", current),), (sweep,)), {})


def _value(result: Result, name: str) -> tuple[float, float]:
    one = next(one for one in result.quantities if one.quantity == name)
    assert one.value is not None, one.why
    assert one.standard_uncertainty is not None
    return one.value, one.standard_uncertainty


def test_the_ideal_law_has_its_intercept_half_a_drain_bias_above_threshold() -> None:
    current = BETA * V_DS * np.maximum(VOLTS - V_T - V_DS / 2.0, 0.0)
    assert tangent_intercept(0.8, float(np.interp(0.8, VOLTS, current)), BETA * V_DS) == pytest.approx(
        INTERCEPT
    )
    value, u = _value(_run(VOLTS, current), "threshold_voltage")
    assert u < 1e-3
    assert value == pytest.approx(INTERCEPT, abs=2.0 * u)
    slope, slope_u = _value(_run(VOLTS, current), "max_transconductance")
    assert slope == pytest.approx(BETA * V_DS, abs=2.0 * slope_u)


def test_a_smooth_turn_on_with_falling_mobility_has_its_tangent_where_recomputed() -> None:
    slope = np.gradient(SMOOTH, VOLTS)
    peak = int(np.argmax(slope))
    assert VOLTS[peak] == pytest.approx(SMOOTH_PEAK)
    recomputed = tangent_intercept(float(VOLTS[peak]), float(SMOOTH[peak]), float(slope[peak]))
    assert recomputed == pytest.approx(SMOOTH_INTERCEPT, abs=5e-6)


@pytest.mark.parametrize("direction", [1, -1])
@pytest.mark.parametrize("noise", [0.0, 1e-3, 1e-2])
def test_the_smooth_turn_on_is_met_within_the_stated_uncertainty(noise: float, direction: int) -> None:
    rng = np.random.default_rng(12)
    current = SMOOTH + noise * SMOOTH[-1] * rng.normal(size=SMOOTH.size)
    value, u = _value(_run(VOLTS[::direction], current[::direction]), "threshold_voltage")
    assert u < 1e-4 + noise
    assert value == pytest.approx(SMOOTH_INTERCEPT, abs=2.0 * u + 5e-6)


@pytest.mark.parametrize("kelvin", THERMAL_LIMIT_MV)
def test_the_swing_of_thermal_carriers_is_the_thermal_limit(kelvin: float) -> None:
    thermal = Boltzmann * kelvin / elementary_charge
    z = np.linspace(-30.0, 40.0, 700)
    # a drop over the leads bends the line, as every real device does
    current = np.logaddexp(0.0, z) / (1.0 + 0.01 * np.maximum(z, 0.0))
    value, u = _value(_run(0.2 + thermal * z, 1e-9 * current), "subthreshold_swing")
    assert 1e3 * value == pytest.approx(THERMAL_LIMIT_MV[kelvin], rel=2e-3)
    assert u < 0.02 * value


def test_an_ideality_factor_scales_the_swing() -> None:
    value, u = _value(_run(VOLTS, SMOOTH), "subthreshold_swing")
    assert 1e3 * value == pytest.approx(1.2 * THERMAL_LIMIT_MV[300.0], rel=2e-3)
    assert u < 0.02 * value
