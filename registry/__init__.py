"""Device history of gate-defined quantum-dot chips.

Open a registry, record what is there, keep measured files, derive numbers, ask::

    import registry

    with registry.open_registry("/data/millikeep", person="ada") as reg:
        answer = registry.last_good(reg, "K7/D1")

Names are resolved on first use, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from registry.errors import BadNews as BadNews
    from registry.errors import DamageError as DamageError
    from registry.errors import InputError as InputError
    from registry.errors import LookupFailed as LookupFailed
    from registry.errors import MillikeepError as MillikeepError
    from registry.errors import RegistryError as RegistryError
    from registry.keeping.admitting import admit as admit
    from registry.keeping.auditing import audit as audit
    from registry.keeping.backups import backup as backup
    from registry.keeping.backups import migrate as migrate
    from registry.keeping.changing import amend as amend
    from registry.keeping.changing import attach as attach
    from registry.keeping.changing import same_as as same_as
    from registry.keeping.changing import withdraw as withdraw
    from registry.keeping.cooling import begin_cooldown as begin_cooldown
    from registry.keeping.cooling import mark_event as mark_event
    from registry.keeping.cooling import revise_wiring as revise_wiring
    from registry.keeping.deriving import derive as derive
    from registry.keeping.deriving import fit_file as fit_file
    from registry.keeping.describing import add_chip as add_chip
    from registry.keeping.describing import add_device as add_device
    from registry.keeping.describing import add_quantity as add_quantity
    from registry.keeping.describing import mark_gate as mark_gate
    from registry.keeping.describing import revise_device as revise_device
    from registry.keeping.handle import Registry as Registry
    from registry.keeping.judging import add_criteria as add_criteria
    from registry.keeping.judging import judge as judge
    from registry.keeping.loading import load_parameters as load_parameters
    from registry.keeping.loading import load_tunings as load_tunings
    from registry.keeping.opening import create as create
    from registry.keeping.opening import open_registry as open_registry
    from registry.keeping.stamping import stamp as stamp
    from registry.keeping.tunings import record_tuning as record_tuning
    from registry.keeping.tunings import revisit_tuning as revisit_tuning
    from registry.physics.methods import method as method
    from registry.questions.compare import compare as compare
    from registry.questions.find import find as find
    from registry.questions.frames import events_frame as events_frame
    from registry.questions.frames import parameters_frame as parameters_frame
    from registry.questions.frames import states_frame as states_frame
    from registry.questions.last_good import last_good as last_good
    from registry.questions.lineage import lineage as lineage
    from registry.questions.now import now as now
    from registry.questions.parameters import points as points
    from registry.questions.tunings import list_tunings as list_tunings
    from registry.questions.tunings import show_tuning as show_tuning
    from registry.questions.verdict import judge_by as judge_by
    from registry.questions.verdict import verdict as verdict
    from registry.reading.entry import read_file as read_file
    from registry.reading.layout import load_layout as load_layout
    from registry.records.descriptions import Gate as Gate
    from registry.records.descriptions import Line as Line
    from registry.records.descriptions import PairLimit as PairLimit
    from registry.records.descriptions import Requirement as Requirement
    from registry.records.descriptions import Site as Site
    from registry.records.instants import format_instant as format_instant
    from registry.records.instants import parse_instant as parse_instant
    from registry.samples import Axis as Axis
    from registry.samples import Samples as Samples
    from registry.samples import Signal as Signal
    from registry.samples import Sweep as Sweep

_PLACES = {
    "Axis": "registry.samples",
    "BadNews": "registry.errors",
    "DamageError": "registry.errors",
    "Gate": "registry.records.descriptions",
    "InputError": "registry.errors",
    "Line": "registry.records.descriptions",
    "LookupFailed": "registry.errors",
    "MillikeepError": "registry.errors",
    "PairLimit": "registry.records.descriptions",
    "Registry": "registry.keeping.handle",
    "RegistryError": "registry.errors",
    "Requirement": "registry.records.descriptions",
    "Samples": "registry.samples",
    "Signal": "registry.samples",
    "Site": "registry.records.descriptions",
    "Sweep": "registry.samples",
    "add_chip": "registry.keeping.describing",
    "add_criteria": "registry.keeping.judging",
    "add_device": "registry.keeping.describing",
    "add_quantity": "registry.keeping.describing",
    "admit": "registry.keeping.admitting",
    "amend": "registry.keeping.changing",
    "attach": "registry.keeping.changing",
    "audit": "registry.keeping.auditing",
    "backup": "registry.keeping.backups",
    "begin_cooldown": "registry.keeping.cooling",
    "compare": "registry.questions.compare",
    "create": "registry.keeping.opening",
    "derive": "registry.keeping.deriving",
    "events_frame": "registry.questions.frames",
    "find": "registry.questions.find",
    "fit_file": "registry.keeping.deriving",
    "format_instant": "registry.records.instants",
    "judge": "registry.keeping.judging",
    "judge_by": "registry.questions.verdict",
    "last_good": "registry.questions.last_good",
    "lineage": "registry.questions.lineage",
    "list_tunings": "registry.questions.tunings",
    "load_layout": "registry.reading.layout",
    "load_parameters": "registry.keeping.loading",
    "load_tunings": "registry.keeping.loading",
    "mark_event": "registry.keeping.cooling",
    "mark_gate": "registry.keeping.describing",
    "method": "registry.physics.methods",
    "migrate": "registry.keeping.backups",
    "now": "registry.questions.now",
    "open_registry": "registry.keeping.opening",
    "parameters_frame": "registry.questions.frames",
    "parse_instant": "registry.records.instants",
    "points": "registry.questions.parameters",
    "read_file": "registry.reading.entry",
    "record_tuning": "registry.keeping.tunings",
    "revise_device": "registry.keeping.describing",
    "revise_wiring": "registry.keeping.cooling",
    "revisit_tuning": "registry.keeping.tunings",
    "same_as": "registry.keeping.changing",
    "show_tuning": "registry.questions.tunings",
    "stamp": "registry.keeping.stamping",
    "states_frame": "registry.questions.frames",
    "verdict": "registry.questions.verdict",
    "withdraw": "registry.keeping.changing",
}

__all__ = [
    "Axis",
    "BadNews",
    "DamageError",
    "Gate",
    "InputError",
    "Line",
    "LookupFailed",
    "MillikeepError",
    "PairLimit",
    "Registry",
    "RegistryError",
    "Requirement",
    "Samples",
    "Signal",
    "Site",
    "Sweep",
    "add_chip",
    "add_criteria",
    "add_device",
    "add_quantity",
    "admit",
    "amend",
    "attach",
    "audit",
    "backup",
    "begin_cooldown",
    "compare",
    "create",
    "derive",
    "events_frame",
    "find",
    "fit_file",
    "format_instant",
    "judge",
    "judge_by",
    "last_good",
    "lineage",
    "list_tunings",
    "load_layout",
    "load_parameters",
    "load_tunings",
    "mark_event",
    "mark_gate",
    "method",
    "migrate",
    "now",
    "open_registry",
    "parameters_frame",
    "parse_instant",
    "points",
    "read_file",
    "record_tuning",
    "revise_device",
    "revise_wiring",
    "revisit_tuning",
    "same_as",
    "show_tuning",
    "stamp",
    "states_frame",
    "verdict",
    "withdraw",
]


def __getattr__(name: str) -> Any:
    if name not in _PLACES:
        raise AttributeError(f"module 'registry' has no attribute {name!r}")
    return getattr(import_module(_PLACES[name]), name)


def __dir__() -> list[str]:
    return __all__
