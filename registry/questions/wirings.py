"""Which wiring is in force in a cooldown at a moment, and what line a gate hangs on."""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS, AnyRow, ask_among, spoken
from registry.questions.currency import Taint, after_of, direct, heads, taints_of
from registry.questions.devices import Body

__all__ = ["GateLine", "Wiring", "Wirings", "wiring_rows", "wirings", "wirings_from"]


@dataclass(frozen=True)
class GateLine:
    """The line behind one gate: volts at source = (volts at gate - offset) x divider."""

    line: str
    source: str
    divider: float
    offset: float
    resolution: float

    def at_gate(self, source_volts: float) -> float:
        """Volts at the gate for volts at the source."""
        return source_volts / self.divider + self.offset

    def at_source(self, gate_volts: float) -> float:
        """Volts at the source for volts at the gate, before quantisation."""
        return (gate_volts - self.offset) * self.divider


@dataclass(frozen=True)
class Wiring:
    """One wiring revision of a cooldown.

    Attributes:
        since: microseconds from which it holds, None from the cooldown's begin.
        stored: its lines as JSON text; ``hexes``: digests of the asked device.
    """

    no: int
    digest: bytes
    cooldown_no: int
    since: int | None
    at: int
    why: str | None
    stored: str = field(repr=False)
    hexes: frozenset[str] = field(repr=False)

    @cached_property
    def lines(self) -> tuple[Mapping[str, Any], ...]:
        """As kept in the record (see ``records.tables.Wiring``)."""
        return tuple(json.loads(self.stored))

    @cached_property
    def gates(self) -> Mapping[str, GateLine]:
        """Gate of the asked device -> the line its standing volts come by."""
        gates: dict[str, GateLine] = {}
        # A gate may have a dc and a fast line; its standing volts come by the dc one.
        for line in sorted(self.lines, key=lambda line: line.get("kind", "dc") != "dc"):
            behind = GateLine(
                line["line"],
                line["source"],
                float(line["divider"]),
                float(line["offset"]),
                line["resolution"],
            )
            for served in line["gates"]:
                if served["device"] in self.hexes:
                    gates.setdefault(served["gate"], behind)
        return gates

    @property
    def words(self) -> str:
        """The revision in words, for contexts."""
        since = "the cooldown's begin" if self.since is None else spoken(self.since)
        return f"wiring {self.digest.hex()[:10]} in force since {since}"


@dataclass(frozen=True)
class Wirings:
    """All current wirings of the device's cooldowns."""

    of_cooldown: Mapping[int, tuple[Wiring, ...]]

    def at(self, cooldown_no: int, moment: int) -> Wiring | None:
        """The wiring in force: the largest ``since`` that is not later than the moment.

        Of two that did not see each other and begin at one moment, the later act counts.
        """
        begun = [w for w in self.of_cooldown.get(cooldown_no, ()) if w.since is None or w.since <= moment]
        return begun[-1] if begun else None

    def recorded_since(self, cooldown_no: int, moment: int) -> bool:
        """Whether a wiring is on record that begins at the moment or later."""
        return any(w.since is not None and w.since >= moment for w in self.of_cooldown.get(cooldown_no, ()))


def wiring_rows(connection: Connection, cooldowns: Iterable[int], as_of: int = ALWAYS) -> list[AnyRow]:
    """Stored wirings of cooldowns, superseded and withdrawn ones too."""
    return ask_among(
        connection,
        "SELECT no, digest, cooldown_no, lines, since, why, at FROM wiring"
        " WHERE cooldown_no IN :nos AND at <= :as_of",
        cooldowns,
        as_of=as_of,
    )


def wirings(connection: Connection, body: Body, cooldowns: Iterable[int], as_of: int = ALWAYS) -> Wirings:
    """Current wirings of the given cooldowns (keys), seen from one device."""
    rows = wiring_rows(connection, cooldowns, as_of)
    return wirings_from(connection, rows, body, taints_of(connection, (row.no for row in rows), as_of))


def wirings_from(
    connection: Connection, rows: list[AnyRow], body: Body, taints: Mapping[int, tuple[Taint, ...]]
) -> Wirings:
    """Those of the stored wirings that are current; their lines are read when asked for."""
    every = [row.no for row in rows]
    seen = after_of(connection, every) if len(every) > 1 else {}
    current = heads(every, seen, direct(taints)) - set(taints)
    found: dict[int, list[Wiring]] = defaultdict(list)
    for row in rows:
        if row.no in current:
            found[row.cooldown_no].append(
                Wiring(
                    row.no,
                    bytes(row.digest),
                    row.cooldown_no,
                    row.since,
                    row.at,
                    row.why,
                    row.lines,
                    body.hexes,
                )
            )
    beginning = -(2**62)
    return Wirings(
        {
            cooldown: tuple(
                sorted(group, key=lambda w: (beginning if w.since is None else w.since, w.at, w.digest))
            )
            for cooldown, group in found.items()
        }
    )
