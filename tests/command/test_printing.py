from __future__ import annotations

import io
import json
import subprocess
import sys
import unicodedata

import pytest

from registry.command.outcome import Answer
from registry.command.printing import (
    error_document,
    error_lines,
    millivolts,
    moment,
    plain,
    print_answer,
    setting,
    subjects,
    table,
    wrap,
)
from registry.errors import InputError
from registry.records.measured import measured

HOSTILE = {
    "clear the screen": ("\x1b[2Jgone", "\\x1b[2Jgone"),
    "eight-bit escape": ("\x9b31m", "\\x9b31m"),
    "window title": ("\x1b]0;title\x07", "\\x1b]0;title\\x07"),
    "carriage return": ("good\rpoor", "good\\rpoor"),
    "line end": ("one\ntwo", "one\\ntwo"),
    "backspace": ("a\x08b", "a\\x08b"),
    "right-to-left override": ("a\u202eb", "a\\u202eb"),
    "zero width": ("a\u200bb", "a\\u200bb"),
    "line separator": ("a\u2028b", "a\\u2028b"),
    "lone surrogate of a file name": ("a\udcffb", "a\\udcffb"),
    "tag characters": ("a\U000e0041b", "a\\U000e0041b"),
    "delete": ("a\x7fb", "a\\x7fb"),
}


@pytest.mark.parametrize(("text", "shown"), HOSTILE.values(), ids=HOSTILE.keys())
def test_what_would_move_a_terminal_is_shown_as_text(text: str, shown: str) -> None:
    assert plain(text) == shown


def test_ordinary_text_of_any_script_stays_as_it_is() -> None:
    assert plain("Größe µV Ω 量子 é [bold]x[/bold] 100 %") == "Größe µV Ω 量子 é [bold]x[/bold] 100 %"


def test_no_character_of_unicode_leaves_a_control_character() -> None:
    shown = set(plain("".join(map(chr, range(sys.maxunicode + 1)))))
    assert [character for character in shown if unicodedata.category(character)[0] == "C"] == []


MEASURED = {
    "millikelvin": ((0.1003, 0.0012, "K"), "100.3 ± 1.2 mK"),
    "microvolts": ((-3.04e-4, 1.0e-6, "V"), "-304.0 ± 1.0 µV"),
    "uncertainty that rounds up": ((1.234, 0.0996, "V"), "1.23 ± 0.10 V"),
    "no prefix for a ratio of units": ((0.1, 0.008, "eV/V"), "0.1000 ± 0.0080 eV/V"),
    "plain number": ((12.0, 3.0, "1"), "12.0 ± 3.0"),
    "uncertainty above ten": ((1500.0, 25.0, "1"), "1500 ± 25"),
    "uncertainty above a hundred": ((1513.0, 250.0, "1"), "1510 ± 250"),
    "zero": ((0.0, 0.002, "V"), "0.0 ± 2.0 mV"),
    "larger uncertainty than value": ((1e-6, 0.02, "V"), "0 ± 20 mV"),
    "unknown uncertainty": ((0.5, None, "T"), "500 mT (uncertainty unknown)"),
    "exact": ((2.0, 0.0, "1"), "2 (exact)"),
    "no value": ((None, None, "V"), "no value"),
    "upper bound": ((2e-12, 0.0, "A", "upper"), "at most 2 pA"),
    "lower bound": ((1e6, None, "1", "lower"), "at least 1e+06"),
    "value far above its uncertainty": ((1.0, 1e-14, "1"), "1 ± 1.0e-14"),
}


@pytest.mark.parametrize(("given", "shown"), MEASURED.values(), ids=MEASURED.keys())
def test_a_value_is_rounded_to_two_digits_of_its_uncertainty(given: tuple[object, ...], shown: str) -> None:
    assert measured(*given) == shown  # type: ignore[arg-type]  # a table of argument lists


def test_volts_are_shown_as_millivolts_to_three_decimals() -> None:
    assert millivolts(0.61) == "610.000"
    assert millivolts(-0.0) == "0.000"
    assert millivolts(0.0102, sign=True) == "+10.200"
    assert millivolts(None) == "-"
    assert millivolts(float("nan")) == "-"


def test_times_are_shown_in_utc_without_an_empty_fraction() -> None:
    assert moment(1_772_000_000_000_000) == "2026-02-25T06:13:20Z"
    assert moment("2026-02-25T06:13:20.500000Z") == "2026-02-25T06:13:20.500000Z"
    assert moment(None) == "-"


def test_a_setting_is_shown_with_a_prefix() -> None:
    assert setting({"value": 5e-5, "unit": "V"}) == "50 µV"


def test_a_table_is_aligned_and_hides_no_escape() -> None:
    lines = table(("gate", "mV"), [("B1", "1.000"), ("long\x1bname", "-12.000")], right=(1,))
    assert lines == ["gate               mV", "B1              1.000", "long\\x1bname  -12.000"]


def test_a_sentence_beside_a_word_goes_on_beneath_the_sentence() -> None:
    first, second = wrap("why " * 25, "standing   ")
    assert first.startswith("standing   why")
    assert second.startswith("           why")


def test_conditions_are_named_only_where_they_tell_values_apart() -> None:
    up, down = {"direction": "up"}, {"direction": "down"}
    assert subjects([("B1", up), (None, up)]) == ["B1", "-"]
    assert subjects([("B1", up), ("B1", down), (None, {})]) == ["B1, up", "B1, down", "-"]
    assert subjects([("B1", up | {"level": 0.1}), ("B1", up)]) == ["B1, up, level 0.1", "B1, up"]


def test_long_sentences_are_broken_at_80_columns() -> None:
    assert all(len(line) <= 80 for line in wrap("word " * 60))
    lines = table(("a", "b"), [("x" * 30, "word " * 40)], wrap_last=True)
    assert all(len(line) <= 80 for line in lines)
    assert lines[2].startswith(" " * 32)


def test_json_is_ascii_and_keeps_every_character(capsys: pytest.CaptureFixture[str]) -> None:
    print_answer(Answer({"label": "\x9b\udcffµ"}, ("text",)), as_json=True)
    out = capsys.readouterr().out
    assert out.isascii()
    assert json.loads(out) == {"label": "\x9b\udcffµ"}


def test_text_goes_to_stdout_and_messages_to_stderr(capsys: pytest.CaptureFixture[str]) -> None:
    print_answer(Answer({}, ("answer\x1b",), messages=("talk\x07",)), as_json=False)
    captured = capsys.readouterr()
    assert (captured.out, captured.err) == ("answer\\x1b\n", "talk\\x07\n")


def test_a_terminal_that_knows_few_characters_gets_the_rest_written_out(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    raw = io.BytesIO()
    monkeypatch.setattr(sys, "stdout", io.TextIOWrapper(raw, encoding="ascii"))
    print_answer(Answer({}, ("1.0 ± 0.1 µV",)), as_json=False)
    assert raw.getvalue() == b"1.0 \\xb1 0.1 \\xb5V\n"


def test_an_error_names_what_where_remedy_and_all_further_faults() -> None:
    error = InputError("bad\x1b", where="file.csv, line 2", remedy="mend it", faults=("line 3: worse",))
    assert error_document(error) == {
        "error": {
            "what": "bad\x1b",
            "where": "file.csv, line 2",
            "remedy": "mend it",
            "faults": ["line 3: worse"],
        }
    }
    assert error_lines(error) == ["file.csv, line 2: bad\x1b", "  also: line 3: worse", "  -> mend it"]


def test_a_reader_that_goes_away_is_no_error() -> None:
    program = "import sys; from registry.command.main import run; sys.exit(run(['quantities']))"
    with subprocess.Popen(
        [sys.executable, "-c", program], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    ) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        err = process.stderr.read()
    assert process.returncode == 0
    assert b"Traceback" not in err
    assert b"BrokenPipe" not in err
