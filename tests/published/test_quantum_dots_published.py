"""Temperatures and lever arms from published line shapes, through the whole methods."""

from __future__ import annotations

import numpy as np
import pytest

from registry.physics import coulomb_peaks, dot_transition
from registry.physics.lineshapes import BOLTZMANN_EV, fermi_step, multi_level, single_level
from registry.physics.result import Given
from registry.samples import Axis, FloatArray, Samples, Signal

#: 100 mK at a lever arm of 0.1 eV/V: k_B T in gate volts.
THERMAL = BOLTZMANN_EV * 0.1 / 0.1


def _trace(x: FloatArray, y: FloatArray) -> Samples:
    return Samples("trace", (Axis("P1", "V", x, "gate"),), (Signal("current", "A", y),))


@pytest.mark.parametrize(
    ("model", "shape", "millivolts"),
    [("single-level", single_level, 0.303804), ("multi-level", multi_level, 0.375254)],
)
def test_a_peak_at_100_millikelvin_has_its_published_width(
    model: str, shape: object, millivolts: float
) -> None:
    # C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646: FWHM 3.5255 and 4.3546 k_B T
    assert callable(shape)
    x = np.linspace(-2e-3, 2e-3, 401)
    given = {"lever_arm": Given(0.1), "model": Given(model)}
    result = coulomb_peaks.run(_trace(x, 1e-10 * shape((x - 2e-4) / THERMAL)), given)
    found = {one.quantity: one.value for one in result.quantities if one.subject is None}
    assert found["peak_width"] == pytest.approx(1e-3 * millivolts, rel=5e-6)
    assert found["electron_temperature"] == pytest.approx(0.1, rel=5e-6)


def test_a_step_at_100_millikelvin_has_its_published_width() -> None:
    # Fermi step: 10-90 % width 2 ln 9 k_B T, 0.378684 mV at 100 mK and 0.1 eV/V (derived)
    x = np.linspace(-2e-3, 2e-3, 401)
    result = dot_transition.run(
        _trace(x, 1e-10 * fermi_step((x - 1e-4) / THERMAL)), {"electron_temperature": Given(0.1)}
    )
    found = {one.quantity: one.value for one in result.quantities}
    assert found["lever_arm"] == pytest.approx(0.1, rel=1e-6)
    assert found["transition_voltage"] == pytest.approx(1e-4, abs=1e-10)
    fit = next(curve for curve in result.curves if curve.name == "fit")
    low, high = np.interp([0.1e-10, 0.9e-10], fit.y, fit.x)
    assert 1e3 * (high - low) == pytest.approx(0.378684, rel=2e-3)
