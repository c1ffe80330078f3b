from pathlib import Path

import pytest

from registry.errors import InputError
from registry.reading.limit_lists import read_criteria
from registry.reading.setpoints import read_settings, read_volts
from registry.reading.sheets import read_gates, read_pairs, read_sites, read_wiring

GATES = "gate,role,x_nm,y_nm,v_min,v_max,max_step,max_rate\n"
WIRING = "line,gates,source,divider,offset,out_min,out_max,resolution"


def write(tmp_path: Path, text: str | bytes, name: str = "table.csv") -> Path:
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def test_gates_come_with_their_limits_and_further_columns_as_notes(tmp_path: Path) -> None:
    path = write(tmp_path, GATES.strip() + ",ramp_order,colour\nP1,plunger,0,40,-1.5,2,0.01,0.1,2,blue\n")
    (gate,) = read_gates(path)
    assert (gate.gate, gate.role, gate.y_nm, gate.v_min, gate.v_max) == ("P1", "plunger", 40.0, -1.5, 2.0)
    assert (gate.max_step, gate.max_rate, gate.ramp_order) == (0.01, 0.1, 2)
    assert gate.notes == {"colour": "blue"}


def test_an_empty_cell_of_an_optional_column_means_not_given(tmp_path: Path) -> None:
    (gate,) = read_gates(write(tmp_path, GATES.strip() + ",ramp_order,hue\nP1,plunger,0,0,-1,1,0.1,1,,\n"))
    assert gate.ramp_order is None
    assert gate.notes == {}


SAME_TABLE = {
    "commas": "gate,volts\nP1,0.5\nB2,-1.25\n",
    "semicolons with decimal commas": "gate;volts\nP1;0,5\nB2;-1,25\n",
    "semicolons with decimal points": "gate;volts\nP1;0.5\nB2;-1.25\n",
    "tabs": "gate\tvolts\nP1\t0.5\nB2\t-1.25\n",
    "byte-order mark": b"\xef\xbb\xbfgate,volts\r\nP1,0.5\r\nB2,-1.25\r\n",
    "UTF-16": "gate,volts\nP1,0.5\nB2,-1.25\n".encode("utf-16"),
    "comments, blank lines and spaces": "# notebook 4\n\n gate , volts \nP1, 0.5\n\n# half\nB2 , -1.25",
    "quotes": '"gate","volts"\n"P1","0.5"\n"B2","-1.25"\n',
    "other columns and order": "note,volts,gate\nwhy,5e-1,P1\n,-1.25,B2\n",
    "a typographic minus": "gate,volts\nP1,0.5\nB2,−1.25\n",
}


@pytest.mark.parametrize("text", SAME_TABLE.values(), ids=SAME_TABLE.keys())
def test_a_table_reads_the_same_however_a_spreadsheet_writes_it(tmp_path: Path, text: str | bytes) -> None:
    assert read_volts(write(tmp_path, text)) == ({"P1": 0.5, "B2": -1.25}, "gate")


def test_volts_of_lines_are_told_apart_from_volts_of_gates(tmp_path: Path) -> None:
    assert read_volts(write(tmp_path, "line,volts\nL3,-0\n")) == ({"L3": 0.0}, "line")


BAD_VOLTS = {
    "word": ("gate,volts\nP1,high\n", "line 2, column volts", "'high' is not a finite number in V"),
    "not a number": ("gate,volts\nP1,nan\n", "line 2, column volts", "'nan'"),
    "infinite": ("gate,volts\nP1,1e999\n", "line 2, column volts", "'1e999'"),
    "unit in the cell": ("gate,volts\nP1,5 mV\n", "line 2, column volts", "write the number alone"),
    "digit groups": ("gate,volts\nP1,1_000\n", "line 2, column volts", "'1_000'"),
    "digits of another script": ("gate,volts\nP1,٣\n", "line 2, column volts", "not a finite number"),
    "decimal comma between tabs": ("gate\tvolts\nP1\t0,5\n", "line 2, column volts", "need semicolons"),
    "empty number": ("gate,volts\nP1,\n", "line 2, column volts", "a number in V is missing"),
    "empty name": ("gate,volts\n,1\n", "line 2, column gate", "a name is missing"),
    "colon in a name": ("gate,volts\nP:1,1\n", "line 2, column gate", "':'"),
    "slash in a name": ("gate,volts\nP/1,1\n", "line 2, column gate", "'/'"),
    "space in a name": ("gate,volts\nP 1,1\n", "line 2, column gate", "'P 1'"),
    "escape sequence in a name": ("gate,volts\nP\x1b[2J,1\n", "line 2, column gate", "invisible"),
    "zero-width character in a name": ("gate,volts\nP\u200b1,1\n", "line 2, column gate", "invisible"),
    "twice": ("gate,volts\nP1,1\n\nP1,2\n", "line 4, column gate", "'P1' stands in line 2 already"),
    "one name, two spellings": ("gate,volts\n\u00e9,1\ne\u0301,2\n", "line 3, column gate", "line 2 already"),
    "short row": ("gate,volts\nP1\n", "line 2", "1 cells where the header has 2"),
    "long row": ("gate,volts\nP1,1,2\n", "line 2", "3 cells"),
    "no volts column": ("gate,value\nP1,1\n", "line 1", "column 'volts' is missing; found 'gate', 'value'"),
    "column twice": ("gate,volts,volts\nP1,1,2\n", "line 1", "column 'volts' stands there twice"),
    "gate and line": ("gate,line,volts\nP1,L1,1\n", "table.csv", "both a gate and a line column"),
    "neither gate nor line": ("name,volts\nP1,1\n", "table.csv", "neither"),
    "open quote": ('gate,volts\n"P1,1\n', "line 2", "quotation marks"),
    "empty file": ("", "line 1", "'volts' is missing; found nothing"),
    "header only": ("gate,volts\n", "line", "no row"),
    "Latin-1 text": ("gate,volts\nP\u00e9,1\n".encode("latin-1"), "line 2", "byte 0xE9 is not UTF-8"),
    "picture": (b"\x89PNG\r\n\x1a\n\x00\x00", "line 1", "byte 0x89"),
    "NUL characters": (b"gate,volts\nP\x00,1\n", "table.csv", "NUL"),
}


@pytest.mark.parametrize(("text", "where", "what"), BAD_VOLTS.values(), ids=BAD_VOLTS.keys())
def test_a_bad_table_is_refused_with_line_column_and_cell(
    tmp_path: Path, text: str | bytes, where: str, what: str
) -> None:
    with pytest.raises(InputError) as caught:
        read_volts(write(tmp_path, text))
    assert where in caught.value.where
    assert what in caught.value.what
    assert caught.value.remedy


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="No such file"):
        read_gates(tmp_path / "nowhere.csv")


def test_a_name_that_no_file_can_have_is_refused() -> None:
    with pytest.raises(InputError, match="cannot be read"):
        read_gates(Path("a\0b"))


def test_all_faults_of_a_file_come_together_in_its_order(tmp_path: Path) -> None:
    path = write(tmp_path, GATES + "P1,plunger,0,0,1,-1,0.1,1\nP 2,plunger,x,0,-1,1,0,-2\nP1,a,0,0,0,1,1,1\n")
    with pytest.raises(InputError) as caught:
        read_gates(path)
    told = [f"{caught.value.where}: {caught.value.what}", *caught.value.faults]
    assert "line 2" in told[0]
    assert "v_min 1.0 V is not below v_max -1.0 V" in told[0]
    places = [fault.split(":")[0] for fault in told[1:]]
    assert places == [
        "line 3, column gate",
        "line 3, column x_nm",
        "line 3, column max_step",
        "line 3, column max_rate",
        "line 4, column gate",
    ]


def test_a_file_full_of_faults_shows_the_first_twenty(tmp_path: Path) -> None:
    path = write(tmp_path, "gate,volts\n" + "".join(f"G{n},?\n" for n in range(30)))
    with pytest.raises(InputError) as caught:
        read_volts(path)
    assert len(caught.value.faults) == 20
    assert caught.value.faults[-1] == "and 10 more"


def test_sites_name_their_gates_and_carrier(tmp_path: Path) -> None:
    path = write(tmp_path, "site,kind,gates,carrier\nD1,dot,B1 P1 B2,hole\nS1,sensor,T1,\n")
    one, other = read_sites(path)
    assert (one.gates, one.carrier) == (("B1", "P1", "B2"), "hole")
    assert (other.kind, other.carrier) == ("sensor", "electron")


BAD_SITES = {
    "unknown gate": ("D1,dot,B1 X9\n", "'X9' is no gate of this device"),
    "no gate": ("D1,dot,\n", "no name is given"),
    "gate twice": ("D1,dot,B1 B1\n", "'B1' is named twice"),
    "site twice": ("D1,dot,B1\nD1,dot,P1\n", "'D1' stands in line 2 already"),
}


@pytest.mark.parametrize(("rows", "what"), BAD_SITES.values(), ids=BAD_SITES.keys())
def test_a_bad_site_is_refused(tmp_path: Path, rows: str, what: str) -> None:
    with pytest.raises(InputError) as caught:
        read_sites(write(tmp_path, "site,kind,gates\n" + rows), known_gates=("B1", "P1"))
    assert what in caught.value.what


def test_pair_limits_are_read_and_their_order_of_gates_kept(tmp_path: Path) -> None:
    (pair,) = read_pairs(write(tmp_path, "gate_a,gate_b,low,high\nP1,B1,-0.5,1\n"), known_gates=("B1", "P1"))
    assert (pair.gate_a, pair.gate_b, pair.low, pair.high) == ("P1", "B1", -0.5, 1.0)


BAD_PAIRS = {
    "the same pair turned round": ("P1,B1,-1,1\nB1,P1,-1,1\n", "stands in line 2 already"),
    "against itself": ("P1,P1,-1,1\n", "against itself"),
    "low above high": ("P1,B1,1,-1\n", "low 1.0 V is not below high -1.0 V"),
    "unknown gate": ("P1,Q,-1,1\n", "'Q' is no gate"),
}


@pytest.mark.parametrize(("rows", "what"), BAD_PAIRS.values(), ids=BAD_PAIRS.keys())
def test_a_bad_pair_limit_is_refused(tmp_path: Path, rows: str, what: str) -> None:
    with pytest.raises(InputError) as caught:
        read_pairs(write(tmp_path, "gate_a,gate_b,low,high\n" + rows), known_gates=("B1", "P1"))
    assert what in caught.value.what


def test_a_line_may_serve_gates_of_several_devices(tmp_path: Path) -> None:
    columns = ",kind,divider_u,filter_hz,attenuation_db,gain,bundle"
    path = write(tmp_path, WIRING + columns + "\nL1,P1 W3/two:P1,src A,5,0.001,-10,10,1e-5,dc,0.01,30,,,7\n")
    (line,) = read_wiring(path)
    assert line.gates == ("P1", "W3/two:P1")
    assert (line.source, line.divider, line.divider_u, line.filter_hz) == ("src A", 5.0, 0.01, 30.0)
    assert (line.attenuation_db, line.gain, line.notes) == (None, False, {"bundle": "7"})


def test_a_divider_below_one_is_taken_where_the_line_has_gain(tmp_path: Path) -> None:
    (line,) = read_wiring(write(tmp_path, WIRING + ",gain\nL1,P1,a,0.5,0,-1,1,1e-5,yes\n"))
    assert line.gain
    assert line.divider == 0.5


BAD_LINES = {
    "divider below one": ("L1,P1,a,0.5,0,-1,1,1e-5,\n", "divider 0.5 is below 1"),
    "divider zero": ("L1,P1,a,0,0,-1,1,1e-5,yes\n", "0 is not above 0"),
    "no resolution": ("L1,P1,a,1,0,-1,1,0,\n", "0 is not above 0"),
    "range upside down": ("L1,P1,a,1,0,1,-1,1e-5,\n", "out_min is not below out_max"),
    "gain in other words": ("L1,P1,a,1,0,-1,1,1e-5,maybe\n", "'maybe' is not one of no, yes"),
    "line twice": ("L1,P1,a,1,0,-1,1,1e-5,\nL1,P2,a,1,0,-1,1,1e-5,\n", "'L1' stands in line 2"),
}


@pytest.mark.parametrize(("rows", "what"), BAD_LINES.values(), ids=BAD_LINES.keys())
def test_a_bad_line_is_refused(tmp_path: Path, rows: str, what: str) -> None:
    with pytest.raises(InputError) as caught:
        read_wiring(write(tmp_path, WIRING + ",gain\n" + rows))
    assert what in caught.value.what


def test_settings_keep_the_unit_they_were_written_with(tmp_path: Path) -> None:
    path = write(tmp_path, "name;value;unit\nbias;0,5;mV\nfield;1;T\nratio;2;1\n")
    assert read_settings(path) == {"bias": (0.5, "mV"), "field": (1.0, "T"), "ratio": (2.0, "1")}


def test_a_setting_without_unit_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="write 1 for a plain number"):
        read_settings(write(tmp_path, "name,value,unit\nbias,5,\n"))


def test_criteria_are_read_with_their_defaults(tmp_path: Path) -> None:
    text = '[[require]]\nquantity = "electron_temperature"\nat_most = 150\nunit = "mK"\n'
    text += '[[require]]\nquantity = "lever_arm"\nat_least = 0.05\nunit = "eV/V"\n'
    text += 'scope = "cooldown"\nguard = 1.5\n'
    one, other = read_criteria(write(tmp_path, text, "c.toml"))
    assert (one.at_most, one.at_least, one.unit, one.subject) == (150.0, None, "mK", None)
    assert (one.guard, one.scope, one.max_age_days) == (2.0, "state", None)
    assert (other.at_least, other.scope, other.guard) == (0.05, "cooldown", 1.5)


HEAD = '[[require]]\nquantity = "lever_arm"\nunit = "1"\n'
BAD_CRITERIA = {
    "no TOML": ("[[require]\n", "c.toml", "is no TOML"),
    "nothing required": ("", "top level", "no [[require]] table"),
    "another table": (
        '[limits]\na = 1\n[[require]]\nquantity="q"\nunit="1"\nat_most=1\n',
        "top level",
        "'limits'",
    ),
    "misspelt member": (HEAD + "atmost = 1\n", "line 1", "did you mean 'at_most'"),
    "no limit": (HEAD, "line 1", "exactly one of at_most and at_least"),
    "both limits": (HEAD + "at_most = 1\nat_least = 0\n", "line 1", "exactly one"),
    "limit as text": (HEAD + 'at_most = "1"\n', "line 1, at_most", "'1' is not a number"),
    "limit not finite": (HEAD + "at_most = nan\n", "line 1", "not finite"),
    "unknown scope": (HEAD + 'at_most = 1\nscope = "week"\n', "line 1", "'week'"),
    "no unit": ('\n[[require]]\nquantity = "lever_arm"\nat_most = 1\n', "line 2", "'unit' is missing"),
    "negative age": (HEAD + "at_most = 1\nmax_age_days = -1\n", "line 1", "max_age_days"),
}


@pytest.mark.parametrize(("text", "where", "what"), BAD_CRITERIA.values(), ids=BAD_CRITERIA.keys())
def test_bad_criteria_are_refused_with_their_place(tmp_path: Path, text: str, where: str, what: str) -> None:
    with pytest.raises(InputError) as caught:
        read_criteria(write(tmp_path, text, "c.toml"))
    assert where in caught.value.where
    assert what in caught.value.what
