from __future__ import annotations

import numpy as np
import pytest

from seed_demo.catalogue import devices
from seed_demo.devices import Device, falloff_lever_arms

DEVICES = {device.name: device for device in devices()}


@pytest.mark.parametrize("device", devices(), ids=lambda d: d.name)
class TestEveryDevice:
    def test_volts_and_energies_lie_in_the_usual_ranges(self, device: Device) -> None:
        # common practice, no source: lever arms 0.02-0.3 eV/V, charging energies 0.5-10 meV
        for site in device.sites:
            assert 0.02 <= device.lever_arm(site.name) <= 0.3
            assert 0.5e-3 <= site.charging_energy <= 10e-3
        for gate in device.gates:
            assert gate.v_min < min(gate.threshold, gate.working)
            assert max(gate.threshold, gate.working) < gate.v_max

    def test_names_are_used_once_and_sites_stand_on_gates_of_the_device(self, device: Device) -> None:
        names = [gate.name for gate in device.gates]
        assert len(set(names)) == len(names)
        assert all(set(site.gates) <= set(names) and site.gate in site.gates for site in device.sites)

    def test_working_volts_keep_the_pair_limits(self, device: Device) -> None:
        volts = device.working_volts()
        assert all(p.low < volts[p.gate_a] - volts[p.gate_b] < p.high for p in device.pairs)

    def test_own_gate_pulls_most(self, device: Device) -> None:
        for row, site in zip(device.lever_arms, device.sites, strict=True):
            assert device.gates[int(np.argmax(row))].name == site.gate

    def test_a_site_at_work_holds_its_charges(self, device: Device) -> None:
        volts = device.working_volts()
        for site in device.sites:
            held = device.addition_potential(site.name, site.charges, volts, {})
            more = device.addition_potential(site.name, site.charges + 1, volts, {})
            assert held == pytest.approx(-0.5 * site.addition_energy)
            assert more == pytest.approx(0.5 * site.addition_energy)

    def test_retuning_restores_every_site_after_a_shift(self, device: Device) -> None:
        rng = np.random.default_rng(5)
        shifts = {gate.name: 0.02 * rng.standard_normal() for gate in device.gates}
        volts = device.retuned(device.working_volts(), shifts)
        off = [device.lever(site.name, volts, shifts) for site in device.sites]
        assert np.max(np.abs(off)) < 1e-12


def test_at_the_transition_the_addition_potential_vanishes() -> None:
    device, shifts = DEVICES["copse"], {"B2": 0.011, "P3": -0.006}
    volts = device.working_volts()
    volts["P2"] = device.transition_volts("D2", 1, volts, shifts)
    assert device.addition_potential("D2", 1, volts, shifts) == pytest.approx(0.0, abs=1e-15)


def test_transitions_are_an_addition_energy_over_the_lever_arm_apart() -> None:
    device = DEVICES["stile"]
    site, volts = device.site("D"), device.working_volts()
    spacing = device.transition_volts("D", 8, volts, {}) - device.transition_volts("D", 7, volts, {})
    assert spacing == pytest.approx(site.addition_energy / device.lever_arm("D"))


def test_holes_enter_with_falling_volts() -> None:
    device = DEVICES["kiln"]
    volts = device.working_volts()
    assert device.transition_volts("D1", 2, volts, {}) < device.transition_volts("D1", 1, volts, {})


def test_a_shift_common_to_all_gates_moves_a_transition_by_the_row_sum() -> None:
    device = DEVICES["ferry"]
    volts, shift = device.working_volts(), 0.013
    shifts = {gate.name: shift for gate in device.gates}
    moved = device.transition_volts("D1", 1, volts, shifts) - device.transition_volts("D1", 1, volts, {})
    assert moved == pytest.approx(shift * device.lever_arms[0].sum() / device.lever_arm("D1"))


def test_a_neighbours_charge_pushes_a_transition_up() -> None:
    device = DEVICES["ferry"]
    volts = device.working_volts()
    alone = device.transition_volts("D1", 1, volts, {})
    beside = device.transition_volts("D1", 1, volts, {}, others={"D2": 2})
    assert beside - alone == pytest.approx(device.mutual[0, 1] / device.lever_arm("D1"))


def test_lever_arms_fall_off_with_distance() -> None:
    device = DEVICES["copse"]
    arms = falloff_lever_arms(device.gates, device.sites[:1], {"D1": 0.1}, 60.0)[0]
    plungers = [arm for gate, arm in zip(device.gates, arms, strict=True) if gate.role == "plunger"]
    assert plungers == sorted(plungers, reverse=True)
