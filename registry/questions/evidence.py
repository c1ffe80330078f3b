"""On what numbers and files a judgement rests."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable
from dataclasses import dataclass

from sqlalchemy import Connection

from registry.questions.asking import ask, ask_among

__all__ = ["Evidence", "RawSource", "evidence_of", "sources_of"]


@dataclass(frozen=True)
class RawSource:
    """One measurement and its file; ``sha256`` as ``sha256sum`` prints it."""

    measurement: str
    sha256: str
    file_name: str


@dataclass(frozen=True)
class Evidence:
    """One piece of evidence: a parameter, or a measurement looked at by eye.

    Attributes:
        quantity ... unit: None for evidence that is no parameter.
        sources: measurements it was computed from; empty for values from elsewhere.
        source: where a value from elsewhere came from.
    """

    id: str
    kind: str
    quantity: str | None
    subject: str | None
    value: float | None
    standard_uncertainty: float | None
    unit: str | None
    bound: str | None
    sources: tuple[RawSource, ...]
    source: str | None

    def to_json(self) -> dict[str, object]:
        """``measurement`` and ``file`` are the first source; ``sources`` has all."""
        first = self.sources[0] if self.sources else None
        return {
            "id": self.id,
            "kind": self.kind,
            "quantity": self.quantity,
            "subject": self.subject,
            "value": self.value,
            "standard_uncertainty": self.standard_uncertainty,
            "unit": self.unit,
            "bound": self.bound,
            "measurement": first.measurement if first else None,
            "file": first.sha256 if first else None,
            "file_name": first.file_name if first else None,
            "sources": [{"measurement": s.measurement, "file": s.sha256} for s in self.sources],
            "source": self.source,
        }


def evidence_of(connection: Connection, standing_no: int) -> tuple[Evidence, ...]:
    """Evidence of one judgement, parameters first, by quantity and subject."""
    rows = ask(
        connection,
        "SELECT t.no, t.kind, t.digest FROM link l JOIN record t ON t.no = l.target_no"
        " WHERE l.record_no = :no AND l.role = 'evidence'",
        no=standing_no,
    )
    values = {
        row.no: row
        for row in ask_among(
            connection,
            "SELECT no, analysis_no, quantity, subject, value, standard_uncertainty, unit, bound, source"
            " FROM parameter WHERE no IN :nos",
            (row.no for row in rows if row.kind == "parameter"),
        )
    }
    raw = sources_of(connection, (row.analysis_no for row in values.values() if row.analysis_no is not None))
    direct = _files(connection, (row.no for row in rows if row.kind == "measurement"))
    found = []
    for row in rows:
        value = values.get(row.no)
        if value is None:
            sources = (direct[row.no],) if row.no in direct else ()
            found.append(
                Evidence(row.digest.hex(), row.kind, None, None, None, None, None, None, sources, None)
            )
            continue
        found.append(
            Evidence(
                row.digest.hex(),
                row.kind,
                value.quantity,
                value.subject,
                value.value,
                value.standard_uncertainty,
                value.unit,
                value.bound,
                raw.get(value.analysis_no, ()),
                value.source,
            )
        )
    return tuple(sorted(found, key=lambda e: (e.quantity is None, e.quantity or "", e.subject or "", e.id)))


def sources_of(connection: Connection, analyses: Iterable[int]) -> dict[int, tuple[RawSource, ...]]:
    """Measurements and files each analysis was made from."""
    rows = ask_among(
        connection,
        "SELECT record_no, target_no FROM link WHERE record_no IN :nos AND role = 'measurements'",
        analyses,
    )
    files = _files(connection, {row.target_no for row in rows})
    found: dict[int, list[RawSource]] = defaultdict(list)
    for row in rows:
        if row.target_no in files:
            found[row.record_no].append(files[row.target_no])
    return {no: tuple(sorted(group, key=lambda s: s.measurement)) for no, group in found.items()}


def _files(connection: Connection, measurements: Iterable[int]) -> dict[int, RawSource]:
    return {
        row.no: RawSource(row.digest.hex(), row.sha256, row.file_name)
        for row in ask_among(
            connection,
            "SELECT m.no, m.digest, m.file_name, f.sha256 FROM measurement m"
            " JOIN raw_file f ON f.no = m.raw_file_no WHERE m.no IN :nos",
            measurements,
        )
    }
