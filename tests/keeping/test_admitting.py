"""A measured file is checked, copied and tied to a state; each file stands alone."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import text

from registry.errors import InputError, LookupFailed
from registry.keeping import admitting
from registry.keeping.admitting import admit
from registry.keeping.auditing import audit
from registry.keeping.changing import amend, withdraw
from registry.keeping.cooling import begin_cooldown
from registry.keeping.describing import add_device
from registry.keeping.tunings import record_tuning
from registry.reading.entry import read_file
from registry.records.instants import format_instant

LAYOUT = """format = "text"
kind = "pinch-off"
[volts]
all = "$.gates"
[settings]
field = "$.field"
[time]
at = "$.when"
"""


def told(
    path: Path, at: int, volts: str = '{"P1": 0.5, "P2": 0.25}', field: str = "150 mT", extra: str = ""
) -> Path:
    """A file that tells its own volts, field and time."""
    comment = f'# {{"gates": {volts}, "field": "{field}", "when": "{format_instant(at)}"}}\n'
    path.write_text(comment + f"P1 [V]\tI [A]\n0\t1e-9\n1\t2e-9{extra}\n")
    return path


@pytest.fixture
def layout(tmp_path: Path) -> Path:
    (tmp_path / "layout.toml").write_text(LAYOUT)
    return tmp_path / "layout.toml"


def test_a_file_becomes_a_measurement_of_the_named_state(lab: Any, tmp_path: Path, trace: Any) -> None:
    state = lab.state(1)
    file = trace(tmp_path / "t.txt")
    (done,) = admit(lab.registry, [file], tuning=state[:10], kind="pinch-off", at=lab.day(2)).measurements
    row = lab.row("measurement", done.kept.hex)
    assert (row["kind"], row["shape"], row["at"], row["file_name"]) == (
        "pinch-off",
        "trace",
        lab.day(2),
        "t.txt",
    )
    assert row["tuning_no"] == lab.row("tuning", state)["no"]
    (digest,) = lab.registry.files
    assert lab.registry.files.open_path(digest).read_bytes() == file.read_bytes()
    assert audit(lab.registry).findings == ()


def test_the_original_is_not_touched(lab_here: Any, tmp_path: Path, trace: Any) -> None:
    lab_here.state(1)
    file = trace(tmp_path / "t.txt")
    before = file.stat(), file.read_bytes()
    admit(lab_here.registry, [file], at=lab_here.day(2))
    after = file.stat(), file.read_bytes()
    assert (before[0].st_mtime_ns, before[0].st_mode, before[1]) == (
        after[0].st_mtime_ns,
        after[0].st_mode,
        after[1],
    )


def test_a_repeated_file_is_listed_with_its_old_id(lab: Any, tmp_path: Path, trace: Any, count: Any) -> None:
    lab.state(1)
    file = trace(tmp_path / "t.txt")
    (first,) = admit(lab.registry, [file], at=lab.day(2)).measurements
    before = count(lab.registry, "journal")
    copy = tmp_path / "renamed.txt"
    copy.write_bytes(file.read_bytes())
    again = admit(lab.registry, [file, copy, file]).measurements
    assert [one.kept.hex for one in again] == [first.kept.hex] * 3
    assert not any(one.kept.new for one in again)
    assert count(lab.registry, "journal") == before


def test_a_file_named_twice_in_one_call_is_one_measurement(
    lab: Any, tmp_path: Path, trace: Any, count: Any
) -> None:
    lab.state(1)
    file = trace(tmp_path / "t.txt")
    done = admit(lab.registry, [file, file], at=lab.day(2)).measurements
    assert len({one.kept.hex for one in done}) == 1
    assert count(lab.registry, "measurement") == 1


def test_a_file_of_a_withdrawn_measurement_can_belong_to_another_state(
    lab: Any, tmp_path: Path, trace: Any
) -> None:
    wrong, right = lab.state(1), lab.state(2)
    file = trace(tmp_path / "t.txt")
    (first,) = admit(lab.registry, [file], tuning=wrong, at=lab.day(3)).measurements
    withdraw(lab.registry, first.kept.hex, why="wrong state", at=lab.day(4))
    (second,) = admit(lab.registry, [file], tuning=right, at=lab.day(3)).measurements
    assert second.kept.new
    assert second.kept.hex != first.kept.hex


def bad_files(tmp_path: Path) -> list[Path]:
    (tmp_path / "empty.txt").write_text("")
    (tmp_path / "words.txt").write_text("all is well\nand good\n")
    (tmp_path / "cut.h5").write_bytes(b"\x89HDF\r\n\x1a\n" + bytes(20))
    (tmp_path / "folder").mkdir()
    return [tmp_path / name for name in ("nowhere.txt", "empty.txt", "words.txt", "cut.h5", "folder")]


def test_one_bad_file_does_not_keep_the_others_out(lab: Any, tmp_path: Path, trace: Any, count: Any) -> None:
    lab.state(1)
    bad = bad_files(tmp_path)
    good = [trace(tmp_path / f"t{i}.txt", seed=i) for i in range(3)]
    done = admit(lab.registry, [good[0], *bad, *good[1:]], at=lab.day(2))
    assert [one.file for one in done.measurements] == good
    assert [one.file for one in done.failed] == bad
    for one in done.failed:
        assert one.file.name in one.why.where
        assert one.why.remedy
    assert (count(lab.registry, "measurement"), count(lab.registry, "raw_file")) == (3, 3)
    assert audit(lab.registry).findings == ()


def test_a_file_that_finds_no_state_leaves_no_record(
    lab: Any, tmp_path: Path, trace: Any, layout: Path, count: Any
) -> None:
    lab.state(1)
    lost = told(tmp_path / "lost.txt", lab.day(2), volts='{"X1": 0.5}')
    early = told(tmp_path / "early.txt", lab.day(-5))
    fine = told(tmp_path / "fine.txt", lab.day(3))
    done = admit(lab.registry, [lost, early, fine], layout=layout)
    assert [one.file for one in done.failed] == [lost, early]
    assert "X1" in str(done.failed[0].why)
    assert count(lab.registry, "raw_file") == 2  # the layout and the file that was taken
    assert count(lab.registry, "tuning") == 2
    assert audit(lab.registry).findings == ()


def test_a_time_in_the_future_or_outside_the_states_cooldown_is_refused(
    lab_here: Any, tmp_path: Path, trace: Any, count: Any
) -> None:
    state = lab_here.state(1)
    file = trace(tmp_path / "t.txt")
    for day, word in ((1e5, "future"), (-1, "outside cooldown C1")):
        (failed,) = admit(lab_here.registry, [file], tuning=state, at=lab_here.day(day)).failed
        assert word in str(failed.why)
    assert count(lab_here.registry, "raw_file") == 0


def test_a_guessed_time_is_said_to_be_one_and_outside_the_identity(
    lab_here: Any, lab_twin: Any, tmp_path: Path, trace: Any
) -> None:
    ids = []
    for number, lab in enumerate((lab_here, lab_twin)):
        state = lab.state(1)
        file = trace(tmp_path / f"t{number}.txt")
        stamp = (lab.day(2 + number)) * 1000
        os.utime(file, ns=(stamp, stamp))
        (done,) = admit(lab.registry, [file], tuning=state).measurements
        row = lab.row("measurement", done.kept.hex)
        assert (row["at"], row["moment"]) == (None, lab.day(2 + number))
        assert any("guess" in note for note in done.notes)
        ids.append(done.kept.hex)
    assert ids[0] == ids[1]


def test_a_file_date_before_the_state_is_moved_to_the_state(
    lab_here: Any, tmp_path: Path, trace: Any
) -> None:
    state = lab_here.state(5)
    file = trace(tmp_path / "t.txt")
    os.utime(file, ns=(0, 0))
    (done,) = admit(lab_here.registry, [file], tuning=state).measurements
    assert lab_here.row("measurement", done.kept.hex)["moment"] == lab_here.day(5)


def test_volts_in_the_file_make_a_state(lab: Any, tmp_path: Path, layout: Path) -> None:
    (done,) = admit(lab.registry, [told(tmp_path / "a.txt", lab.day(2))], layout=layout).measurements
    measurement = lab.row("measurement", done.kept.hex)
    with lab.registry.reading() as connection:
        sql = text("SELECT * FROM tuning WHERE no = :no")
        state = dict(connection.execute(sql, {"no": measurement["tuning_no"]}).mappings().one())
    assert (state["at"], state["raw_file_no"]) == (lab.day(2), measurement["raw_file_no"])
    assert lab.volts(bytes(state["digest"]).hex())["P2"] == 0.25
    assert state["settings"] == '{"field":{"unit":"T","value":0.15}}'
    assert measurement["layout_no"] is not None
    assert audit(lab.registry).findings == ()


def test_the_same_volts_again_belong_to_the_latest_state(
    lab: Any, tmp_path: Path, layout: Path, count: Any
) -> None:
    files = [told(tmp_path / f"{i}.txt", lab.day(2 + i), extra=f"\n2\t{i}e-9") for i in range(3)]
    assert not admit(lab.registry, files[:2], layout=layout).failed
    assert not admit(lab.registry, files[2:], layout=layout).failed
    assert (count(lab.registry, "tuning"), count(lab.registry, "measurement")) == (1, 3)


@pytest.mark.parametrize(
    "change", [{"volts": '{"P1": 0.5, "P2": 0.3}'}, {"volts": '{"P1": 0.5}'}, {"field": "1 T"}]
)
def test_other_volts_or_settings_make_another_state(
    lab_here: Any, tmp_path: Path, layout: Path, count: Any, change: dict[str, str]
) -> None:
    files = [told(tmp_path / "a.txt", lab_here.day(2)), told(tmp_path / "b.txt", lab_here.day(3), **change)]
    assert not admit(lab_here.registry, files, layout=layout).failed
    assert count(lab_here.registry, "tuning") == 2


def test_the_same_volts_in_the_next_cooldown_make_another_state(
    lab_here: Any, tmp_path: Path, layout: Path, count: Any
) -> None:
    begin_cooldown(lab_here.registry, "C2", cryostat="Blue", chips=["K7"], at=lab_here.day(9))
    files = [told(tmp_path / f"{d}.txt", lab_here.day(d)) for d in (2, 10)]
    assert not admit(lab_here.registry, files, layout=layout).failed
    assert count(lab_here.registry, "tuning") == 2


def test_without_name_or_volts_the_only_cold_devices_latest_state_is_taken(
    lab: Any, tmp_path: Path, trace: Any
) -> None:
    early = lab.state(1)
    lab.state(4)
    (done,) = admit(lab.registry, [trace(tmp_path / "t.txt")], at=lab.day(2)).measurements
    assert lab.row("measurement", done.kept.hex)["tuning_no"] == lab.row("tuning", early)["no"]
    assert any("latest state" in note for note in done.notes)


def test_two_cold_devices_ask_whose_it_is(lab_here: Any, tmp_path: Path, trace: Any, count: Any) -> None:
    add_device(lab_here.registry, "K7/D2", gates=lab_here.gates, at=lab_here.day(0))
    lab_here.state(1)
    record_tuning(lab_here.registry, "K7/D2", {"P1": 0.1}, at=lab_here.day(1))
    (failed,) = admit(lab_here.registry, [trace(tmp_path / "t.txt")], at=lab_here.day(2)).failed
    assert "K7/D2" in str(failed.why)
    assert "--tuning" in failed.why.remedy
    assert count(lab_here.registry, "raw_file") == 0


@pytest.mark.parametrize("more", [{"tuning": "abcdef0123"}, {"layout": "nowhere.toml"}])
def test_a_wrong_option_stops_all_files(
    lab_here: Any, tmp_path: Path, trace: Any, more: dict[str, Any]
) -> None:
    lab_here.state(1)
    with pytest.raises((InputError, LookupFailed)):
        admit(lab_here.registry, [trace(tmp_path / "t.txt")], at=lab_here.day(2), **more)
    assert list(lab_here.registry.files) == []


def test_a_file_that_changes_while_it_is_admitted_is_refused(
    lab_here: Any, tmp_path: Path, trace: Any, monkeypatch: pytest.MonkeyPatch, count: Any
) -> None:
    lab_here.state(1)
    files = [trace(tmp_path / f"{i}.txt", seed=i) for i in range(2)]

    def reading(path: Path, layout: Any) -> Any:
        samples = read_file(path, layout)
        if path == files[0]:
            path.write_text(path.read_text() + "0.6\t1e-9\n")
        return samples

    monkeypatch.setattr(admitting, "read_file", reading)
    done = admit(lab_here.registry, files, at=lab_here.day(2))
    assert [one.file for one in done.measurements] == files[1:]
    assert "changed" in str(done.failed[0].why)
    assert count(lab_here.registry, "raw_file") == 1


def test_files_beyond_one_batch_are_all_taken_in_order(
    lab_here: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, count: Any
) -> None:
    lab_here.state(1)
    monkeypatch.setattr(admitting, "BATCH", 20)
    files = []
    for number in range(45):
        files.append(tmp_path / f"{number:03d}.txt")
        files[-1].write_text(f"P1 [V]\tI [A]\n0\t1e-9\n1\t{number}e-9\n")
    files[30].write_text("")
    progress: list[tuple[int, int]] = []
    done = admit(lab_here.registry, files, at=lab_here.day(2), progress=lambda a, b: progress.append((a, b)))
    assert [one.file for one in done.measurements] == files[:30] + files[31:]
    assert [one.file for one in done.failed] == [files[30]]
    assert progress == [(20, 45), (40, 45), (45, 45)]
    assert count(lab_here.registry, "measurement") == 44
    assert audit(lab_here.registry).findings == ()


def test_six_hundred_files_cross_the_border_of_a_real_batch(
    lab_here: Any, tmp_path: Path, count: Any
) -> None:
    lab_here.state(1)
    assert admitting.BATCH < 600
    files = [tmp_path / f"{number}.txt" for number in range(600)]
    for number, file in enumerate(files):
        file.write_text(f"P1 [V]\tI [A]\n0\t1e-9\n1\t{number}e-9\n")
    done = admit(lab_here.registry, files, at=lab_here.day(2))
    assert [one.file for one in done.measurements] == files
    assert count(lab_here.registry, "measurement") == 600


def test_an_unknown_kind_derives_nothing_and_says_so(lab_here: Any, tmp_path: Path, trace: Any) -> None:
    lab_here.state(1)
    for number, (kind, word) in enumerate((("photo", "'photo' is no method"), (None, "no kind is given"))):
        file = trace(tmp_path / f"{number}.txt", seed=number)
        (done,) = admit(lab_here.registry, [file], kind=kind, derive=True, at=lab_here.day(2)).measurements
        assert done.derived == ()
        assert any(word in note for note in done.notes)


def test_the_kind_as_amended_says_what_is_derived(lab_here: Any, tmp_path: Path, trace: Any) -> None:
    lab_here.state(1)
    file = trace(tmp_path / "t.txt")
    (done,) = admit(lab_here.registry, [file], kind="photo", at=lab_here.day(2)).measurements
    amend(lab_here.registry, done.kept.hex, "kind", "pinch-off", why="slip", at=lab_here.day(3))
    (again,) = admit(lab_here.registry, [file], derive=True).measurements
    assert [one.result.method for one in again.derived] == ["pinch-off"]
