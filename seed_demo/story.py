"""What ``millikeep demo`` tells: the invented laboratory, its year, and what to ask next."""

from __future__ import annotations

import shlex
import shutil
import sys
from pathlib import Path

from registry.cautions import CAUTIONS
from registry.command.printing import wrap
from registry.keeping.handle import Registry
from registry.records.instants import format_instant
from seed_demo import chapters
from seed_demo.building import DemoReport, build_demo
from seed_demo.catalogue import devices
from seed_demo.entering import CRITERIA

__all__ = ["DemoReport", "build_demo", "commands", "story_lines"]

_CHIEF = devices()[0].path
"""The device whose year is told."""
_NUMBER = ("electron_temperature", "S1")


def story_lines(reg: Registry) -> list[str]:
    """The year as the registry knows it: some forty to fifty lines of at most 80 columns.

    Only the line that names the registry may be longer.  The last lines name the last
    good state after the power cut.

    Args:
        reg: a registry with the invented year; open for reading is enough.

    Raises:
        LookupFailed: it is no registry of the demo.
    """
    life = chapters.history(reg, _CHIEF)
    cut = chapters.power_cut(life)
    from_where, _ = chapters.came_from(reg, _CHIEF, *_NUMBER)
    known: list[str] = []
    ending: list[str] = []
    if cut is not None:
        known, before = chapters.standing_before(reg, _CHIEF, cut)
        last, after = chapters.standing_after(reg, _CHIEF, life, cut)
        known += chapters.differences(reg, before, after)
        ending = [f"{_CHIEF} AFTER THE POWER CUT, as known at the end of that cold stretch", *last]
    return [
        *chapters.counted(reg),
        "WHAT HAPPENED",
        *chapters.happened(reg, tuple(device.path for device in devices())),
        "WHAT THE REGISTRY ANSWERS",
        *known,
        *from_where,
        *chapters.withdrawn(reg),
        *chapters.audited(reg),
        "ASK IT YOURSELF",
        *_pasteable(reg),
        "BEFORE YOU DO THIS WITH A REAL DEVICE",
        *wrap(" ".join(CAUTIONS)),
        *ending,
    ]


def commands(reg: Registry) -> list[list[str]]:
    """Command lines worth typing next, each as its words; all of them only ask.

    Raises:
        LookupFailed: it is no registry of the demo.
    """
    base = ["millikeep", "--registry", reg.where]
    cut = chapters.power_cut(chapters.history(reg, _CHIEF))
    _, number = chapters.came_from(reg, _CHIEF, *_NUMBER)
    asked = [["now", _CHIEF], ["last-good", _CHIEF, "--by", CRITERIA]]
    if cut is not None:
        asked.append(["last-good", _CHIEF, "--as-of", _plain_time(cut.at - 1_000_000)])
    if number is not None:
        asked.append(["lineage", number[:10]])
    asked += [["compare", f"{_CHIEF}:previous", f"{_CHIEF}:latest"], ["audit"]]
    return [[*base, *words] for words in asked]


def _plain_time(at: int) -> str:
    return format_instant(at).replace(".000000Z", "Z")


def _pasteable(reg: Registry) -> list[str]:
    """The commands for a shell, the registry named once before them."""
    program = _program()
    lines = [f"  export MILLIKEEP_REGISTRY={shlex.quote(_nearby(reg.where))}"]
    return lines + [f"  {program} {shlex.join(words[3:])}" for words in commands(reg)]


def _program() -> str:
    """The program as the shell finds it here: by its name, else by where it was started."""
    started = Path(sys.argv[0])
    if shutil.which("millikeep") is None and started.name == "millikeep":
        return shlex.quote(_nearby(str(started.absolute())))
    return "millikeep"


def _nearby(word: str) -> str:
    """A path below the present directory without what leads there."""
    path = Path(word)
    here = Path.cwd()
    return str(path.relative_to(here)) if path.is_absolute() and path.is_relative_to(here) else word
