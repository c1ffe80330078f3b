"""Slopes, lever arm and capacitances of Coulomb diamonds in the constant-interaction model."""

from __future__ import annotations

import numpy as np
import pytest

from registry.physics import coulomb_diamonds
from registry.physics.result import Given
from registry.samples import Axis, FloatArray, Samples, Signal

#: A dot with C_g, C_s, C_d = 5, 10, 15 aF: lever arm 1/6, charging energy 5.34058878 meV,
#: peaks every 32.04353268 mV from 16.02176634 mV; worked out from R. Hanson et al., Rev. Mod.
#: Phys. 79 (2007) 1217, section II, with e = 1.602176634e-19 C (exact).
SPACING, FIRST, APEX = 32.04353268e-3, 16.02176634e-3, 5.34058878e-3
#: dV_bias/dV_gate of the edges "level = source" and "level = drain".
SLOPES = {"source": (0.25, -0.5), "both": (0.2857142857142857, -0.4)}
GATE = np.linspace(0.0, 0.1, 161)
BIAS = np.linspace(-4e-3, 4e-3, 81)


def _map(bias_at: str) -> Samples:
    """Transport windows between the published edges, rounded by 1.5 K at either lead."""
    rising, falling = SLOPES[bias_at]
    width = 8.617333262145179e-05 * 1.5 * 6.0
    y: FloatArray = np.zeros((BIAS.size, GATE.size))
    for k in range(3):
        from_peak = GATE[None, :] - FIRST - k * SPACING
        y += np.tanh((BIAS[:, None] / rising - from_peak) / (2.0 * width))
        y -= np.tanh((BIAS[:, None] / falling - from_peak) / (2.0 * width))
    axes = (Axis("bias", "V", BIAS), Axis("P1", "V", GATE))
    return Samples("map", axes, (Signal("current", "A", 1e-10 * y),))


@pytest.mark.parametrize("bias_at", SLOPES)
def test_the_published_slopes_give_the_published_capacitances(bias_at: str) -> None:
    # R. Hanson et al., Rev. Mod. Phys. 79 (2007) 1217, section II; L. P. Kouwenhoven et al.,
    # Rep. Prog. Phys. 64 (2001) 701
    result = coulomb_diamonds.run(_map(bias_at), {"bias_at": Given(bias_at)})
    found = {one.quantity: one.value for one in result.quantities if one.subject is None}
    assert found["lever_arm"] == pytest.approx(1.0 / 6.0, rel=5e-3)
    assert found["addition_voltage"] == pytest.approx(SPACING, rel=1e-3)
    assert found["charging_energy"] == pytest.approx(APEX, rel=5e-3)
    truth = {"gate": 5e-18, "source": 10e-18, "drain": 15e-18, "total": 30e-18}
    for name, farads in truth.items():
        assert found[f"{name}_capacitance"] == pytest.approx(farads, rel=1e-2)


@pytest.mark.parametrize("bias_at", SLOPES)
def test_the_lever_arm_is_the_harmonic_sum_of_the_published_slopes(bias_at: str) -> None:
    # 1/alpha = 1/m+ + 1/|m-|, whatever lead the bias is at (the same sources)
    rising, falling = SLOPES[bias_at]
    assert 1.0 / (1.0 / rising + 1.0 / abs(falling)) == pytest.approx(1.0 / 6.0)
    result = coulomb_diamonds.run(_map(bias_at), {})
    lines = {curve.name: curve for curve in result.curves}
    for name, slope in (("rising", rising), ("falling", falling)):
        line = lines[f"peak 2 {name}"]
        assert np.polyfit(line.x, line.y, 1)[0] == pytest.approx(slope, rel=1e-2)
