"""What the recording commands print, and how the pages show what was recorded."""

from __future__ import annotations

import unicodedata
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from registry.command.completing import cooldown_names, device_names

Shell = Callable[..., Any]

HOSTILE = "\x1b[2J\x9b31m\u202epoor\rgood\x07"


@pytest.fixture
def state(lab: Shell) -> Shell:
    """A device in its first state."""
    words = "tuning record K7/A --volts first.csv --purpose readout --at 2026-03-02T08:00:00Z"
    assert lab(*words.split(), "--sites", "D1 S1", "--occupation", "D1=1,S1=0").code == 0
    return lab


RECORDING = {
    "chip": "chip add K8 --wafer W3 --lot 12 --die 4 --material Si/SiGe --note first",
    "device": "device add K7/B --gates gates.csv --family pairs --at 2026-03-02T00:00:00Z",
    "gate sheet": "device revise K7/A --pairs pairs.csv --why checked --at 2026-03-02T00:00:00Z",
    "finding": "gate mark K7/A P1 leaky --above 1.2 --note seen --at 2026-03-02T00:00:00Z",
    "short": "gate mark K7/A P1 shorted --to B1 --at 2026-03-02T00:00:00Z",
    "cooldown": "cooldown begin C2 --cryostat Pond --chip K7 --board 3 --at 2026-03-05T00:00:00Z",
    "event": "cooldown mark C1 charge-jump --site D1 --detail shift=0.004 by=eye --at 2026-03-05T00:00:00Z",
    "bias": "cooldown mark C1 bias-cooling --volts first.csv --at 2026-03-05T00:00:00Z",
    "wiring": "wiring revise C1 wiring.csv --since 2026-03-04T00:00:00Z --why new --at 2026-03-05T00:00:00Z",
    "state": "tuning record K7/A --volts second.csv --at 2026-03-05T00:00:00Z",
    "criteria": "criteria add cold cold.toml --at 2026-03-05T00:00:00Z",
    "judgement": "judge latest usable --why noisy --sites D1 --purpose readout --at 2026-03-05T00:00:00Z",
    "quantity": "quantities add pair_splitting --unit meV --valid-until stretch --meaning splitting",
}


@pytest.mark.parametrize("words", RECORDING.values(), ids=RECORDING.keys())
def test_a_recording_command_prints_the_id_and_a_repetition_records_nothing(state: Shell, words: str) -> None:
    Path("cold.toml").write_text('[[require]]\nquantity = "lever_arm"\nat_least = 0.05\nunit = "eV/V"\n')
    before = state("audit", "--json").document["records"]
    first = state(*words.split())
    assert first.code == 0, first.err
    recorded = state("audit", "--json").document["records"]
    again = state(*words.split(), "--json")
    assert again.code == 0, again.out
    assert (len(again.document["id"]), again.document["new"]) == (64, False)
    assert state("audit", "--json").document["records"] == recorded > before
    short, _, what = first.out.strip().partition("  ")
    assert len(short) >= 10
    assert again.document["id"].startswith(short)
    assert state(*words.split()).out == f"{short}  {what} (already recorded)\n"


def test_a_state_that_is_revisited_is_the_parent_of_a_new_one(state: Shell) -> None:
    old = state("tuning", "show", "latest", "--json").document
    revisit = ("tuning", "revisit", old["id"], "--at", "2026-03-05T00:00:00Z", "--json")
    new = state(*revisit).document["id"]
    page = state("tuning", "show", "latest", "--json").document
    assert (page["id"], page["parent"]) == (new, old["id"])
    assert page["gates"] == old["gates"]
    assert state(*revisit).document == {"id": new, "new": False, "notes": []}


def test_volts_of_lines_are_volts_at_the_source(state: Shell) -> None:
    Path("lines.csv").write_text("line,volts\nL1,2.1\nL2,3.05\nL3,2\nL4,0.8\n")
    assert state("tuning", "record", "K7/A", "--volts", "lines.csv", "--at", "2026-03-04T08:00:00Z").code == 0
    page = state("tuning", "show", "latest", "--json").document
    volts = {gate["gate"]: (gate["at_gate"], gate["at_source"]) for gate in page["gates"]}
    assert page["level"] == "source"
    assert volts["B1"] == pytest.approx((0.42, 2.1))
    assert volts["P1"] == pytest.approx((0.611, 3.05))


def test_settings_are_kept_in_si_and_shown_with_a_prefix(lab: Shell) -> None:
    Path("settings.csv").write_text("name;value;unit\nbias;50,5;uV\n")
    words = "tuning record K7/A --volts first.csv --settings settings.csv --at 2026-03-02T08:00:00Z"
    assert lab(*words.split()).code == 0
    settings = lab("tuning", "show", "latest", "--json").document["settings"]
    assert settings["bias"]["value"] == pytest.approx(50.5e-6)
    assert "bias 50.5 µV" in lab("tuning", "show", "latest").out


def test_crossed_limits_are_told_on_stderr_and_the_state_is_recorded(lab: Shell) -> None:
    Path("high.csv").write_text("gate,volts\nP1,1.7\n")
    outcome = lab("tuning", "record", "K7/A", "--volts", "high.csv", "--at", "2026-03-02T08:00:00Z")
    assert outcome.code == 0
    assert "P1" in outcome.err
    assert "1.5" in outcome.err


def test_a_beginning_says_which_open_cooldown_it_closes(lab: Shell) -> None:
    words = "cooldown begin C2 --cryostat Pond --chip K7 --at 2026-04-01T00:00:00Z"
    outcome = lab(*words.split())
    assert outcome.code == 0
    assert "C1 was still open" in outcome.err


def test_who_acts_is_told_with_as(state: Shell) -> None:
    assert state("--as", "Ilse", "judge", "latest", "good", "--why", "sharp").code == 0
    assert state("last-good", "K7/A", "--json").document["by"] == "Ilse"


def test_a_comparison_shows_millivolts_and_what_else_differs(state: Shell) -> None:
    words = "tuning record K7/A --volts second.csv --at 2026-03-03T08:00:00Z"
    assert state(*words.split()).code == 0
    document = state("compare", "previous", "latest", "--json").document
    moved = {gate["gate"]: gate["difference"] for gate in document["gates"]}
    assert moved == pytest.approx({"B1": 0.01, "P1": 0.005, "B2": 0.0, "T1": 0.0})
    text = state("compare", "previous", "latest").out
    assert "420.000  430.000   +10.000" in text
    assert "2 gates are at the same volts in both" in text
    assert "purpose: readout -> none" in text


def test_the_list_and_the_page_of_states_tell_standing_and_volts(state: Shell) -> None:
    assert state("judge", "latest", "good", "--why", "sharp").code == 0
    assert [row["standing"] for row in state("tuning", "list", "K7/A", "--json").document["states"]] == [
        "good"
    ]
    assert "good" in state("tuning", "list", "K7/A").out
    page = state("tuning", "show", "latest").out
    assert "judged good" in page
    assert "610.000" in page
    assert "3045.000" in page


def test_a_missing_value_leaves_criteria_undecided_with_exit_code_1(state: Shell) -> None:
    Path("cold.toml").write_text('[[require]]\nquantity = "lever_arm"\nat_least = 0.05\nunit = "eV/V"\n')
    assert state("criteria", "add", "cold", "cold.toml").code == 0
    outcome = state("judge", "latest", "--by", "cold", "--json")
    assert outcome.code == 1
    assert outcome.document["outcome"] == "undecided"
    assert outcome.document["id"] is None
    assert state("judge", "latest", "--by", "cold").out.startswith("undecided: ")


def test_amended_words_are_found_and_shown(state: Shell) -> None:
    record = state("tuning", "show", "latest", "--json").document["id"]
    assert state("amend", record, "purpose=load the dot", "--why", "was mistyped").code == 0
    hits = state("find", "load", "the", "dot", "--json").document["hits"]
    assert [(hit["id"], hit["field"], hit["amended"]) for hit in hits] == [(record, "purpose", True)]
    assert "load the dot" in state("tuning", "list", "K7/A").out


def test_nothing_found_is_said_and_is_no_error(lab: Shell) -> None:
    outcome = lab("find", "quagga")
    assert (outcome.code, outcome.out) == (0, "'quagga' was found nowhere\n")


def test_an_attached_file_is_kept_and_found(state: Shell) -> None:
    Path("photo.jpg").write_bytes(b"\xff\xd8 not much of a photograph")
    record = state("tuning", "show", "latest", "--json").document["id"]
    assert state("attach", record, "photo.jpg").code == 0
    assert state("find", "photo", "--json").document["hits"][0]["kind"] == "attachment"


def test_a_table_of_states_is_checked_then_loaded(state: Shell) -> None:
    head = "at,cooldown,purpose,sites,standing,why,B1,P1,B2,T1\n"
    row = "2026-03-0{}T00:00:00Z,C1,old,D1,good,by eye,0.1,0.2,0.3,0.4\n"
    Path("old.csv").write_text(head + row.format(3) + row.format(4))
    trial = state("tuning", "load", "K7/A", "old.csv", "--dry-run", "--json").document
    assert (trial["rows"], trial["new"], trial["dry_run"]) == (2, 2, True)
    assert len(state("tuning", "list", "K7/A", "--json").document["states"]) == 1
    assert state("tuning", "load", "K7/A", "old.csv").out.startswith("2 rows read, no fault\n2 states were")
    assert state("tuning", "load", "K7/A", "old.csv", "--json").document["already"] == 2


def test_a_table_of_values_is_loaded_and_compared(state: Shell) -> None:
    Path("values.csv").write_text(
        "cooldown,quantity,subject,value,standard_uncertainty,unit,at,source,method\n"
        "C1,lever_arm,D1,0.1,0.008,eV/V,2026-03-02T09:00:00Z,notebook 4 p. 12,by-hand/1\n"
    )
    assert state("parameter", "load", "K7/A", "values.csv", "--json").document["new"] == 1
    assert state("find", "notebook 4", "--json").document["hits"]


def test_untrusted_text_reaches_no_terminal_as_it_is(lab: Shell) -> None:
    words = "tuning record K7/A --volts first.csv --at 2026-03-02T08:00:00Z --purpose"
    assert lab(*words.split(), HOSTILE).code == 0
    assert lab("judge", "latest", "good", "--why", HOSTILE, "--purpose", HOSTILE).code == 0
    assert lab("cooldown", "mark", "C1", "note", "--note", HOSTILE, "--at", "2026-03-01T09:00:00Z").code == 0
    assert lab("gate", "mark", "K7/A", "P1", "floating", "--note", HOSTILE).code == 0
    record = lab("tuning", "show", "latest", "--json").document["id"]
    pages = [
        lab("tuning", "list", "K7/A"),
        lab("tuning", "show", "latest"),
        lab("now", "K7/A"),
        lab("last-good", "K7/A", "--purpose", HOSTILE),
        lab("find", "poor"),
        lab("lineage", record, "--down"),
        lab("chip", "add", HOSTILE),
        lab("find", HOSTILE + "x"),
    ]
    for page in pages:
        assert page.out + page.err
        hidden = {c for c in page.out + page.err if unicodedata.category(c)[0] == "C"}
        assert hidden == {"\n"}


def test_shells_complete_devices_and_cooldowns(state: Shell) -> None:
    class Context:
        params: dict[str, str | None] = {"where": None}  # noqa: RUF012 - a stand-in, never changed

        def find_root(self) -> Context:
            return self

    context: Any = Context()
    assert device_names(context, "K7") == ["K7/A"]
    assert device_names(context, "K8") == []
    assert cooldown_names(context, "") == ["C1"]
    Context.params = {"where": "/nowhere/at/all"}
    assert device_names(context, "") == []


def test_the_stamp_is_one_line(lab: Shell) -> None:
    document = lab("stamp", "--json").document
    outcome = lab("stamp")
    assert outcome.out.count("\n") == 1
    assert len(outcome.out) <= 101
    assert outcome.out.strip() == document["line"]
    assert document["size"] == lab("audit", "--json").document["journal"]


def test_a_backup_opens_as_a_registry_of_its_own(state: Shell, tmp_path: Path) -> None:
    copy = tmp_path / "copy"
    assert state("backup", copy).code == 0
    assert state("--registry", copy, "audit", "--json").document == state("audit", "--json").document
    assert state("backup", copy).code == 2


def test_a_registry_that_is_up_to_date_is_not_migrated(lab: Shell) -> None:
    document = lab("migrate", "--json").document
    assert document["from_version"] == document["to_version"]
    assert document["backup"] is None
    assert lab("migrate").out.startswith("already at version")


def test_a_registry_is_made_where_it_is_named_and_only_once(shell: Shell, tmp_path: Path) -> None:
    place = tmp_path / "elsewhere"
    assert shell("--registry", place, "create", "--json").document == {"registry": str(place)}
    assert shell("create", place).code == 2
    assert shell("--registry", place, "audit").code == 0


def test_quantities_of_a_laboratory_are_listed_with_the_others(lab: Shell) -> None:
    words = "quantities add pair_splitting --unit meV --valid-until stretch"
    assert lab(*words.split()).code == 0
    listed = {one["quantity"]: one for one in lab("quantities", "--json").document["quantities"]}
    assert (listed["pair_splitting"]["unit"], listed["pair_splitting"]["valid_until"]) == ("eV", "stretch")
    assert listed["lever_arm"]["unit"] == "eV/V"


def test_the_list_of_quantities_needs_no_registry(shell: Shell) -> None:
    outcome = shell("quantities")
    assert outcome.code == 0
    assert "lever_arm" in outcome.out
    assert "there is no registry" in outcome.err


def test_the_methods_are_listed_with_what_may_be_given(shell: Shell) -> None:
    methods = {one["method"]: one for one in shell("methods", "--json").document["methods"]}
    assert {one["name"] for one in methods["coulomb-peaks"]["given"]} >= {"lever_arm", "model"}
    assert "--given lever_arm=" in shell("methods").out
