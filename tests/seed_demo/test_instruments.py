from __future__ import annotations

import numpy as np
import pytest

from seed_demo.catalogue import devices
from seed_demo.devices import BOLTZMANN_EV, FloatArray
from seed_demo.instruments import (
    coulomb_peaks,
    dot_transition,
    leakage_trace,
    pinch_off,
    up_and_down,
)
from seed_demo.noise import Noise
from seed_demo.shapes import ChannelLaw, fermi_step, peak_shape

DEVICES = {device.name: device for device in devices()}
# below the meter's step: what remains is the physics
SILENT = Noise(1e-18)


def rng() -> np.random.Generator:
    return np.random.default_rng(1)


def full_width(x: FloatArray, y: FloatArray) -> float:
    """Width at half of the maximum, crossings interpolated."""
    top, half = int(np.argmax(y)), 0.5 * y.max()
    left = np.interp(half, y[: top + 1], x[: top + 1])
    right = np.interp(-half, -y[top:], x[top:])
    return float(right - left)


# C. W. J. Beenakker, Phys. Rev. B 44 (1991) 1646: full widths in kT, values of cosh^-2 and x/sinh x
@pytest.mark.parametrize(
    ("line_shape", "width", "at_two"),
    [("single-level", 3.5254943, 0.419974342), ("multi-level", 4.3546380, 0.55144113)],
)
def test_peak_shapes_have_the_published_width_and_values(
    line_shape: str, width: float, at_two: float
) -> None:
    x = np.linspace(-12, 12, 240_001)
    shape = peak_shape(x * BOLTZMANN_EV * 0.1, 0.1, line_shape)
    assert full_width(x, shape) == pytest.approx(width, abs=1e-6)
    assert np.interp(2.0, x, shape) == pytest.approx(at_two, abs=1e-8)


@pytest.mark.parametrize(("name", "site", "in_kt"), [("ferry", "S1", 3.525494), ("copse", "SW", 4.354638)])
def test_a_simulated_peak_is_as_wide_as_temperature_and_lever_arm_say(
    name: str, site: str, in_kt: float
) -> None:
    device = DEVICES[name]
    volts = device.working_volts()
    centre = device.transition_volts(site, device.site(site).charges, volts, {})
    sweep = np.linspace(centre - 2e-3, centre + 2e-3, 8001)
    trace = coulomb_peaks(device, site, sweep, volts, {}, height=1e-6, noise=SILENT, rng=rng())
    wanted = in_kt * BOLTZMANN_EV * device.electron_temperature / device.lever_arm(site)
    # the constant offset of 0.2 % of the height widens the peak by less than 0.3 %
    assert full_width(sweep, trace.values) == pytest.approx(wanted, rel=3e-3)
    assert trace.truth("peak_width") == pytest.approx(wanted, rel=1e-6)
    assert sweep[np.argmax(trace.values)] == pytest.approx(trace.truth("peak_position", "peak 1"), abs=1e-6)


def test_peak_spacing_is_the_addition_energy_over_the_lever_arm() -> None:
    device = DEVICES["ferry"]
    volts = device.working_volts()
    sweep = np.linspace(volts["SP"] - 0.055, volts["SP"] + 0.055, 1201)
    trace = coulomb_peaks(device, "S1", sweep, volts, {}, height=4e-10, noise=SILENT, rng=rng())
    assert sum(t.quantity == "peak_position" for t in trace.truths) == 4
    assert trace.truth("addition_energy") == pytest.approx(device.site("S1").addition_energy)


def test_fermi_step_is_half_filled_in_the_middle_and_rises_by_two_ln_nine_kt() -> None:
    energy = np.linspace(-2e-4, 2e-4, 40_001)
    filled = fermi_step(energy, 0.1)
    width = np.interp(0.9, filled, energy) - np.interp(0.1, filled, energy)
    assert np.interp(0.0, energy, filled) == pytest.approx(0.5)
    # 2 ln 9 kT at 100 mK is 37.8684 ueV
    assert width == pytest.approx(37.8684e-6, rel=1e-5)


@pytest.mark.parametrize(("name", "sensor"), [("ferry", "S1"), ("kiln", "S1")])
def test_a_transition_is_half_way_at_the_true_volts(name: str, sensor: str) -> None:
    device = DEVICES[name]
    volts = device.working_volts()
    place = device.transition_volts("D1", 1, volts, {})
    sweep = np.linspace(place - 8e-3, place + 8e-3, 4001)
    trace = dot_transition(device, "D1", sensor, 1, sweep, volts, {}, height=4e-7, noise=SILENT, rng=rng())
    ends = 0.5 * (trace.values[0] + trace.values[-1])
    assert np.interp(place, sweep, trace.values) == pytest.approx(ends, rel=1e-4)
    slope = np.polyfit(sweep[:1000], trace.values[:1000], 1)[0]
    step = trace.values[-1] - trace.values[0] - slope * (sweep[-1] - sweep[0])
    assert step == pytest.approx(trace.truth("sensor_step"), rel=0.02)


@pytest.mark.parametrize("name", ["stile", "kiln"])
def test_the_steepest_tangent_of_a_channel_meets_zero_at_the_true_threshold(name: str) -> None:
    device = DEVICES[name]
    gate = device.gates[1]
    sweep = np.linspace(gate.threshold - 0.1, gate.threshold + 0.1, 20_001)
    trace = pinch_off(device, gate.name, sweep, {}, bias=1.0, noise=SILENT, rng=rng())
    slope = np.gradient(trace.values, sweep)
    steepest = int(np.argmax(np.abs(slope)))
    meets = sweep[steepest] - trace.values[steepest] / slope[steepest]
    assert meets == pytest.approx(trace.truth("threshold_voltage", direction="up"), abs=2e-5)


def test_up_and_down_sweeps_differ_by_the_hysteresis() -> None:
    device, law = DEVICES["stile"], ChannelLaw(hysteresis=5e-3)
    sweep = up_and_down(0.3, 0.6, 301)
    trace = pinch_off(device, "BL", sweep, {"BL": 0.01}, bias=1e-4, noise=SILENT, rng=rng(), law=law)
    up, down = trace.values[:301], trace.values[:300:-1]
    assert np.array_equal(sweep[:301], sweep[:300:-1])
    assert np.interp(5e-10, up, sweep[:301]) - np.interp(5e-10, down, sweep[:301]) == pytest.approx(
        5e-3, abs=2e-5
    )
    assert trace.truth("hysteresis_voltage") == 5e-3


def test_a_shift_moves_the_threshold_by_itself() -> None:
    device, sweep = DEVICES["ferry"], np.linspace(0.2, 0.7, 101)
    truths = [
        pinch_off(device, "B1", sweep, {"B1": shift}, bias=1e-4, noise=SILENT, rng=rng()).truth(
            "threshold_voltage", direction="up"
        )
        for shift in (0.0, 0.021)
    ]
    assert truths[1] - truths[0] == pytest.approx(0.021)


def test_a_sound_gate_draws_no_current_below_the_onset() -> None:
    sweep = np.linspace(0.0, 1.5, 151)
    trace = leakage_trace("P3", sweep, 1.3, 2e-8, noise=SILENT, rng=rng())
    assert not trace.values[sweep < 1.3].any()
    assert trace.values[-1] == pytest.approx(trace.truth("leakage_current"), rel=1e-3)
