"""A small laboratory for the questions: one device, days as times, short ways to record."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from typing import Any

import pytest
from sqlalchemy import text

from registry.keeping.cooling import begin_cooldown, mark_event
from registry.keeping.describing import add_chip, add_device, mark_gate
from registry.keeping.handle import Registry
from registry.keeping.judging import add_criteria, judge, keep_standing
from registry.keeping.naming import Found, find_device, find_record, find_tuning
from registry.keeping.tunings import record_tuning
from registry.keeping.writing import Kept
from registry.records.descriptions import Gate, Line, Requirement, Site
from registry.records.instants import parse_instant
from registry.records.volts import pack

DAY = 86_400_000_000
START = parse_instant("2026-01-01T00:00:00Z")


def day(number: float) -> int:
    """Microseconds of a day counted from the first cooldown's begin (day 0)."""
    return START + round(number * DAY)


_RECORD = """INSERT INTO record (no, kind, digest, seq, entered, person)
    VALUES (:{0}, '{1}', :{2}, :{0}, :moment, 'flood')"""
_TUNING = (
    "INSERT INTO tuning (no, digest, device_no, cooldown_no, gate_sheet_no, level, volts, at, moment)"
    " VALUES (:no, :digest, :device, :cooldown, :sheet, 'gate', :volts, :moment, :moment)"
)
_STANDING = (
    "INSERT INTO standing (no, digest, tuning_no, standing, at, device_no, tuning_moment)"
    " VALUES (:judgement, :judged, :no, :standing, :moment, :device, :moment)"
)


class Lab:
    """Device K7/D1 with gates P1 P2 B1 and dots Q1 Q2, cold in cooldown C1 since day 0."""

    device = "K7/D1"

    def __init__(self, registry: Registry) -> None:
        self.registry = registry
        add_chip(registry, "K7")
        gates = [
            Gate(name, "plunger", 10.0 * i, 0.0, -1, 1, 0.01, 0.1)
            for i, name in enumerate(["P1", "P2", "B1"])
        ]
        sites = [Site("Q1", "dot", ("P1",)), Site("Q2", "dot", ("P2",))]
        add_device(registry, self.device, gates=gates, sites=sites, at=day(0))
        self.begin("C1", 0)

    def begin(self, label: str, at: float, *, divider: float = 5.0) -> Kept:
        """A cooldown in cryostat Blue with one line to each gate."""
        return begin_cooldown(
            self.registry, label, cryostat="Blue", chips=["K7"], wiring=self.lines(divider), at=day(at)
        )

    @staticmethod
    def lines(divider: float = 5.0, offset: float = 0.0) -> list[Line]:
        """One line to each gate."""
        return [
            Line(f"L{gate}", (gate,), "dac", divider, offset, -10.0, 10.0, 1e-4)
            for gate in ("P1", "P2", "B1")
        ]

    def state(self, at: float, volts: Mapping[str, float] | None = None, **more: object) -> str:
        """Id of a state with P1 and P2 (or the given gates) set."""
        chosen = {"P1": 0.5, "P2": 0.4} if volts is None else volts
        return record_tuning(self.registry, self.device, chosen, at=day(at), **more).hex  # type: ignore[arg-type]

    def judge(self, tuning: str, standing: str, at: float, why: str = "seen", **more: object) -> str:
        """Id of a person's judgement."""
        return judge(self.registry, tuning, standing, why=why, at=day(at), **more).hex  # type: ignore[arg-type]

    def good(self, at: float, **more: object) -> str:
        """Id of a state judged good an hour later."""
        tuning = self.state(at, **more)  # type: ignore[arg-type]
        self.judge(tuning, "good", at + 1 / 24)
        return tuning

    def unseen(self, tuning: str, standing: str, at: float, why: str = "seen elsewhere") -> None:
        """A judgement that saw no other, as a join of two registries brings it."""
        with self.registry.writing() as writer:
            found = find_tuning(writer.connection, tuning)
            device = find_device(writer.connection, self.device)
            writer.keep(
                "standing",
                links={"tuning": found.no, "device": device.no},
                standing=standing,
                why=why,
                at=day(at),
                tuning_moment=self._moment(found),
            )

    def _moment(self, found: Found) -> int:
        with self.registry.reading() as connection:
            sql = text("SELECT moment FROM tuning WHERE no = :no")
            return int(connection.execute(sql, {"no": found.no}).scalar_one())

    def flood(self, count: int, standing: str | None, at: float) -> None:
        """Many states a second apart, each with this standing, as bare rows without journal.

        Made for counting statements and for tables no one has analysed; an audit would
        object to them.
        """
        with self.registry.writing() as writer:
            connection = writer.connection
            last = connection.execute(text("SELECT max(no) FROM record")).scalar_one()
            names = ("device", "cooldown", "gate_sheet")
            first = [connection.execute(text(f"SELECT min(no) FROM {name}")).scalar_one() for name in names]
            volts = self.registry.side.volts_parameter(pack([0.5, 0.4, 0.3]))
            rows = [
                {
                    "no": last + 1 + number,
                    "digest": hashlib.sha256(f"{standing} {at} {number}".encode()).digest(),
                    "judgement": last + 1 + count + number,
                    "judged": hashlib.sha256(f"judged {standing} {at} {number}".encode()).digest(),
                    "device": first[0],
                    "cooldown": first[1],
                    "sheet": first[2],
                    "volts": volts,
                    "moment": day(at) + number * 1_000_000,
                    "standing": standing,
                }
                for number in range(count)
            ]
            connection.execute(text(_RECORD.format("no", "tuning", "digest")), rows)
            connection.execute(text(_TUNING), rows)
            if standing is not None:
                connection.execute(text(_RECORD.format("judgement", "standing", "judged")), rows)
                connection.execute(text(_STANDING), rows)

    def measurement(self, tuning: str, at: float, name: str = "trace.h5") -> str:
        """Id of a measurement in a state; its file is named by a made-up SHA-256."""
        with self.registry.writing() as writer:
            sha256 = hashlib.sha256(f"{name} {at}".encode()).hexdigest()
            raw = writer.keep("raw_file", sha256=sha256, size=1000)
            return writer.keep(
                "measurement",
                links={"tuning": find_tuning(writer.connection, tuning).no, "raw_file": raw.no},
                kind="coulomb-peaks",
                shape="trace",
                axes=[{"name": "P1", "unit": "V", "level": "gate", "n": 100}],
                signals=[{"name": "current", "unit": "A"}],
                at=day(at),
                moment=day(at),
                file_name=name,
            ).hex

    def value(
        self,
        tuning: str,
        at: float,
        quantity: str = "electron_temperature",
        value: float | None = 0.1,
        u: float | None = 0.002,
        *,
        measurement: str | None = None,
        version: str = "1",
        shared: Mapping[str, float] | None = None,
        more: Mapping[str, Any] | None = None,
    ) -> str:
        """Id of a parameter computed from a measurement (a new one unless given)."""
        source = measurement or self.measurement(tuning, at, f"{quantity} {at}.h5")
        with self.registry.writing() as writer:
            connection = writer.connection
            analysis = writer.keep(
                "analysis",
                links={"measurements": [find_record(connection, source).no], "inputs": []},
                method="coulomb-peaks",
                version=version,
                source_digest=hashlib.sha256(version.encode()).hexdigest(),
                settings={"model": "auto"},
            )
            return writer.keep(
                "parameter",
                links={
                    "analysis": analysis.no,
                    "device": find_device(connection, self.device).no,
                    "tuning": find_tuning(connection, tuning).no,
                },
                quantity=quantity,
                value=value,
                standard_uncertainty=u,
                unit={"electron_temperature": "K", "lever_arm": "eV/V"}.get(quantity, "V"),
                shared=dict(shared) if shared else None,
                at=day(at),
                moment=day(at),
                **dict(more or {}),
            ).hex

    def criteria(self, name: str = "cold", at_most: float = 0.2, at: float = 0) -> str:
        """Id of criteria on the electron temperature."""
        requirement = Requirement("electron_temperature", at_most=at_most, unit="K")
        return add_criteria(self.registry, name, [requirement], at=day(at)).hex

    def judge_by(
        self, tuning: str, criteria: str, evidence: Sequence[str], at: float, standing: str = "good"
    ) -> str:
        """Id of a judgement by criteria on the given evidence."""
        with self.registry.writing() as writer:
            connection = writer.connection
            return keep_standing(
                writer,
                find_tuning(connection, tuning),
                standing,
                criteria=find_record(connection, criteria, ("criteria",)).no,
                evidence=[find_record(connection, piece).no for piece in evidence],
                at=day(at),
            ).hex

    def event(self, event: str, at: float, cooldown: str = "C1", **more: object) -> str:
        """Id of an event."""
        return mark_event(self.registry, cooldown, event, at=day(at), **more).hex  # type: ignore[arg-type]

    def mark(self, gate: str, health: str, at: float, **more: object) -> str:
        """Id of a finding on a gate."""
        return mark_gate(self.registry, self.device, gate, health, at=day(at), **more).hex  # type: ignore[arg-type]


@pytest.fixture
def lab(registry_on: Registry) -> Lab:
    """The laboratory, once on each engine."""
    return Lab(registry_on)
