"""A measurement becomes parameters that know their method, their inputs and what they share."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import text

from registry.errors import DamageError, InputError, LookupFailed, MillikeepError
from registry.keeping.admitting import admit
from registry.keeping.auditing import audit
from registry.keeping.changing import withdraw
from registry.keeping.deriving import Derived, derive, fit_file
from registry.keeping.loading import load_parameters
from registry.physics.methods import METHODS, Method
from registry.physics.result import Quantity

BOLTZMANN_EV = 8.617333262e-5


def measured(lab: Any, file: Path, **more: Any) -> str:
    """Id of the measurement of a file, in a state of day 1."""
    done = admit(lab.registry, [file], tuning=lab.state(1), at=lab.day(2), **more)
    assert not done.failed
    return str(done.measurements[0].kept.hex)


def peaks(path: Path, *, seed: int = 1, lever_arm: float = 0.1, kelvin: float = 0.1) -> Path:
    """Four thermally broadened peaks 4 mV apart."""
    volts = np.linspace(0.0, 0.02, 2001)
    current = np.random.default_rng(seed).normal(0.0, 2e-12, volts.size)
    for centre in (0.004, 0.008, 0.012, 0.016):
        current += 1e-10 / np.cosh(lever_arm * (volts - centre) / (2 * BOLTZMANN_EV * kelvin)) ** 2
    rows = "".join(f"{v:.6f}\t{i:.6e}\n" for v, i in zip(volts, current, strict=True))
    path.write_text(f"P1 [V]\tcurrent [A]\n{rows}")
    return path


def named(derived: Derived, quantity: str, subject: str | None = None) -> Quantity:
    return next(q for q in derived.result.quantities if (q.quantity, q.subject) == (quantity, subject))


def row_of(lab: Any, derived: Derived, quantity: str, subject: str | None = None) -> dict[str, Any]:
    place = derived.result.quantities.index(named(derived, quantity, subject))
    return dict(lab.row("parameter", derived.parameters[place].hex))


def test_deriving_twice_gives_the_same_ids_and_records_nothing(
    lab: Any, tmp_path: Path, trace: Any, count: Any
) -> None:
    measurement = measured(lab, trace(tmp_path / "t.txt"))
    (first,) = derive(lab.registry, "pinch-off", [measurement])
    before = count(lab.registry, "journal")
    (again,) = derive(lab.registry, "pinch-off", [measurement[:12]])
    assert first.kept.new
    assert not again.kept.new
    assert [p.hex for p in again.parameters] == [p.hex for p in first.parameters]
    assert (again.kept.hex, again.measurement) == (first.kept.hex, measurement)
    assert count(lab.registry, "journal") == before
    assert audit(lab.registry).findings == ()


def test_what_is_kept_is_what_the_method_says_of_the_bare_file(lab: Any, tmp_path: Path, trace: Any) -> None:
    file = trace(tmp_path / "t.txt")
    bare = fit_file("pinch-off", file)
    (derived,) = derive(lab.registry, "pinch-off", [measured(lab, file)])
    assert len(derived.parameters) == len(bare.quantities) > 2
    for quantity, kept in zip(bare.quantities, derived.parameters, strict=True):
        row = lab.row("parameter", kept.hex)
        assert (row["quantity"], row["unit"], row["why"]) == (quantity.quantity, quantity.unit, quantity.why)
        assert (row["value"] is None) == (quantity.value is None)
        if quantity.value is not None:
            assert row["value"] == quantity.value
            assert row["standard_uncertainty"] == quantity.standard_uncertainty
        assert (row["at"], row["subject"]) == (lab.day(2), quantity.subject)


def test_an_analysis_names_method_version_source_and_settings(lab: Any, tmp_path: Path, trace: Any) -> None:
    (derived,) = derive(lab.registry, "pinch-off", [measured(lab, trace(tmp_path / "t.txt"))])
    row = lab.row("analysis", derived.kept.hex)
    assert (row["method"], row["version"]) == ("pinch-off", METHODS["pinch-off"].facts.version)
    assert row["source_digest"] == derived.result.source_digest
    assert set(derived.result.settings) <= set(json.loads(row["settings"]))


def test_other_given_values_are_another_analysis(lab_here: Any, tmp_path: Path) -> None:
    measurement = measured(lab_here, peaks(tmp_path / "p.txt"))
    ids = set()
    for given in ({}, {"lever_arm": "0.1"}, {"lever_arm": "0.1±0.008"}, {"lever_arm": "0.1 +- 0.008"}):
        (derived,) = derive(lab_here.registry, "coulomb-peaks", [measurement], given=given)
        ids.add(derived.kept.hex)
    assert len(ids) == 3


def lever_arm_record(lab: Any, folder: Path) -> str:
    head = "cooldown,quantity,subject,value,standard_uncertainty,unit,at,source"
    (folder / "p.csv").write_text(f"{head}\nC1,lever_arm,Q1,0.1,0.008,eV/V,2026-01-02T10:00:00Z,notebook\n")
    load_parameters(lab.registry, lab.device, folder / "p.csv")
    with lab.registry.reading() as connection:
        sql = text("SELECT digest FROM parameter WHERE quantity = 'lever_arm'")
        return bytes(connection.execute(sql).scalar_one()).hex()


def test_a_parameter_given_by_its_id_brings_uncertainty_and_shared_part(lab: Any, tmp_path: Path) -> None:
    lever_arm = lever_arm_record(lab, tmp_path)
    measurement = measured(lab, peaks(tmp_path / "p.txt"))
    (derived,) = derive(lab.registry, "coulomb-peaks", [measurement], given={"lever_arm": lever_arm[:10]})
    row = row_of(lab, derived, "addition_energy")
    assert row["value"] == pytest.approx(4e-4, rel=0.01)
    shared = json.loads(row["shared"])
    assert set(shared) == {lever_arm}
    assert shared[lever_arm] == pytest.approx(row["value"] * 0.08, rel=1e-6)
    assert row["standard_uncertainty"] >= abs(shared[lever_arm])
    with lab.registry.reading() as connection:
        sql = text("SELECT role FROM link WHERE record_no = :no AND target_no = :other")
        other = lab.row("parameter", lever_arm)["no"]
        assert connection.execute(sql, {"no": derived.kept.no, "other": other}).scalar_one() == "inputs"
    assert audit(lab.registry).findings == ()


def test_two_analyses_share_a_typed_lever_arm_of_one_device(lab_here: Any, tmp_path: Path) -> None:
    ids = [measured(lab_here, peaks(tmp_path / f"{i}.txt", seed=i)) for i in range(2)]
    both = derive(lab_here.registry, "coulomb-peaks", ids, given={"lever_arm": "0.1±0.008"})
    sources = [set(json.loads(row_of(lab_here, one, "addition_energy")["shared"])) for one in both]
    assert sources[0] == sources[1]
    assert len(sources[0]) == 1


def test_a_withdrawn_lever_arm_taints_what_was_made_with_it(lab_here: Any, tmp_path: Path) -> None:
    from registry.keeping.naming import withdrawn

    lever_arm = lever_arm_record(lab_here, tmp_path)
    measurement = measured(lab_here, peaks(tmp_path / "p.txt"))
    (derived,) = derive(lab_here.registry, "coulomb-peaks", [measurement], given={"lever_arm": lever_arm})
    withdraw(lab_here.registry, lever_arm, why="wrong dot", at=lab_here.day(5))
    with lab_here.registry.reading() as connection:
        assert all(withdrawn(connection, one.no) for one in (derived.kept, *derived.parameters))
    with pytest.raises(InputError, match="withdrawn"):
        derive(lab_here.registry, "coulomb-peaks", [measurement], given={"lever_arm": lever_arm})


def test_a_refused_fit_is_recorded_with_its_reasons(lab: Any, tmp_path: Path, trace: Any) -> None:
    (derived,) = derive(lab.registry, "pinch-off", [measured(lab, trace(tmp_path / "t.txt", shift=20.0))])
    assert derived.result.refused
    assert lab.row("analysis", derived.kept.hex)["refused"] == derived.result.refused
    for kept in derived.parameters:
        row = lab.row("parameter", kept.hex)
        assert row["value"] is None
        assert row["why"]
    assert audit(lab.registry).findings == ()


def test_a_withdrawn_measurement_is_refused(lab: Any, tmp_path: Path, trace: Any, count: Any) -> None:
    measurement = measured(lab, trace(tmp_path / "t.txt"))
    withdraw(lab.registry, measurement, why="wrong file", at=lab.day(3))
    with pytest.raises(InputError, match="withdrawn"):
        derive(lab.registry, "pinch-off", [measurement])
    assert count(lab.registry, "analysis") == 0


@pytest.mark.parametrize(
    ("method", "more", "word"),
    [
        ("guessing", {}, "guessing"),
        ("pinch-off", {"subject": "Q9"}, "Q9"),
        ("pinch-off", {"given": {"level": "much"}}, "much"),
        ("pinch-off", {"given": {"level": "-1"}}, "level"),
        ("pinch-off", {"given": {"level": "1±-1"}}, "negative"),
        ("pinch-off", {"given": {"colour": "red"}}, "colour"),
        ("pinch-off", {"given": {"signal": "voltage"}}, "voltage"),
        ("pinch-off", {"given": {"level": "abcdef0123"}}, "abcdef0123"),
        ("coulomb-peaks", {"given": {"model": "round"}}, "round"),
    ],
)
def test_what_cannot_be_derived_is_told_and_nothing_is_recorded(
    lab_here: Any, tmp_path: Path, trace: Any, count: Any, method: str, more: dict[str, Any], word: str
) -> None:
    measurement = measured(lab_here, trace(tmp_path / "t.txt"))
    with pytest.raises(MillikeepError) as caught:
        derive(lab_here.registry, method, [measurement], **more)
    assert word in str(caught.value)
    assert count(lab_here.registry, "analysis") == 0


def test_a_state_is_no_measurement(lab_here: Any) -> None:
    with pytest.raises(LookupFailed, match="is a tuning"):
        derive(lab_here.registry, "pinch-off", [lab_here.state(1)])


def test_a_stored_file_that_changed_is_damage(lab_here: Any, tmp_path: Path, trace: Any) -> None:
    measurement = measured(lab_here, trace(tmp_path / "t.txt"))
    stored = lab_here.registry.files.open_path(next(iter(lab_here.registry.files)))
    stored.chmod(0o644)
    stored.write_bytes(stored.read_bytes().replace(b"1", b"2"))
    with pytest.raises(DamageError):
        derive(lab_here.registry, "pinch-off", [measurement])


@pytest.mark.parametrize("subject", ["P1", "Q1"])
def test_the_subject_is_that_of_the_summary_values_alone(lab_here: Any, tmp_path: Path, subject: str) -> None:
    measurement = measured(lab_here, peaks(tmp_path / "p.txt"))
    (derived,) = derive(lab_here.registry, "coulomb-peaks", [measurement], subject=subject)
    subjects = {q.subject for q in derived.result.quantities}
    assert subject in subjects
    assert "peak 1" in subjects
    assert None not in subjects
    assert lab_here.row("analysis", derived.kept.hex)["subject"] == subject


# --- volts at the source ----------------------------------------------------------------

SOURCE_LAYOUT = """format = "text"
[[axis]]
name = "{name}"
unit = "V"
level = "source"
column = 1
[[signal]]
name = "current"
unit = "A"
column = 2
"""


def at_source(file: Path, out: Path) -> Path:
    """The same trace with its axis in volts at the source of line L1: (V - 0.1) x 5."""
    rows = [line.split("\t") for line in file.read_text().splitlines()[1:]]
    out.write_text("".join(f"{(float(v) - 0.1) * 5:.9f}\t{i}\n" for v, i in rows))
    return out


@pytest.mark.parametrize("axis", ["L1", "P1"])
def test_a_source_axis_goes_through_the_divider_whose_uncertainty_is_shared(
    lab_here: Any, tmp_path: Path, trace: Any, axis: str
) -> None:
    gate_file = trace(tmp_path / "gate.txt", shift=0.2)
    (tmp_path / "layout.toml").write_text(SOURCE_LAYOUT.format(name=axis))
    source = measured(lab_here, at_source(gate_file, tmp_path / "s.txt"), layout=tmp_path / "layout.toml")
    (by_gate,) = derive(lab_here.registry, "pinch-off", [measured(lab_here, gate_file)])
    (by_source,) = derive(lab_here.registry, "pinch-off", [source])
    one = row_of(lab_here, by_gate, "threshold_voltage")
    two = row_of(lab_here, by_source, "threshold_voltage")
    assert two["value"] == pytest.approx(one["value"], abs=0.05 * one["standard_uncertainty"])
    (part,) = json.loads(two["shared"]).values()
    # V = S / d + 0.1, so that dV/dd x u(d) = -(V - 0.1) / 5 x 0.01.
    expected = -(one["value"] - 0.1) / 5 * 0.01
    assert abs(expected) > 2e-4
    assert part == pytest.approx(expected, abs=0.02 * one["standard_uncertainty"])
    whole = math.hypot(one["standard_uncertainty"], part)
    assert two["standard_uncertainty"] == pytest.approx(whole, rel=0.05)


def test_all_traces_behind_one_divider_share_one_part(lab_here: Any, tmp_path: Path, trace: Any) -> None:
    (tmp_path / "layout.toml").write_text(SOURCE_LAYOUT.format(name="L1"))
    sources = []
    for seed in range(2):
        file = at_source(trace(tmp_path / f"g{seed}.txt", seed=seed, shift=0.2), tmp_path / f"s{seed}.txt")
        (derived,) = derive(
            lab_here.registry, "pinch-off", [measured(lab_here, file, layout=tmp_path / "layout.toml")]
        )
        sources.append(set(json.loads(row_of(lab_here, derived, "threshold_voltage")["shared"])))
    assert sources[0] == sources[1]


def test_values_of_another_computer_are_those_on_record(
    lab_here: Any, tmp_path: Path, trace: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    measurement = measured(lab_here, trace(tmp_path / "t.txt"))
    (first,) = derive(lab_here.registry, "pinch-off", [measurement])
    run = Method.run

    def elsewhere(self: Method, samples: Any, given: Any) -> Any:
        from dataclasses import replace

        result = run(self, samples, given)
        moved = [q if q.value is None else replace(q, value=q.value * (1 + 1e-15)) for q in result.quantities]
        return replace(result, quantities=tuple(moved))

    monkeypatch.setattr(Method, "run", elsewhere)
    (again,) = derive(lab_here.registry, "pinch-off", [measurement])
    assert [p.hex for p in again.parameters] == [p.hex for p in first.parameters]


def test_an_unknown_method_or_file_is_told_without_a_registry(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="pinch-off"):
        fit_file("guessing", tmp_path / "x.txt")
    with pytest.raises(InputError):
        fit_file("pinch-off", tmp_path / "x.txt")
