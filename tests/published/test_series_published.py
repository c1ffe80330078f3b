"""Published conventions of spectra, virtual gates and thermal widths, through the whole methods."""

from __future__ import annotations

import numpy as np
import pytest

from registry.physics import cross_talk, thermometry
from registry.physics.cross_matrix import assemble
from registry.physics.lineshapes import BOLTZMANN_EV
from registry.physics.result import Given, Quantity
from registry.physics.welch import welch_spectrum
from registry.samples import Axis, Samples, Signal

#: A constructed lever-arm matrix (eV/V) and the virtual-gate matrix made from it.
ALPHA = np.array([[0.10, 0.035, 0.010], [0.03, 0.12, 0.025], [0.008, 0.045, 0.11]])
VIRTUAL = np.array([[1.0, 0.35, 0.1], [0.25, 1.0, 0.208333333], [0.072727273, 0.409090909, 1.0]])


def test_line_slopes_make_the_virtual_gate_matrix() -> None:
    # T. Hensgens et al., Nature 548 (2017) 70; dV_own/dV_other = -alpha_other/alpha_own
    other = np.linspace(0.0, 0.02, 11)
    ratios: list[Quantity] = []
    for column in range(3):
        rows = [row for row in range(3) if row != column]
        signals = tuple(
            Signal(f"P{row + 1}", "V", 0.3 - ALPHA[row, column] / ALPHA[row, row] * other) for row in rows
        )
        samples = Samples("trace", (Axis(f"P{column + 1}", "V", other),), signals)
        ratios += cross_talk.run(samples, {}).quantities
    matrix = assemble(ratios)
    order = [matrix.gates.index(f"P{k}") for k in (1, 2, 3)]
    rows = [matrix.dots.index(f"P{k}") for k in (1, 2, 3)]
    assert matrix.ratio[np.ix_(rows, order)] == pytest.approx(VIRTUAL, rel=1e-8)
    assert matrix.missing == ()


@pytest.mark.parametrize(
    ("width", "microvolts"), [("single-level", 303.804), ("multi-level", 375.254), ("ten-ninety", 378.684)]
)
def test_widths_at_100_millikelvin_mean_their_published_lever_arm(width: str, microvolts: float) -> None:
    # C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646: FWHM 3.5255 and 4.3546 k_B T; step 2 ln 9 k_B T
    t = np.geomspace(0.01, 1.0, 12)
    t[6] = 0.1
    electrons = (0.05**5 + t**5) ** 0.2
    samples = Samples(
        "trace", (Axis("T_mc", "K", t),), (Signal("width", "V", 1e-6 * microvolts * electrons / 0.1),)
    )
    result = thermometry.run(samples, {"width": Given(width)})
    found = {one.quantity: one.value for one in result.quantities}
    assert found["lever_arm"] == pytest.approx(0.1, rel=5e-4)
    assert found["base_electron_temperature"] == pytest.approx(0.05, rel=3e-3)


def test_thermal_energies_are_those_of_the_si() -> None:
    # 26th CGPM (2018), Resolution 1: k_B/e
    assert pytest.approx(8.617333262145179e-05, rel=1e-15) == BOLTZMANN_EV


def test_white_samples_have_the_one_sided_density_2_s_squared_dt() -> None:
    # derived: variance = int_0^Nyquist S df, so S = 2 s^2 dt (s = 1, dt = 1 ms: 2e-3 per Hz)
    y = np.random.default_rng(1).normal(size=200_000)
    spectrum = welch_spectrum(y, 1e-3, 2000)
    bins = spectrum.nu * spectrum.f.size / 1.944
    assert np.mean(spectrum.density) == pytest.approx(2e-3, rel=4.0 * np.sqrt(2.0 / bins))


def test_the_degrees_of_freedom_of_a_welch_ordinate_follow_the_overlap() -> None:
    # P. D. Welch, IEEE Trans. Audio Electroacoust. 15 (1967) 70; Hann, 50 %: correlation 1/36
    spectrum = welch_spectrum(np.random.default_rng(2).normal(size=4096), 1.0, 512)
    assert spectrum.single.shape[1] == 15
    assert spectrum.nu == pytest.approx(2.0 * 15 / (1.0 + 14 / (18.0 * 15)))
