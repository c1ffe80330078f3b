"""A small laboratory and the ways to look at all that a registry holds."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import text

from registry.keeping.cooling import begin_cooldown
from registry.keeping.describing import add_chip, add_device
from registry.keeping.handle import Registry
from registry.keeping.opening import create, open_registry
from registry.keeping.tunings import record_tuning
from registry.keeping.writing import Kept
from registry.records.canonical import Json
from registry.records.descriptions import Gate, Line, PairLimit, Site
from registry.records.digests import digest_of
from registry.records.instants import parse_instant
from registry.records.kinds import kind_of
from registry.records.tables import KINDS
from registry.records.volts import unpack

DAY = 86_400_000_000
START = parse_instant("2026-01-01T00:00:00Z")

GATES = tuple(Gate(n, "plunger", 10.0 * i, 0.0, -1, 1, 0.01, 0.1) for i, n in enumerate(("P1", "P2", "B1")))
SITES = (Site("Q1", "dot", ("P1",)), Site("Q2", "dot", ("P2",)))
PAIRS = (PairLimit("P1", "P2", -1.2, 1.2),)


class Lab:
    """Device K7/D1 with gates P1 P2 B1, cold in cooldown C1 since day 0.

    Line L1 drives P1 (divider 5 ± 0.01, offset 0.1 V); LS drives P2 and B1 together.
    """

    device = "K7/D1"
    gates, sites, pairs = GATES, SITES, PAIRS

    def __init__(self, registry: Registry, *, empty: bool = True) -> None:
        self.registry = registry
        if empty:
            self._fill(registry)

    def _fill(self, registry: Registry) -> None:
        add_chip(registry, "K7")
        add_device(registry, self.device, gates=GATES, sites=SITES, pairs=PAIRS, at=self.day(0))
        begin_cooldown(registry, "C1", cryostat="Blue", chips=["K7"], wiring=self.lines(), at=self.day(0))

    @staticmethod
    def day(number: float) -> int:
        """Microseconds of a day counted from the first cooldown's begin."""
        return START + round(number * DAY)

    @staticmethod
    def lines(divider: float = 5.0) -> list[Line]:
        """The wiring."""
        return [
            Line("L1", ("P1",), "rack", divider, 0.1, -10.0, 10.0, 1e-4, divider_u=0.01),
            Line("LS", ("P2", "B1"), "rack", 4.0, 0.0, -10.0, 10.0, 1e-4),
        ]

    def record(self, at: float, volts: Mapping[str, float] | None = None, **more: Any) -> Kept:
        """A state with P1 and P2 (or what is given) set."""
        chosen = {"P1": 0.5, "P2": 0.4} if volts is None else volts
        return record_tuning(self.registry, self.device, chosen, at=self.day(at), **more)

    def state(self, at: float, volts: Mapping[str, float] | None = None, **more: Any) -> str:
        """Id of ``record``."""
        return self.record(at, volts, **more).hex

    def row(self, kind: str, digest: str) -> dict[str, Any]:
        """The stored row of a record."""
        with self.registry.reading() as connection:
            sql = text(f'SELECT * FROM "{kind}" WHERE digest = :digest')
            return dict(connection.execute(sql, {"digest": bytes.fromhex(digest)}).mappings().one())

    def volts(self, digest: str) -> dict[str, float]:
        """Stored volts of a state by gate."""
        values = unpack(self.row("tuning", digest)["volts"])
        return dict(zip(("P1", "P2", "B1"), values, strict=True))


@pytest.fixture(scope="session")
def filled(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A closed registry that holds the laboratory; copying it is quicker than making one."""
    place = tmp_path_factory.mktemp("filled") / "registry"
    with create(place, person="test person") as registry:
        Lab(registry)
    return place


@pytest.fixture
def lab(registry_place: str, filled: Path, tmp_path: Path) -> Iterator[Lab]:
    """The laboratory, once on each engine."""
    if "://" in registry_place:
        with create(registry_place, files=tmp_path / "store") as registry:
            yield Lab(registry)
    else:
        shutil.copytree(filled, registry_place)
        with open_registry(registry_place) as registry:
            yield Lab(registry, empty=False)


@pytest.fixture
def lab_here(filled: Path, tmp_path: Path) -> Iterator[Lab]:
    """The laboratory on SQLite, for what does not depend on the engine."""
    shutil.copytree(filled, tmp_path / "registry")
    with open_registry(tmp_path / "registry") as registry:
        yield Lab(registry, empty=False)


@pytest.fixture
def lab_twin(filled: Path, tmp_path: Path) -> Iterator[Lab]:
    """The same laboratory on another computer."""
    shutil.copytree(filled, tmp_path / "twin")
    with open_registry(tmp_path / "twin") as registry:
        yield Lab(registry, empty=False)


def count_of(registry: Registry, table: str = "record") -> int:
    with registry.reading() as connection:
        return int(connection.execute(text(f'SELECT count(*) FROM "{table}"')).scalar_one())


@pytest.fixture
def count() -> Callable[..., int]:
    """How many rows a table of a registry has (the spine unless another is named)."""
    return count_of


def _links(connection: Any, kind: str, row: Mapping[str, Any]) -> dict[str, str | Sequence[str]]:
    """Role -> digests as they enter the record's own digest."""
    shape = kind_of(kind)
    of = {r.no: bytes(r.digest).hex() for r in connection.execute(text("SELECT no, digest FROM record"))}
    links: dict[str, str | Sequence[str]] = {c.role: of[row[c.name]] for c in shape.links if row[c.name]}
    many = connection.execute(
        text("SELECT role, target_no FROM link WHERE record_no = :no"), {"no": row["no"]}
    )
    for link in many.all():
        links[link.role] = [*links.get(link.role, ()), of[link.target_no]]
    return links


def _rehashed(registry: Registry) -> dict[str, str]:
    again = {}
    with registry.reading() as connection:
        for kind in KINDS:
            for found in connection.execute(text(f'SELECT * FROM "{kind}"')).mappings().all():
                row = dict(found)
                content: Mapping[str, Json] = kind_of(kind).content(row)
                digest = digest_of(kind, content, _links(connection, kind, row))
                again[bytes(row["digest"]).hex()] = digest.hex()
    return again


@pytest.fixture
def rehashed() -> Callable[[Registry], dict[str, str]]:
    """Stored digest -> digest computed anew from the stored row, of all records."""
    return _rehashed


@pytest.fixture
def digests() -> Callable[[Registry], set[str]]:
    """The digests of all records in a registry."""

    def listed(registry: Registry) -> set[str]:
        with registry.reading() as connection:
            return {bytes(d).hex() for d in connection.execute(text("SELECT digest FROM record")).scalars()}

    return listed


def write_trace(path: Path, *, axis: str = "P1", seed: int = 0, n: int = 121, shift: float = 0.0) -> Path:
    """A turn-on trace as text: current in A against a gate in V."""
    volts = np.linspace(-0.5, 0.5, n)
    rise = 1e-9 / (1.0 + np.exp(-(volts - 0.1 - shift) / 0.03))
    current = rise + np.random.default_rng(seed).normal(0.0, 2e-12, n)
    rows = "".join(f"{v:.6f}\t{i:.6e}\n" for v, i in zip(volts, current, strict=True))
    path.write_text(f"{axis} [V]\tcurrent [A]\n{rows}")
    return path


@pytest.fixture
def trace() -> Callable[..., Path]:
    """Writes a turn-on trace."""
    return write_trace
