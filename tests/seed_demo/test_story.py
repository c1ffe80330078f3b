from __future__ import annotations

import hashlib
import json
import re
import shlex
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from registry.command.main import run
from registry.errors import RegistryError
from registry.keeping.auditing import audit
from registry.keeping.handle import Registry
from registry.keeping.opening import create, open_registry
from registry.questions.asking import ask
from registry.questions.last_good import last_good
from registry.questions.lineage import lineage
from registry.questions.parameters import points
from registry.records.canonical import canonical_bytes
from registry.records.instants import parse_instant
from seed_demo.bench import moment_of
from seed_demo.building import DemoReport, build_demo
from seed_demo.entering import CRITERIA, enter_year
from seed_demo.folder import write_folder
from seed_demo.story import commands, story_lines
from seed_demo.year import Year, build_year

FERRY = "brook-3/ferry"
CUT = parse_instant("2025-12-20T02:40:00Z")
END_OF_STRETCH = parse_instant("2026-01-19T07:59:00Z")
# A dozen files each; both ways of writing files, old values and derived ones.
PART = ("H1", "H3", "B6")
HEX = re.compile(r"\b[0-9a-f]{10,64}\b")


@pytest.fixture(scope="session")
def demo(tmp_path_factory: pytest.TempPathFactory) -> DemoReport:
    """The whole year, built once."""
    return build_demo(tmp_path_factory.mktemp("demo") / "year")


@pytest.fixture
def reg(demo: DemoReport) -> Iterator[Registry]:
    with open_registry(demo.registry, read_only=True) as opened:
        yield opened


@pytest.fixture(scope="session")
def part() -> Year:
    return build_year(stretches=PART)


@pytest.fixture(scope="session")
def measured(part: Year, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The part's files, written once for all registries of it."""
    folder = tmp_path_factory.mktemp("part")
    write_folder(part, folder)
    return folder


@pytest.fixture(scope="session")
def part_registry(part: Year, measured: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A registry of the part, built once."""
    place = tmp_path_factory.mktemp("part") / "registry"
    with create(place, person="Ilse") as made:
        enter_year(made, part, measured)
    return place


def counts(reg: Registry) -> dict[str, int]:
    with reg.reading() as connection:
        rows = ask(connection, "SELECT kind, count(*) FROM record GROUP BY kind")
    return {row[0]: row[1] for row in rows}


def digests(reg: Registry) -> set[bytes]:
    with reg.reading() as connection:
        return {bytes(row[0]) for row in ask(connection, "SELECT digest FROM record")}


def test_an_audit_of_the_demo_finds_nothing(reg: Registry) -> None:
    report = audit(reg)
    assert report.findings == ()
    assert report.files > 400


def test_the_demo_is_as_large_as_promised(reg: Registry) -> None:
    found = counts(reg)
    assert (found["chip"], found["device"], found["withdrawal"], found["criteria"]) == (2, 4, 1, 1)
    assert found["cooldown"] >= 6
    assert found["tuning"] > 250
    assert found["measurement"] > 400
    with reg.reading() as connection:
        told = ask(connection, "SELECT count(*) FROM tuning WHERE raw_file_no IS NOT NULL")[0][0]
    assert 100 < told < found["tuning"]


def test_files_of_both_layouts_are_in_the_demo_at_both_levels(reg: Registry) -> None:
    with reg.reading() as connection:
        rows = ask(
            connection,
            "SELECT t.level, m.file_name FROM measurement m JOIN tuning t ON t.no = m.tuning_no"
            " WHERE t.raw_file_no IS NOT NULL",
        )
    assert {(row.level, Path(row.file_name).suffix) for row in rows} == {("gate", ".h5"), ("source", ".txt")}


def test_the_files_of_a_session_share_one_state_that_the_first_of_them_told(reg: Registry) -> None:
    with reg.reading() as connection:
        rows = ask(
            connection,
            "SELECT m.moment - t.moment AS late, t.no FROM measurement m"
            " JOIN tuning t ON t.no = m.tuning_no WHERE t.raw_file_no IS NOT NULL",
        )
    # Another bias, as turn-ons and leaks are measured with, makes another state.
    sessions = {
        (planned.device.name, planned.at.date(), moment_of(planned).settings["bias"])
        for planned in build_year().files
    }
    assert min(row.late for row in rows) == 0
    # Retuned volts may fall on the same steps of the sources as a session before.
    assert 0.98 * len(sessions) < len({row.no for row in rows}) <= len(sessions)


def test_before_the_power_cut_the_state_visited_again_was_last_good(reg: Registry) -> None:
    answer = last_good(reg, FERRY, as_of=CUT - 1)
    assert answer.state is not None
    assert (answer.cooldown, str(answer.freshness)) == ("B2", "ready")
    assert answer.state.parent_no is not None


def test_after_the_power_cut_that_state_is_stale_and_volts_are_asked_for(reg: Registry) -> None:
    before, after = (last_good(reg, FERRY, as_of=at) for at in (CUT - 1, CUT + 1))
    assert before.state == after.state
    assert str(after.freshness).startswith("stale since power-loss to 85 K")
    assert len(after.asks) == 1


def test_the_newest_state_after_the_power_cut_is_passed_over_as_poor(reg: Registry) -> None:
    answer = last_good(reg, FERRY, as_of=END_OF_STRETCH)
    assert answer.state is not None
    assert answer.state.moment > CUT
    judged = [passed for passed in answer.passed_over if "judged poor" in passed.reason]
    assert [passed.at > answer.state.time for passed in judged] == [True]


def test_states_by_criteria_rest_on_a_value_with_its_file(reg: Registry) -> None:
    answer = last_good(reg, FERRY, criteria=CRITERIA)
    assert answer.cooldown == "B5"
    (piece,) = answer.evidence
    assert (piece.quantity, piece.subject) == ("electron_temperature", "S1")
    assert len(piece.sources) == 1


def test_the_wrong_admission_taints_its_values_and_no_others(reg: Registry) -> None:
    values = points(reg, FERRY, "electron_temperature", subject="S1", with_tainted=True)
    wrong = [point for point in values if point.tainted]
    twins = [point for point in values if not point.tainted and point.moment == wrong[0].moment]
    assert len(wrong) == len(twins) == 1
    assert wrong[0].value == twins[0].value
    assert wrong[0].tuning != twins[0].tuning


def test_the_old_script_and_the_new_methods_differ_as_the_lesson_says(reg: Registry) -> None:
    values = points(reg, FERRY, "electron_temperature", subject="S1")
    old = [p.value for p in values if p.analysis_no is None and p.value is not None]
    new = [p.value for p in values if p.analysis_no is not None and p.value is not None]
    assert min(len(old), len(new)) > 10
    assert sum(old) / len(old) < 0.9 * sum(new) / len(new)


def test_the_story_ends_with_the_last_good_state_after_the_power_cut(reg: Registry) -> None:
    answer = last_good(reg, FERRY, as_of=END_OF_STRETCH)
    assert answer.state is not None
    ending = story_lines(reg)[-4:]
    assert any(f"last good: {answer.state.hex[:10]}" in line for line in ending)
    assert ending[-1].strip().endswith("ready")


def test_the_story_fits_a_terminal_and_tells_what_it_should(
    reg: Registry, demo: DemoReport, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(demo.where.parent)
    lines = story_lines(reg)
    assert max(map(len, lines)) <= 80
    assert len(lines) <= 66
    whole = "\n".join(lines)
    for word in ("power-loss", "rewired", "charge-jump", "leaky", "evening-fit", "withdrawn", "stale since"):
        assert word in whole
    assert "nothing is damaged" in whole
    assert "Gate oxides die" in whole


def test_the_number_of_the_story_is_traced_to_a_file_of_the_demo(reg: Registry, demo: DemoReport) -> None:
    (sha256,) = re.findall(r"sha256 ([0-9a-f]{64})", "\n".join(story_lines(reg)))
    (record,) = (words[-1] for words in commands(reg) if "lineage" in words)
    assert sha256 in lineage(reg, record).to_json()["files"]
    raw = (demo.measured / "raw" / "ferry").rglob("*.h5")
    assert sha256 in {hashlib.sha256(path.read_bytes()).hexdigest() for path in raw}


def test_every_command_of_the_story_can_be_pasted_and_has_an_answer(
    reg: Registry, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    story = story_lines(reg)
    (exported,) = (line for line in story if line.startswith("  export MILLIKEEP_REGISTRY="))
    monkeypatch.setenv("MILLIKEEP_REGISTRY", *shlex.split(exported.partition("=")[2]))
    pasted = [shlex.split(line) for line in story if line.startswith("  millikeep ")]
    assert [words[1:] for words in pasted] == [words[3:] for words in commands(reg)]
    for words in pasted:
        assert run(words[1:]) == 0, capsys.readouterr().err


def test_asked_again_the_demo_is_left_as_it_is(demo: DemoReport, reg: Registry) -> None:
    before = counts(reg)
    again = build_demo(demo.where)
    assert (again.new, again.registry) == (False, demo.registry)
    assert counts(reg) == before


def test_the_story_comes_as_json_too(demo: DemoReport, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["--json", "demo", str(demo.where)]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["registry"] == str(demo.registry)
    assert document["new"] is False
    assert "AN INVENTED LABORATORY" in document["story"][0]


@pytest.mark.parametrize("content", ["a file", "an empty registry", "a registry with no files beside it"])
def test_a_directory_with_something_else_in_it_is_refused(content: str, tmp_path: Path) -> None:
    if content == "a file":
        (tmp_path / "letter.txt").write_text("mine")
    else:
        create(tmp_path / "registry").close()
    if content == "an empty registry":
        (tmp_path / "measured").mkdir()
    held = sorted(tmp_path.rglob("letter.txt"))
    with pytest.raises(RegistryError, match="no demo"):
        build_demo(tmp_path)
    assert sorted(tmp_path.rglob("letter.txt")) == held


def test_a_place_that_cannot_be_made_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(RegistryError, match="cannot be made"):
        build_demo(tmp_path / "file" / "demo")


def test_an_interrupted_building_leaves_nothing_behind(tmp_path: Path) -> None:
    def interrupt(done: int, of: int) -> None:
        if 2 * done > of:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        build_demo(tmp_path / "demo", progress=interrupt, year=build_year(stretches=("H1",)))
    assert list(tmp_path.iterdir()) == []


def test_progress_goes_up_to_its_end(tmp_path: Path) -> None:
    told: list[tuple[int, int]] = []
    year = build_year(stretches=("H1",))
    build_demo(tmp_path / "demo", progress=lambda done, of: told.append((done, of)), year=year)
    assert [done for done, _ in told] == list(range(1, 2 * len(year.files) + 1))
    assert {of for _, of in told} == {2 * len(year.files)}


def test_two_buildings_give_the_same_records(
    part: Year, part_registry: Path, measured: Path, tmp_path: Path
) -> None:
    with create(tmp_path / "again", person="Tomas") as again, open_registry(part_registry) as first:
        enter_year(again, part, measured)
        assert digests(again) == digests(first)


def test_another_engine_gives_the_same_records_and_answers(
    part: Year, part_registry: Path, measured: Path, tmp_path: Path, postgres_url: str
) -> None:
    with (
        create(postgres_url, files=tmp_path / "store", person="Ilse") as other,
        open_registry(part_registry) as first,
    ):
        enter_year(other, part, measured)
        assert digests(other) == digests(first)
        for device in ("heath-7/kiln", "brook-3/stile", FERRY):
            one, two = (canonical_bytes(last_good(reg, device).to_json()) for reg in (first, other))
            assert one == two


def test_the_story_of_a_part_of_the_year_says_what_there_is_not(part_registry: Path) -> None:
    with open_registry(part_registry, read_only=True) as reg:
        lines = story_lines(reg)
    assert any("no state of brook-3/ferry is on record" in line for line in lines)


def test_the_command_runs_without_a_terminal_and_tells_a_demo_that_is_there(demo: DemoReport) -> None:
    words = [sys.executable, "-m", "registry.command.main", "demo", demo.where.name]
    done = subprocess.run(
        words,
        cwd=demo.where.parent,
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        env={"PYTHONPATH": str(Path(__file__).parents[2]), "HOME": str(demo.where.parent)},
        check=False,
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert "AFTER THE POWER CUT" in done.stdout
    assert "export MILLIKEEP_REGISTRY=year/registry" in done.stdout
    assert "millikeep now brook-3/ferry" in done.stdout


def test_the_tour_prints_what_the_readme_shows(
    demo: DemoReport, reg: Registry, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    (number,) = (words[-1] for words in commands(reg) if "lineage" in words)
    readme = (Path(__file__).resolve().parents[2] / "README.md").read_text(encoding="utf-8")
    monkeypatch.setenv("MILLIKEEP_REGISTRY", str(demo.registry))
    tour = readme.split("## A short tour", 1)[1].split("\n## ", 1)[0]
    shown = re.findall(r"```\n(\$ millikeep .*?)```", tour, re.DOTALL)
    assert len(shown) == 3
    for command, *lines in (text.strip("\n").splitlines() for text in shown):
        # Ids follow the source of the methods; all else must be as shown.
        assert run(shlex.split(HEX.sub(number, command.removeprefix("$ millikeep ")))) == 0
        printed = [line.rstrip() for line in capsys.readouterr().out.rstrip().splitlines()]
        assert [HEX.sub("#", line) for line in printed] == [HEX.sub("#", line) for line in lines]
