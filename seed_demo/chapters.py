"""What a registry of the invented year answers, each question a short chapter of text.

Every number and every word about the year is asked of the registry; a chapter for which
it holds nothing is empty.
"""

from __future__ import annotations

import registry as millikeep
from registry.command.printing import millivolts, moment, plain, wrap
from registry.keeping.handle import Registry
from registry.keeping.naming import short
from registry.questions.asking import ask
from registry.questions.devices import find_body
from registry.questions.happenings import Happening
from registry.questions.last_good import LastGood
from registry.questions.lineage import Lineage
from registry.questions.stretches import History, history_of
from registry.records.measured import measured

__all__ = [
    "audited",
    "came_from",
    "counted",
    "differences",
    "happened",
    "history",
    "power_cut",
    "standing_after",
    "standing_before",
    "withdrawn",
]

_LARGEST_SHOWN = 3
_HOUR_US = 3_600_000_000
_HOURS_AFTER = 6
"""How long after the power cut the demo asks again: nobody has tuned anything by then."""
_TOLD = ("power-loss", "charge-jump", "rewired", "discharge", "illumination", "gate-stress")
"""Kinds of event worth a line; every cooldown has its base and its warm-up."""


def history(reg: Registry, device: str) -> History:
    """Events and stretches of a device."""
    with reg.reading() as connection:
        return history_of(connection, find_body(connection, device))


def power_cut(life: History) -> Happening | None:
    """The first power loss that the device met."""
    return next((event for event in life.events if event.event == "power-loss"), None)


def counted(reg: Registry) -> list[str]:
    """What the laboratory owns and what it has recorded."""
    with reg.reading() as connection:
        kinds = {row[0]: row[1] for row in ask(connection, "SELECT kind, count(*) FROM record GROUP BY kind")}
        told = ask(connection, "SELECT count(*) FROM tuning WHERE raw_file_no IS NOT NULL")[0][0]
        derived = ask(connection, "SELECT count(*) FROM parameter WHERE analysis_no IS NOT NULL")[0][0]
        files = ask(connection, "SELECT count(DISTINCT measurement_no) FROM " + _ANALYSED)[0][0]
        owned = ask(
            connection,
            "SELECT c.label, d.name FROM device d JOIN chip c ON c.no = d.chip_no ORDER BY d.no",
        )
    lines = ["AN INVENTED LABORATORY: simulated from end to end, no number in it is real"]
    lines += wrap("devices: " + ", ".join(f"{row[0]}/{row[1]}" for row in owned))
    states, values = kinds.get("tuning", 0), kinds.get("parameter", 0)
    lines += wrap(
        f"on record: {kinds.get('cooldown', 0)} cooldowns, {kinds.get('measurement', 0)} measurements, "
        f"{states} tuning states ({told} of them told by the files), {values} parameters"
    )
    return lines + wrap(
        f"{files} measurements are fitted ({derived} parameters), the others are left for you to derive"
    )


_ANALYSED = "(SELECT target_no AS measurement_no FROM link WHERE role = 'measurements') AS fitted"


def happened(reg: Registry, devices: tuple[str, ...]) -> list[str]:
    """The events that tell a story, and gates that are not well, oldest first."""
    found: dict[bytes, tuple[int, str]] = {}
    for device in devices:
        for event in history(reg, device).events:
            if event.event in _TOLD:
                what = event.words.partition(" at ")[0]
                note = f": {event.note}" if event.note else ""
                found.setdefault(event.digest, (event.at, f"{what}{_whose(event, device)}{note}"))
        for finding in millikeep.now(reg, device).unhealthy:
            what = finding.words.partition(" at ")[0]
            found[finding.digest] = (finding.at, f"{what} in {device}: {finding.note or 'no note'}")
    found |= _new_code(reg)
    return [line for at, words in sorted(found.values()) for line in wrap(f"{moment(at)}  {words}")]


def _whose(event: Happening, device: str) -> str:
    return f" in {device}" if event.site or event.gate else ""


def _new_code(reg: Registry) -> dict[bytes, tuple[int, str]]:
    """When values began to come from this program's methods and no longer from elsewhere."""
    with reg.reading() as connection:
        old = ask(
            connection,
            "SELECT method, max(moment) FROM parameter WHERE analysis_no IS NULL AND method IS NOT NULL"
            " GROUP BY method ORDER BY method",
        )
        new = ask(connection, "SELECT min(moment) FROM parameter WHERE analysis_no IS NOT NULL")[0][0]
    if not old or new is None:
        return {}
    words = f"from here on fits by this program, before by {', '.join(row[0] for row in old)}"
    return {b"": (new, words)}


# --- the power cut -------------------------------------------------------------------------


def standing_before(reg: Registry, device: str, cut: Happening) -> tuple[list[str], LastGood]:
    """Last good as it was known just before the cut, and some hours after it."""
    before = millikeep.last_good(reg, device, as_of=cut.at - 1)
    lines = [f"  as known just before the power cut, {device}:", *_answer(reg, before)]
    after = millikeep.last_good(reg, device, as_of=cut.at + _HOURS_AFTER * _HOUR_US)
    lines.append(f"  and {_HOURS_AFTER} hours after it:")
    if before.state and after.state and before.state.no == after.state.no:
        lines += wrap(f"the same state, {after.freshness}", "    ")
    else:
        lines += _answer(reg, after)
    return lines + [line for asked in after.asks for line in wrap(f"first: {asked}", "    ")], before


def standing_after(reg: Registry, device: str, life: History, cut: Happening) -> tuple[list[str], LastGood]:
    """Last good as it was known at the end of the stretch that the cut began."""
    stretch = next((s for s in life.stretches if s.begins >= cut.at), None)
    end = None if stretch is None or stretch.ends is None else stretch.ends - 1
    answer = millikeep.last_good(reg, device, as_of=end)
    lines = []
    for passed in answer.passed_over:
        if passed.reason != "no standing yet":
            lines += wrap(f"newer, but passed over: {_short(reg, passed.id)} ({passed.reason})", "    ")
    return [*lines, *_answer(reg, answer)], answer


def _answer(reg: Registry, answer: LastGood) -> list[str]:
    """The state, its standing and its freshness; or why there is none."""
    if answer.state is None:
        return wrap(answer.why_none or "no good state", "    ")
    why = f"{answer.judgement.words}; " if answer.judgement else ""
    head = (
        f"{_short(reg, answer.state.hex)} of {moment(answer.state.time)}, cooldown {answer.cooldown or '-'}"
    )
    return [f"    last good: {plain(head)}", *wrap(f"{why}{answer.freshness}", "    ")]


def differences(reg: Registry, before: LastGood, after: LastGood) -> list[str]:
    """The gates that moved most between two states, and what else differs."""
    if before.state is None or after.state is None or before.state.no == after.state.no:
        return []
    answer = millikeep.compare(reg, before.state.hex, after.state.hex)
    moved = [(abs(g.difference), g.gate, g.difference) for g in answer.gates if g.difference]
    largest = [f"{name} {millivolts(by, sign=True)} mV" for _, name, by in sorted(moved)[::-1]]
    of = f"{len(moved)} of {len(answer.gates)} gates differ"
    return wrap(f"from before the cut to after it {of}, most {', '.join(largest[:_LARGEST_SHOWN])}")


# --- one number, one mistake, the whole ----------------------------------------------------


def came_from(reg: Registry, device: str, quantity: str, subject: str) -> tuple[list[str], str | None]:
    """The newest value of a quantity and the file and code it came from; with its id."""
    values = [
        point
        for point in millikeep.points(reg, device, quantity, subject=subject)
        if point.value is not None and point.analysis_no is not None
    ]
    if not values:
        return [], None
    newest = values[-1]
    value = measured(newest.value, newest.standard_uncertainty, newest.unit, newest.bound)
    lines = wrap(f"{quantity} of {subject} in {device}: {value}")
    made_from = millikeep.lineage(reg, newest.id)
    for node in made_from.nodes:
        if node.kind == "measurement":
            lines += wrap(f"measured in the file {node.details['file_name']}", "    ")
        elif node.kind == "analysis":
            code = str(node.details["source_digest"])[:16]
            lines += wrap(f"fitted by {node.what}, code {code}…", "    ")
    return lines + [f"    sha256 {plain(sha256)}" for sha256 in _measured_in(made_from)], newest.id


def _measured_in(made_from: Lineage) -> list[str]:
    """SHA-256 of the measured files in a lineage; layouts are files as well, but not measured."""
    kinds = {node.id: node for node in made_from.nodes}
    return [
        str(kinds[edge.target].details["sha256"])
        for edge in made_from.edges
        if edge.role == "raw_file" and kinds[edge.record].kind == "measurement"
    ]


def withdrawn(reg: Registry) -> list[str]:
    """What was taken back, and how much hangs on it."""
    lines = []
    with reg.reading() as connection:
        rows = ask(
            connection,
            "SELECT w.no, t.kind, count(*) AS tainted FROM withdrawal w"
            " JOIN record t ON t.no = w.target_no JOIN tainted h ON h.withdrawal_no = w.no"
            " GROUP BY w.no, t.kind ORDER BY w.no",
        )
    for row in rows:
        hangs = row.tainted - 1
        lines += wrap(f"withdrawn: one {row.kind}; {hangs} records that hang on it are marked")
    return lines


def audited(reg: Registry) -> list[str]:
    """The audit's result."""
    report = millikeep.audit(reg)
    what = "nothing is damaged" if report.sound else f"{len(report.findings)} FINDINGS: run the audit"
    return wrap(f"audit: {report.records} records and {report.files} files read again, {what}")


def _short(reg: Registry, full: str) -> str:
    with reg.reading() as connection:
        return short(connection, bytes.fromhex(full))
