"""How tests of the command line run a command, and what an afternoon's files hold."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from registry.command.main import run

GATES = """\
gate,role,x_nm,y_nm,v_min,v_max,max_step,max_rate,ramp_order
B1,barrier,0,0,-1,1.5,0.01,0.1,2
P1,plunger,60,0,-1,1.5,0.01,0.1,3
B2,barrier,120,0,-1,1.5,0.01,0.1,2
T1,sensor,60,200,-1,1.5,0.01,0.1,1
"""
SITES = "site,kind,gates,carrier\nD1,dot,B1 P1 B2,electron\nS1,sensor,T1,electron\n"
PAIRS = "gate_a,gate_b,low,high\nP1,B1,-1,1.2\n"
WIRING = """\
line;gates;source;divider;offset;out_min;out_max;resolution
L1;B1;rack A;5;0;-10;10;0,00001
L2;P1;rack A;5;0,001;-10;10;0,00001
L3;B2;rack A;5;0;-10;10;0,00001
L4;T1;rack A;1;0;-10;10;0,00001
"""


@dataclass(frozen=True)
class Outcome:
    """What a command left: its exit code and what it wrote."""

    code: int
    out: str
    err: str

    @property
    def document(self) -> Any:
        """stdout as the one JSON document that it must be."""
        return json.loads(self.out)


Shell = Callable[..., Outcome]


@pytest.fixture
def shell(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Shell:
    """Run one command line in an empty directory, against a registry that is not there yet."""
    folder = tmp_path / "desk"
    folder.mkdir()
    monkeypatch.chdir(folder)
    monkeypatch.setenv("MILLIKEEP_REGISTRY", str(tmp_path / "registry"))

    def call(*words: object) -> Outcome:
        capsys.readouterr()
        code = run([str(word) for word in words])
        captured = capsys.readouterr()
        return Outcome(code, captured.out, captured.err)

    return call


TABLES = {
    "gates.csv": GATES,
    "sites.csv": SITES,
    "pairs.csv": PAIRS,
    "wiring.csv": WIRING,
    "first.csv": "gate,volts\nB1,0.42\nP1,0.61\nB2,0.4\nT1,0.8\n",
    "second.csv": "gate,volts\nB1,0.43\nP1,0.615\nB2,0.4\nT1,0.8\n",
}
BEGINNING = (
    "chip add K7",
    "device add K7/A --gates gates.csv --sites sites.csv --pairs pairs.csv --at 2026-01-05T08:00:00Z",
    "cooldown begin C1 --cryostat Pond --chip K7 --wiring wiring.csv --at 2026-03-01T08:00:00Z",
)


@pytest.fixture(scope="session")
def made_once(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A closed registry with a chip, a device and a cooldown with wiring, to be copied."""
    desk = tmp_path_factory.mktemp("desk")
    place = tmp_path_factory.mktemp("made") / "registry"
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(desk)
        patch.setenv("MILLIKEEP_REGISTRY", str(place))
        patch.setenv("MILLIKEEP_AS", "test person")
        for name, text in TABLES.items():
            Path(name).write_text(text)
        for words in ("create", *BEGINNING):
            assert run(words.split()) == 0
    return place


@pytest.fixture
def lab(shell: Shell, made_once: Path, tmp_path: Path) -> Shell:
    """A registry with a chip, a device, a cooldown with wiring, and its tables on the desk."""
    for name, text in TABLES.items():
        Path(name).write_text(text)
    shutil.copytree(made_once, tmp_path / "registry")
    return shell


@pytest.fixture
def lab_on_postgresql(shell: Shell, postgres_url: str, monkeypatch: pytest.MonkeyPatch) -> Shell:
    """The same on PostgreSQL."""
    monkeypatch.setenv("MILLIKEEP_REGISTRY", postgres_url)
    for name, text in TABLES.items():
        Path(name).write_text(text)
    for words in ("create --files store", *BEGINNING):
        outcome = shell(*words.split())
        assert outcome.code == 0, outcome.err
    return shell


def write_peaks(path: Path, *, seed: int = 7, at: str = "2026-03-02T09:00:00Z") -> None:
    """A Coulomb-peak trace as NXdata: lever arm 0.1, electrons at 100 mK, white noise.

    Line shape cosh^-2(e alpha (V - V0) / 2 k T): Beenakker, Phys. Rev. B 44, 1646 (1991),
    equation 3.14; k / e from the exact constants of the SI.
    """
    thermal = 1.380649e-23 / 1.602176634e-19 * 0.1
    volts = np.arange(0.600, 0.640, 2.5e-5)
    current = np.zeros_like(volts)
    for position in (0.608, 0.620, 0.632):
        current += 1e-9 / np.cosh(0.1 * (volts - position) / (2 * thermal)) ** 2
    current += np.random.default_rng(seed).normal(0.0, 1e-12, volts.size)
    with h5py.File(path, "w") as file:
        entry = file.create_group("entry")
        entry.attrs["NX_class"] = "NXentry"
        entry["start_time"] = at
        data = entry.create_group("data")
        data.attrs.update({"NX_class": "NXdata", "signal": "current", "axes": ["P1"]})
        data["P1"] = volts
        data["P1"].attrs["units"] = "V"
        data["current"] = current
        data["current"].attrs["units"] = "A"


@pytest.fixture
def peaks(shell: Shell) -> Path:
    """A file of Coulomb peaks on the desk."""
    path = Path("peaks.h5")
    write_peaks(path)
    return path
