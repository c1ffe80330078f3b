"""What a person describes about a device and its wiring: gates, sites, lines, limits.

Each class refuses nonsense in its constructor (``InputError``), so that whatever holds
one may rely on it, whether it came from a table, a notebook or the database.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any, ClassVar, Literal, Self

from registry.errors import InputError
from registry.records.canonical import Json
from registry.records.values import normal_float, normal_text

__all__ = ["Gate", "Line", "PairLimit", "Requirement", "Site", "check_name"]

# Names stand beside each other in one cell, in plan columns and as CHIP/DEVICE:GATE.
_NOT_IN_NAMES = re.compile(r"[\s:/,;=\"']")
_LONGEST_NAME = 100
CARRIERS = ("electron", "hole")
SCOPES = ("state", "stretch", "cooldown")


def check_name(text: object, what: str) -> str:
    """A name fit for tables and the command line, as NFC text.

    Raises:
        InputError: empty, longer than 100 characters, with white space, control
            characters, quotes, or one of ``: / , ; =``.
    """
    name = normal_text(text, what)
    if not name or len(name) > _LONGEST_NAME or name.startswith("-"):
        raise InputError(
            f"{name[:40]!r} is no usable name",
            where=what,
            remedy="use 1 to 100 characters, not beginning with -",
        )
    bad = _NOT_IN_NAMES.search(name)
    if bad or any(unicodedata.category(c) in {"Cc", "Cf"} for c in name):
        raise InputError(
            f"{name!r} holds {bad.group()!r}" if bad else f"{name!r} holds an invisible character",
            where=what,
            remedy="leave out white space, quotes and : / , ; =",
        )
    return name


class _Described:
    """Shared by the classes below: to and from the JSON kept in a record."""

    def content(self) -> dict[str, Json]:
        """The members that are set, as kept in the record."""
        values: dict[str, Any] = {f.name: getattr(self, f.name) for f in fields(self)}  # type: ignore[arg-type]
        return {name: value for name, value in values.items() if value is not None and value != {}}

    @classmethod
    def from_content(cls, content: Mapping[str, Any]) -> Self:
        """The description kept in a record; members of later versions are left aside."""
        known = {f.name for f in fields(cls)}  # type: ignore[arg-type]
        return cls(**{name: value for name, value in content.items() if name in known})

    def _numbers(self, where: str, *names: str) -> None:
        for name in names:
            value = getattr(self, name)
            if value is not None:
                object.__setattr__(self, name, normal_float(value, f"{where}, {name}"))

    def _names(self, where: str, name: str) -> None:
        values = tuple(check_name(value, f"{where}, {name}") for value in getattr(self, name))
        _require(len(set(values)) == len(values), where, f"{name} names one thing twice", "name each once")
        object.__setattr__(self, name, values)


def _require(true: bool, where: str, what: str, remedy: str) -> None:
    if not true:
        raise InputError(what, where=where, remedy=remedy)


@dataclass(frozen=True)
class Gate(_Described):
    """One electrode.

    Attributes:
        role: free word (plunger, barrier, reservoir, sensor, ohmic, screening ...).
        x_nm, y_nm: position on the chip in nm.
        v_min, v_max: limits at the gate in V.
        max_step: largest single step in V; max_rate: fastest ramp in V/s.
        ramp_order: stage in which the gate moves going up; None: with the first.
    """

    gate: str
    role: str
    x_nm: float
    y_nm: float
    v_min: float
    v_max: float
    max_step: float
    max_rate: float
    ramp_order: int | None = None
    notes: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        object.__setattr__(self, "gate", check_name(self.gate, "gate name"))
        where = f"gate {self.gate}"
        object.__setattr__(self, "role", normal_text(self.role, f"{where}, role"))
        self._numbers(where, "x_nm", "y_nm", "v_min", "v_max", "max_step", "max_rate")
        _require(
            self.v_min < self.v_max,
            where,
            f"v_min {self.v_min} V is not below v_max {self.v_max} V",
            "give the lower limit as v_min",
        )
        _require(self.max_step > 0, where, f"max_step {self.max_step} V is not positive", "give a step in V")
        _require(
            self.max_rate > 0, where, f"max_rate {self.max_rate} V/s is not positive", "give a rate in V/s"
        )


@dataclass(frozen=True)
class Site(_Described):
    """One dot, sensor or reservoir and the gates that form it."""

    site: str
    kind: str
    gates: tuple[str, ...]
    carrier: str = "electron"
    notes: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        object.__setattr__(self, "site", check_name(self.site, "site name"))
        where = f"site {self.site}"
        object.__setattr__(self, "kind", normal_text(self.kind, f"{where}, kind"))
        self._names(where, "gates")
        _require(
            self.carrier in CARRIERS,
            where,
            f"the carrier {self.carrier!r} is unknown",
            "write electron or hole",
        )


@dataclass(frozen=True)
class PairLimit(_Described):
    """Limits on volts of ``gate_a`` minus ``gate_b``, in V, at the gates."""

    gate_a: str
    gate_b: str
    low: float
    high: float
    notes: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name in ("gate_a", "gate_b"):
            object.__setattr__(self, name, check_name(getattr(self, name), "gate name"))
        where = f"pair {self.gate_a} - {self.gate_b}"
        self._numbers(where, "low", "high")
        _require(
            self.low < self.high, where, f"low {self.low} V is not below high {self.high} V", "exchange them"
        )
        _require(self.gate_a != self.gate_b, where, "a gate has no limit against itself", "name two gates")


@dataclass(frozen=True)
class Line(_Described):
    """One cable or channel: volts at source = (volts at gate - offset) x divider.

    Attributes:
        gates: names of the gates behind it, ``CHIP/DEVICE:GATE`` where ambiguous.
        divider: volts at the source over volts at the gate, below 1 only with ``gain``;
            divider_u its standard uncertainty.
        offset: V at the gate with the source at zero.
        out_min, out_max, resolution: range and grid of the source, V.
        filter_hz: corner of its low-pass filter; attenuation_db: of a fast line.
        kind: ``dc`` or ``fast``; a gate's volts are those of its dc line.
    """

    line: str
    gates: tuple[str, ...]
    source: str
    divider: float
    offset: float
    out_min: float
    out_max: float
    resolution: float
    kind: str = "dc"
    divider_u: float | None = None
    filter_hz: float | None = None
    attenuation_db: float | None = None
    gain: bool = False
    notes: Mapping[str, str] = field(default_factory=dict)

    NUMBERS: ClassVar[tuple[str, ...]] = (
        "divider",
        "offset",
        "out_min",
        "out_max",
        "resolution",
        "divider_u",
        "filter_hz",
        "attenuation_db",
    )

    def __post_init__(self) -> None:
        object.__setattr__(self, "line", check_name(self.line, "line name"))
        where = f"line {self.line}"
        object.__setattr__(self, "source", normal_text(self.source, f"{where}, source"))
        object.__setattr__(self, "gates", tuple(normal_text(gate, f"{where}, gates") for gate in self.gates))
        self._numbers(where, *self.NUMBERS)
        _require(bool(self.gates), where, "it serves no gate", "name at least one gate")
        _require(
            self.divider > 0,
            where,
            f"the divider {self.divider} is not positive",
            "give source over gate volts",
        )
        _require(
            self.divider >= 1 or self.gain,
            where,
            f"the divider {self.divider} is below 1",
            "divider = volts at the source over volts at the gate; if the line amplifies, write gain yes",
        )
        _require(
            self.out_min < self.out_max, where, "out_min is not below out_max", "give the source's range in V"
        )
        _require(self.resolution > 0, where, "the resolution is not positive", "give the source's step in V")
        _require(self.kind in ("dc", "fast"), where, f"the kind {self.kind!r} is unknown", "write dc or fast")
        _require(
            self.divider_u is None or self.divider_u >= 0,
            where,
            "divider_u is negative",
            "give it as positive",
        )
        _require(
            self.filter_hz is None or self.filter_hz > 0, where, "filter_hz is not positive", "give it in Hz"
        )

    def at_gate(self, source_volts: float) -> float:
        """Volts at the gate for volts at the source."""
        return source_volts / self.divider + self.offset

    def at_source(self, gate_volts: float) -> float:
        """Volts at the source for volts at the gate, before quantisation."""
        return (gate_volts - self.offset) * self.divider


@dataclass(frozen=True)
class Requirement(_Described):
    """One limit of criteria: ``quantity`` at most or at least a number.

    Attributes:
        unit: of the limit; converted to the quantity's unit when recorded.
        subject: whose value; None means the summary value.
        guard: k of the guard band k u (JCGM 106:2012), for infinite degrees of freedom.
        scope: where the value may come from: the state itself, its cold stretch, or its
            cooldown.
        max_age_days: greatest age of the value before the state's judgement.
    """

    quantity: str
    at_most: float | None = None
    at_least: float | None = None
    unit: str | None = None
    subject: str | None = None
    guard: float = 2.0
    scope: Literal["state", "stretch", "cooldown"] = "state"
    max_age_days: float | None = None

    def __post_init__(self) -> None:
        where = f"requirement on {self.quantity}"
        self._numbers(where, "at_most", "at_least", "guard", "max_age_days")
        _require(
            (self.at_most is None) != (self.at_least is None),
            where,
            "it needs exactly one of at_most and at_least",
            "write two requirements for two limits",
        )
        _require(self.guard >= 0, where, f"the guard {self.guard} is negative", "give k >= 0")
        _require(
            self.scope in SCOPES, where, f"the scope {self.scope!r} is unknown", f"write {', '.join(SCOPES)}"
        )
        _require(
            self.max_age_days is None or self.max_age_days > 0,
            where,
            "max_age_days is not positive",
            "give days, or leave it out",
        )
