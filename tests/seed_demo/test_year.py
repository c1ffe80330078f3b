from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

from seed_demo import calendar
from seed_demo.ageing import COMMON_SHIFT, OWN_SHIFT
from seed_demo.bench import measure
from seed_demo.folder import OLD_METHOD, write_folder
from seed_demo.wiring import line_of
from seed_demo.year import Year, build_year, wiring_at


@pytest.fixture(scope="module")
def year() -> Year:
    return build_year()


def truths(year: Year, device: str, subject: str, kind: str, quantity: str) -> dict[str, float]:
    """First true value of each stretch, by the stretch's name."""
    found: dict[str, float] = {}
    for planned in year.files:
        if (planned.device.name, planned.subject, planned.kind) == (device, subject, kind):
            direction = "up" if kind == "pinch-off" else None
            if planned.stretch not in found:
                found[planned.stretch] = measure(planned, year).truth(quantity, direction=direction)
    return found


def test_the_year_is_the_same_each_time_and_another_for_another_seed(year: Year) -> None:
    again, other = build_year(), build_year(1)
    assert again.shifts == year.shifts
    assert [f.path for f in again.files] == [f.path for f in year.files]
    assert [s.volts for s in again.states] == [s.volts for s in year.states]
    assert other.shifts != year.shifts


def test_a_part_of_the_year_is_the_same_as_within_the_whole(year: Year) -> None:
    part = build_year(stretches=("B4",))
    whole = [f for f in year.files if f.stretch == "B4"]
    assert [(f.path, f.volts, f.low) for f in part.files] == [(f.path, f.volts, f.low) for f in whole]


def test_the_year_holds_what_was_promised(year: Year) -> None:
    assert len(year.chips) == 2
    assert len(year.devices) == 4
    assert len(year.stays) >= 6
    assert {f.form for f in year.files} == {"nexus", "slip", "slip-comma"}
    assert len(year.files) + len(year.states) > 500
    assert {"power-loss", "rewired", "charge-jump"} <= {e.kind for e in year.events}


def test_everything_happens_while_the_chip_is_cold(year: Year) -> None:
    cold = {s.name: (s.base, s.end or calendar.YEAR_END) for s in year.stretches}
    assert all(cold[f.stretch][0] < f.at < cold[f.stretch][1] for f in year.files)
    for state in year.states:
        low, high = cold[state.key.split("/")[1]]
        assert low < state.at < high


def test_files_of_a_device_have_their_own_names_and_times(year: Year) -> None:
    assert len({f.path for f in year.files}) == len(year.files)
    assert len({(f.device.name, f.at) for f in year.files}) == len(year.files)


def test_volts_stay_inside_the_limits_of_gates_and_sources(year: Year) -> None:
    for planned in year.files:
        wiring = wiring_at(planned.device, planned.at)
        swept = planned.device.gate(planned.gate)
        assert swept.v_min < planned.low < planned.high < swept.v_max
        for gate in planned.device.gates:
            volts, line = planned.volts[gate.name], line_of(wiring, planned.device, gate.name)
            assert gate.v_min < volts < gate.v_max
            assert line.out_min < float(line.at_source(volts)) < line.out_max


def test_parents_and_judged_states_are_in_the_plan_before_they_are_named(year: Year) -> None:
    at = {state.key: state.at for state in year.states}
    assert len(at) == len(year.states)
    assert all(s.parent is None or at[s.parent] < s.at for s in year.states)
    assert all(j.at >= at[j.state] for j in year.judgements)
    assert {j.standing for j in year.judgements} == {"good", "poor"}


def test_shifts_have_the_stated_common_and_own_size() -> None:
    """Over many years: sd of the gates' mean and of what is left, full resets only."""
    means, rests = [], []
    for seed in range(60):
        for (device, stretch), shifts in build_year(seed, stretches=()).shifts.items():
            if device == "copse" and stretch != "B2b":
                values = np.asarray(list(shifts.values()))
                means.append(values.mean())
                rests.extend(values - values.mean())
    gates = 13
    common = np.sqrt(COMMON_SHIFT**2 + OWN_SHIFT**2 / gates)
    own = OWN_SHIFT * np.sqrt(1 - 1 / gates)
    # relative standard error of a standard deviation from n values is 1/sqrt(2 n)
    assert np.std(means) == pytest.approx(common, rel=3.9 / np.sqrt(2 * len(means)))
    assert np.std(rests) == pytest.approx(own, rel=3.9 / np.sqrt(2 * len(rests)))


def test_the_power_cut_moves_gates_less_than_a_warm_up(year: Year) -> None:
    cut: list[float] = []
    warm: list[float] = []
    for device in ("ferry", "copse", "stile"):
        for a, b, steps in (("B2a", "B2b", cut), ("B1", "B2a", warm), ("B2b", "B3", warm)):
            one, other = year.shifts[device, a], year.shifts[device, b]
            steps.extend(other[gate] - one[gate] for gate in one)
    assert np.sqrt(np.mean(np.square(cut))) < np.sqrt(np.mean(np.square(warm)))


def test_the_addition_voltage_of_the_jumping_sensor_drops_for_good(year: Year) -> None:
    found = truths(year, "ferry", "S1", "coulomb-peaks", "addition_voltage")
    before = [found[name] for name in ("B1", "B2a", "B2b", "B3")]
    after = [found[name] for name in ("B4", "B5")]
    assert max(after) < 0.94 * min(before)
    assert np.ptp(before) < 0.03 * np.mean(before)


def test_the_quiet_sensor_stays_within_its_scatter(year: Year) -> None:
    found = list(truths(year, "copse", "SW", "coulomb-peaks", "addition_voltage").values())
    assert np.ptp(found) < 0.02 * np.mean(found)


def test_the_drifting_gate_climbs_within_a_stretch(year: Year) -> None:
    files = [
        f for f in year.files if (f.device.name, f.gate, f.stretch) == ("copse", "B3", "B3") and f.both_ways
    ]
    days = np.asarray([(f.at - files[0].at).total_seconds() / 86400 for f in files])
    values = [measure(f, year).truth("threshold_voltage", direction="up") for f in files]
    assert np.polyfit(days, values, 1)[0] == pytest.approx(4e-4, rel=0.1)


def test_the_leak_is_seen_from_its_day_on(year: Year) -> None:
    leaks = {f.at: measure(f, year).values.max() for f in year.files if f.kind == "leakage"}
    assert {at >= calendar.LEAK_SEEN for at in leaks} == {True, False}
    assert all((most > 1e-9) == (at >= calendar.LEAK_SEEN) for at, most in leaks.items())


def test_the_rewiring_changes_the_dividers_of_the_plungers_only(year: Year) -> None:
    device = year.device("ferry")
    before, after = wiring_at(device, calendar.STAYS[0].begin), wiring_at(device, calendar.REWIRED)
    changed = {a.gate.split(":")[1] for a, b in zip(before, after, strict=True) if a.divider != b.divider}
    assert changed == {"P1", "P2"}


def test_the_old_script_gives_temperatures_too_small_by_the_ratio_of_widths(tmp_path: Path) -> None:
    part = build_year(stretches=("B1",))
    traces = write_folder(part, tmp_path)
    with (tmp_path / "old" / "ferry.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert {row["method"] for row in rows} == {OLD_METHOD}
    hot = [row for row in rows if row["quantity"] == "electron_temperature"]
    ratios = [float(row["value"]) / traces[row["source"]].truth("electron_temperature") for row in hot]
    # 3.525494/4.354638, each value scattering by 1 %
    assert np.mean(ratios) == pytest.approx(0.809596, abs=3.9 * 0.0081 / np.sqrt(len(ratios)))


def test_no_value_of_the_old_script_is_younger_than_the_change(tmp_path: Path) -> None:
    write_folder(build_year(stretches=("B3", "B4")), tmp_path)
    for table in (tmp_path / "old").iterdir():
        with table.open(encoding="utf-8", newline="") as file:
            assert all(
                row["at"] < f"{calendar.CODE_CHANGE:%Y-%m-%dT%H:%M:%SZ}" for row in csv.DictReader(file)
            )
