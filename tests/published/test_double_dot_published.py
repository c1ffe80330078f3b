"""Double-dot energies, slopes, spacings and virtual gates from the constant-interaction model.

W. G. van der Wiel et al., Rev. Mod. Phys. 75 (2003) 1, section II (formulas; the worked
numbers are constructed from them).
"""

from __future__ import annotations

import numpy as np
import pytest

from registry.physics.result import Given
from registry.physics.stability_map import run
from registry.samples import Axis, FloatArray, Samples, Signal

#: dot-gate pulls in eV/V and charging energies in meV of C_g1 = 4, C_g2 = 5, C_L = 20,
#: C_R = 25, C_m = 10 aF.
PULLS = np.array([[0.12698413, 0.03968254], [0.03174603, 0.13492063]])
ENERGIES = np.array([[5.0862750286, 1.2715687571], [1.2715687571, 4.3233337743]])


def _ground_state(x: FloatArray, y: FloatArray) -> FloatArray:
    """Sensor signal of the charge state of least energy, averaged over the readout's 0.4 meV."""
    states = [(a, b) for a in range(5) for b in range(5)]
    level = [1e3 * (PULLS[i, 0] * x[None, :] + PULLS[i, 1] * y[:, None]) for i in range(2)]
    cost = np.array(
        [0.5 * np.array(n) @ ENERGIES @ np.array(n) - n[0] * level[0] - n[1] * level[1] for n in states]
    )
    weight = np.exp(-(cost - cost.min(axis=0)) / 0.08)
    steps = np.array([1.0 * a + 0.7 * b for a, b in states])
    return np.asarray(np.tensordot(steps, weight / weight.sum(axis=0), 1), dtype=float)


def test_the_worked_double_dot_is_read_back_from_its_map() -> None:
    x = y = np.linspace(0.02, 0.12, 120)
    z = _ground_state(x, y) + 0.03 * np.random.default_rng(1).normal(size=(120, 120))
    axes = (Axis("P2", "V", y, "gate"), Axis("P1", "V", x, "gate"))
    arms = {"lever_arm_P1": Given(0.12698413), "lever_arm_P2": Given(0.13492063)}
    result = run(Samples("map", axes, (Signal("sensor", "A", z),)), arms)
    found = {(one.quantity, one.subject): one.value for one in result.quantities}
    # slopes dVg2/dVg1 -3.2 and -0.2353
    assert found["cross_capacitance_ratio", "P1<-P2"] == pytest.approx(1.0 / 3.2, abs=0.01)
    assert found["cross_capacitance_ratio", "P2<-P1"] == pytest.approx(0.23529412, abs=0.01)
    # dVg1 = e/C_g1, dVg2 = e/C_g2
    assert found["addition_voltage", "P1"] == pytest.approx(40.05441585e-3, rel=5e-3)
    assert found["addition_voltage", "P2"] == pytest.approx(32.04353268e-3, rel=0.01)
    assert found["addition_energy", "P1"] == pytest.approx(5.0862750286e-3, rel=5e-3)
    assert found["interdot_charging_energy", None] == pytest.approx(1.2715687571e-3, rel=0.02)
    assert found["mutual_capacitance", None] == pytest.approx(10e-18, rel=0.02)


def test_the_virtual_gate_matrix_follows_from_slopes_alone() -> None:
    # C. Volk et al., npj Quantum Inf. 5 (2019) 29; the numbers are constructed: slopes
    # dV2/dV1 of -2.857 (dot 1) and -0.25 (dot 2) give the matrix rows (1, 0.35), (0.25, 1)
    x = y = np.linspace(0.0, 0.1, 100)
    u, v = x[None, :] + 0.35 * y[:, None], 0.25 * x[None, :] + y[:, None]
    axes = (Axis("P2", "V", y, "gate"), Axis("P1", "V", x, "gate"))
    noise = 0.05 * np.random.default_rng(2).normal(size=(100, 100))
    for level, subject, entry in ((u, "P1<-P2", 0.35), (v, "P2<-P1", 0.25)):
        signal = Signal("sensor", "A", np.tanh((level - 0.06) / 2e-3) + noise)
        result = run(Samples("map", axes, (signal,)), {})
        found = {one.subject: one.value for one in result.quantities if one.unit == "1"}
        assert found[subject] == pytest.approx(entry, abs=0.01)
