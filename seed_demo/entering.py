"""How the invented year enters a registry: through the public functions, in order of time.

Every act is dated explicitly, so that each building gives the same records; only the
journal, which tells when they were entered, is another.
"""

from __future__ import annotations

from collections.abc import Callable
from datetime import datetime, timedelta
from pathlib import Path

import registry as millikeep
from registry.keeping.handle import Registry
from registry.records.descriptions import Requirement
from seed_demo import calendar
from seed_demo.calendar import Event, Stay, Stretch
from seed_demo.described import gates_of, instant, lines_of, pairs_of, sites_of, states_text
from seed_demo.layouts import layout_name
from seed_demo.sessions import PlannedFile
from seed_demo.year import PlannedState, Year

__all__ = ["CRITERIA", "FIRST_DESCRIBED", "enter_year", "is_derived"]

CRITERIA = "cold-leads"
"""Name of the criteria by which the states of the double dot are judged since the new code."""

# Chips and devices were written down in the week before the first cooldown.
FIRST_DESCRIBED = calendar.STAYS[0].begin - timedelta(days=5)

# 150 mK: well above the 118 mK of the leads, reached when a filter or a thermal anchor fails.
_WARMEST_LEADS_K = 0.150
_JUDGED_BY_CRITERIA = "ferry"
# Written into the registry from memory at first, and amended the next day.
_BOARD_FIRST_TYPED = {"B4": "board 12"}
# The single dot's first three stretches were kept in a notebook and loaded as a table.
_NOTEBOOK_DEVICE, _NOTEBOOK = "stile", ("B1", "B2a", "B2b")
# A file that was once more admitted, under the state of the session before.
_MISTAKEN_DEVICE, _MISTAKEN_STRETCH, _MISTAKEN_STATE = "ferry", "B5", "ferry/B5/1"

Progress = Callable[[int, int], None]


def is_derived(planned: PlannedFile) -> bool:
    """Whether the laboratory ran the program's own methods on a file.

    Since the change of code on peaks and on the first dot's transitions of the two devices
    that matter most; in the cooldown that still runs on turn-ons of the double dot and on
    peaks of the single one.  The rest is left to whoever plays with the demo, and building
    it stays short.
    """
    if planned.at < calendar.CODE_CHANGE:
        return False
    device, kind = planned.device.name, planned.kind
    if planned.cooldown == "B6":
        return (device, kind) in {("ferry", "pinch-off"), ("stile", "coulomb-peaks")}
    if device not in ("ferry", "kiln"):
        return False
    return kind == "coulomb-peaks" or (kind, planned.subject) == ("dot-transition", "D1")


def enter_year(reg: Registry, year: Year, measured: Path, *, progress: Progress | None = None) -> None:
    """Enter a year into an empty registry.

    Args:
        reg: open for writing, on either engine.
        year: the plan, whole or with some stretches only.
        measured: the folder made by ``write_folder`` for this very plan; a notebook's table
            is added to it.
        progress: called with (files done, files in all).

    Raises:
        MillikeepError: the registry cannot be written, or the computer's clock stands before
            the end of the invented year.
    """
    book = _Book(reg, year, measured, progress)
    with reg.writing():
        book.describe()
    for stretch in year.stretches:
        with reg.writing():
            book.enter(stretch)
    with reg.writing():
        book.load_old_values()


class _Book:
    """One entering: what has been recorded so far, by the plan's own names."""

    def __init__(self, reg: Registry, year: Year, measured: Path, progress: Progress | None) -> None:
        self._reg = reg
        self._year = year
        self._measured = measured
        self._progress = progress
        self._done = 0
        self._begun: set[str] = set()
        self._states: dict[str, str] = {}
        self._paths = {device.name: device.path for device in year.devices}

    def describe(self) -> None:
        """Chips, devices, criteria."""
        at = instant(FIRST_DESCRIBED)
        for chip in self._year.chips:
            kept = millikeep.add_chip(self._reg, chip.label, wafer=chip.wafer, lot=chip.lot, die=chip.die)
            self._describe(kept.hex, {"material": chip.material, "note": chip.note}, at)
        for device in self._year.devices:
            kept = millikeep.add_device(
                self._reg,
                device.path,
                gates=gates_of(device),
                sites=sites_of(device),
                pairs=pairs_of(device),
                at=at,
            )
            self._describe(kept.hex, {"family": device.family}, at)
        limit = Requirement(
            "electron_temperature",
            at_most=_WARMEST_LEADS_K,
            unit="K",
            subject="S1",
            scope="stretch",
            max_age_days=1.0,
        )
        millikeep.add_criteria(self._reg, CRITERIA, [limit], at=instant(calendar.CODE_CHANGE))

    def enter(self, stretch: Stretch) -> None:
        """One cold stretch: what happened in it, what was measured, set and found."""
        stay = next(stay for stay in self._year.stays if stay.label == stretch.cooldown)
        end = calendar.YEAR_END if stretch.end is None else stretch.end
        if stay.label not in self._begun:
            self._begin(stay)
        self._happened(stretch, lambda at: stretch.base <= at < end)
        self._admit([planned for planned in self._year.files if planned.stretch == stretch.name])
        self._set(stretch)
        self._judge(stretch)
        if stretch.name == _MISTAKEN_STRETCH:
            self._mistake()
        self._happened(stretch, lambda at: at == end)

    def load_old_values(self) -> None:
        """The old script's values, a table a device."""
        for name, path in self._paths.items():
            table = self._measured / "old" / f"{name}.csv"
            if table.exists():
                millikeep.load_parameters(self._reg, path, table)

    # --- what happened ---------------------------------------------------------------------

    def _describe(self, record: str, words: dict[str, str], at: int) -> None:
        for field, value in words.items():
            millikeep.amend(self._reg, record, field, value, why="first description", at=at)

    def _begin(self, stay: Stay) -> None:
        self._begun.add(stay.label)
        kept = millikeep.begin_cooldown(
            self._reg,
            stay.label,
            cryostat=stay.cryostat,
            chips=[stay.chip],
            wiring=lines_of(self._year, stay, stay.begin),
            board=_BOARD_FIRST_TYPED.get(stay.label, stay.board),
            at=instant(stay.begin),
        )
        if stay.label in _BOARD_FIRST_TYPED:
            at = instant(stay.begin + timedelta(days=1))
            why = "read off the socket; the number of the old board was typed from memory"
            millikeep.amend(self._reg, kept.hex, "board", stay.board, why=why, at=at)

    def _happened(self, stretch: Stretch, within: Callable[[datetime], bool]) -> None:
        for event in self._year.events:
            if event.cooldown == stretch.cooldown and within(event.at):
                self._mark(event)
        for finding in self._year.health:
            if self._year.device(finding.device).chip == stretch.chip and within(finding.at):
                millikeep.mark_gate(
                    self._reg,
                    self._paths[finding.device],
                    finding.gate,
                    finding.health,
                    above_v=finding.above_v,
                    at=instant(finding.at),
                    note=finding.note or None,
                )

    def _mark(self, event: Event) -> None:
        millikeep.mark_event(
            self._reg,
            event.cooldown,
            event.kind,
            at=instant(event.at),
            until=None if event.until is None else instant(event.until),
            kelvin=event.kelvin,
            device=None if event.device is None else self._paths[event.device],
            gate=event.gate,
            site=event.site,
            details=None if event.shift is None else {"shift": event.shift},
            note=event.note or None,
        )
        if event.kind == "rewired":
            stay = next(stay for stay in self._year.stays if stay.label == event.cooldown)
            since = instant(event.at)
            lines = lines_of(self._year, stay, event.at)
            millikeep.revise_wiring(self._reg, stay.label, lines, since=since, why=event.note, at=since)

    # --- what was measured -----------------------------------------------------------------

    def _admit(self, files: list[PlannedFile]) -> None:
        """Admit a stretch's files in batches of one layout, and derive what is to be derived.

        The layouts come in the order of their last files: in every session the first file
        then is admitted first, and the others are found to have been taken in its state.
        """
        batches: dict[str, list[PlannedFile]] = {}
        for planned in files:
            batches.setdefault(layout_name(planned), []).append(planned)
        for batch in sorted(batches.values(), key=lambda batch: max(planned.at for planned in batch)):
            ids = self._admit_batch(batch)
            for planned, measurement in zip(batch, ids, strict=True):
                if is_derived(planned):
                    self._derive(planned, measurement)
                self._done += 1
                if self._progress is not None:
                    self._progress(self._done, len(self._year.files))

    def _admit_batch(self, batch: list[PlannedFile], tuning: str | None = None) -> list[str]:
        layout = self._measured / "layouts" / layout_name(batch[0])
        paths = [self._measured / "raw" / planned.path for planned in batch]
        admission = millikeep.admit(self._reg, paths, layout=layout, tuning=tuning)
        for failed in admission.failed:
            raise failed.why
        return [one.kept.hex for one in admission.measurements]

    def _derive(self, planned: PlannedFile, measurement: str) -> None:
        millikeep.derive(self._reg, planned.kind, [measurement], subject=planned.subject)

    def _mistake(self) -> None:
        """A file is admitted again, under the state of the session before, and withdrawn."""
        taken_in = self._states.get(_MISTAKEN_STATE)
        later = [
            planned
            for planned in self._year.files
            if (planned.device.name, planned.stretch) == (_MISTAKEN_DEVICE, _MISTAKEN_STRETCH)
            and planned.kind == "coulomb-peaks"
        ]
        if taken_in is None or len(later) < 2:
            return
        planned = later[1]
        (measurement,) = self._admit_batch([planned], tuning=taken_in)
        self._derive(planned, measurement)
        why = "admitted under the state of the session before; its own admission stands"
        at = instant(planned.at + timedelta(hours=4))
        millikeep.withdraw(self._reg, measurement, why=why, at=at)

    # --- what was set and judged -----------------------------------------------------------

    def _set(self, stretch: Stretch) -> None:
        states = [state for state in self._year.states if state.key.split("/")[1] == stretch.name]
        if stretch.name in _NOTEBOOK:
            path = self._paths[_NOTEBOOK_DEVICE]
            self._load_notebook(stretch, [state for state in states if state.device == path])
            states = [state for state in states if state.device != path]
        for state in states:
            self._states[state.key] = self._record(state)
            measured = state.at >= calendar.CODE_CHANGE and not state.revisit
            if measured and state.device == self._paths[_JUDGED_BY_CRITERIA]:
                millikeep.judge_by(self._reg, self._states[state.key], CRITERIA, at=instant(state.at))

    def _record(self, state: PlannedState) -> str:
        parent = None if state.parent is None else self._states[state.parent]
        if state.revisit and parent is not None:
            return millikeep.revisit_tuning(self._reg, parent, at=instant(state.at)).hex
        kept = millikeep.record_tuning(
            self._reg,
            state.device,
            state.volts,
            cooldown=state.cooldown,
            parent=parent,
            purpose=state.purpose,
            sites=state.sites,
            occupation=state.occupation,
            at=instant(state.at),
        )
        return kept.hex

    def _load_notebook(self, stretch: Stretch, states: list[PlannedState]) -> None:
        if not states:
            return
        table = self._measured / "old" / f"{_NOTEBOOK_DEVICE}-states-{stretch.name}.csv"
        table.parent.mkdir(parents=True, exist_ok=True)
        table.write_text(states_text(states, self._year.judgements), encoding="utf-8", newline="\n")
        millikeep.load_tunings(self._reg, self._paths[_NOTEBOOK_DEVICE], table)

    def _judge(self, stretch: Stretch) -> None:
        for judgement in self._year.judgements:
            tuning = self._states.get(judgement.state)
            if tuning is not None and judgement.state.split("/")[1] == stretch.name:
                at = instant(judgement.at)
                millikeep.judge(self._reg, tuning, judgement.standing, why=judgement.why, at=at)
