"""Which tables hold the history: one SQLModel class a kind of record.

Reading a class tells what is inside a record's digest and what is not:

* ``no`` is the small key for joins, the same number as in the spine ``record``;
  ``digest`` is SHA-256 over the canonical form (see ``records.digests``).
* A column with a foreign key (``device_no``) is a *link*: the linked record's digest,
  under the column's name without ``_no``, is part of the digest.
* ``LINKS`` names further links that may be many; they stand in the table ``link``.
* ``ASIDE`` names columns outside the digest (guessed times, original file names,
  copies kept for quick look-up); the journal entry vouches for them instead.
* Every other column is content.  A column that is NULL is left out of the digest, so a
  later column does not change the digests of older records.

Importing this module costs as much as importing SQLModel; the quick questions use SQL
text and do not import it.
"""

from __future__ import annotations

from typing import ClassVar

from sqlalchemy import CheckConstraint, Index, MetaData
from sqlmodel import Field, SQLModel

from registry.records.columns import Digest32, Instant, JsonText, Key, Real, Text, Volts

__all__ = ["KINDS", "Journal", "Kept", "Link", "Record", "Tainted", "Tile", "kept_tables"]

NAMING = {
    "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    "uq": "uq_%(table_name)s_%(column_0_N_name)s",
    "ck": "ck_%(table_name)s_%(constraint_name)s",
    "fk": "fk_%(table_name)s_%(column_0_name)s",
    "pk": "pk_%(table_name)s",
}
metadata = MetaData(naming_convention=NAMING)


class Base(SQLModel):
    """Binds all tables to one metadata object, apart from a user's own models."""

    metadata = metadata


# --- the spine and the journal -------------------------------------------------------


class Record(Base, table=True):
    """The spine: every record of every kind, for look-up by digest and by prefix."""

    __tablename__ = "record"
    __table_args__ = (
        CheckConstraint("length(digest) = 32", name="digest_length"),
        {"sqlite_strict": True},
    )

    no: int = Field(sa_type=Key, primary_key=True, sa_column_kwargs={"autoincrement": False})
    kind: str = Field(sa_type=Text)
    digest: bytes = Field(sa_type=Digest32, unique=True)
    seq: int = Field(sa_type=Key, description="its entry in the journal")
    entered: int = Field(sa_type=Instant, description="when it was entered here")
    person: str = Field(sa_type=Text, description="who entered it here")


class Link(Base, table=True):
    """Links that may be many: evidence, inputs, chips of a cooldown, heads seen."""

    __tablename__ = "link"
    __table_args__ = (Index("ix_link_target_no", "target_no"), {"sqlite_strict": True})

    record_no: int = Field(sa_type=Key, primary_key=True, foreign_key="record.no")
    role: str = Field(sa_type=Text, primary_key=True)
    target_no: int = Field(sa_type=Key, primary_key=True, foreign_key="record.no")


class Tainted(Base, table=True):
    """Which records hang on a withdrawn one, filled when the withdrawal is recorded.

    A cache that ``audit`` recomputes; a withdrawal that is itself withdrawn taints
    nothing (the questions look).
    """

    __tablename__ = "tainted"
    __table_args__ = ({"sqlite_strict": True},)

    record_no: int = Field(sa_type=Key, primary_key=True, foreign_key="record.no")
    withdrawal_no: int = Field(sa_type=Key, primary_key=True, foreign_key="record.no")


class Journal(Base, table=True):
    """The append-only list of all acts: leaf = SHA-256(0x00 || entry) (RFC 9162, 2.1.1)."""

    __tablename__ = "journal"
    __table_args__ = (CheckConstraint("length(leaf) = 32", name="leaf_length"), {"sqlite_strict": True})

    seq: int = Field(sa_type=Key, primary_key=True, sa_column_kwargs={"autoincrement": False})
    entry: str = Field(sa_type=Text)
    leaf: bytes = Field(sa_type=Digest32)
    recorded_by: str | None = Field(
        default=None, sa_type=Text, description="the server's name for the session, where there is a server"
    )


class Tile(Base, table=True):
    """Complete runs of tree hashes, written once: a cache that ``audit`` recomputes."""

    __tablename__ = "tile"
    __table_args__ = ({"sqlite_strict": True},)

    level: int = Field(sa_type=Key, primary_key=True, sa_column_kwargs={"autoincrement": False})
    pos: int = Field(sa_type=Key, primary_key=True, sa_column_kwargs={"autoincrement": False})
    hashes: bytes = Field(sa_type=Digest32)


# --- kinds of record -----------------------------------------------------------------


class Kept(Base):
    """What every kind of record has."""

    ASIDE: ClassVar[frozenset[str]] = frozenset()
    LINKS: ClassVar[tuple[str, ...]] = ()

    no: int = Field(
        sa_type=Key, primary_key=True, foreign_key="record.no", sa_column_kwargs={"autoincrement": False}
    )
    digest: bytes = Field(sa_type=Digest32)


def _link(table: str, *, index: bool = True, nullable: bool = False) -> int:
    """Column that links to one record of ``table``."""
    field: int = Field(sa_type=Key, foreign_key=f"{table}.no", index=index, nullable=nullable)
    return field


def _optional_link(table: str, *, index: bool = True) -> int | None:
    field: int | None = Field(
        default=None, sa_type=Key, foreign_key=f"{table}.no", index=index, nullable=True
    )
    return field


def _text() -> str:
    field: str = Field(sa_type=Text)
    return field


def _optional_text() -> str | None:
    field: str | None = Field(default=None, sa_type=Text)
    return field


def _optional_real() -> float | None:
    field: float | None = Field(default=None, sa_type=Real)
    return field


def _instant() -> int:
    field: int = Field(sa_type=Instant)
    return field


def _optional_instant() -> int | None:
    field: int | None = Field(default=None, sa_type=Instant)
    return field


def _json() -> str:
    field: str = Field(sa_type=JsonText)
    return field


def _optional_json() -> str | None:
    field: str | None = Field(default=None, sa_type=JsonText)
    return field


class Chip(Kept, table=True):
    """A die.  Identity is wafer, lot, die and first label; all else is amended."""

    __tablename__ = "chip"
    __table_args__ = ({"sqlite_strict": True},)

    wafer: str | None = _optional_text()
    lot: str | None = _optional_text()
    die: str | None = _optional_text()
    label: str = _text()


class Device(Kept, table=True):
    """One gated structure on a chip; its family and note are amended fields."""

    __tablename__ = "device"
    __table_args__ = ({"sqlite_strict": True},)

    chip_no: int = _link("chip")
    name: str = _text()


class GateSheet(Kept, table=True):
    """The revisable description of a device: gates, sites, pair limits.

    ``gates``: [{gate, role, x_nm, y_nm, v_min, v_max, max_step, max_rate, ramp_order,
    notes}]; ``sites``: [{site, kind, gates, carrier}]; ``pairs``: [{gate_a, gate_b, low,
    high}], volts of a minus b.
    """

    __tablename__ = "gate_sheet"
    __table_args__ = ({"sqlite_strict": True},)
    LINKS: ClassVar[tuple[str, ...]] = ("after",)

    device_no: int = _link("device")
    gates: str = _json()
    sites: str = _json()
    pairs: str = _json()
    why: str | None = _optional_text()
    at: int = _instant()


class GateHealth(Kept, table=True):
    """A dated finding on one gate."""

    __tablename__ = "gate_health"
    __table_args__ = ({"sqlite_strict": True},)

    device_no: int = _link("device")
    gate: str = _text()
    health: str = _text()
    to_gate: str | None = _optional_text()
    above_v: float | None = _optional_real()
    at: int = _instant()
    note: str | None = _optional_text()


class Cooldown(Kept, table=True):
    """One stay in a cryostat; the chips in it are links."""

    __tablename__ = "cooldown"
    __table_args__ = ({"sqlite_strict": True},)
    LINKS: ClassVar[tuple[str, ...]] = ("chips",)

    label: str = _text()
    cryostat: str = _text()
    board: str | None = _optional_text()
    at: int = _instant()


class Event(Kept, table=True):
    """A dated thing that happened in a cooldown (``records.events`` lists the kinds)."""

    __tablename__ = "event"
    __table_args__ = ({"sqlite_strict": True},)

    cooldown_no: int = _link("cooldown")
    device_no: int | None = _optional_link("device")
    event: str = _text()
    at: int = _instant()
    until: int | None = _optional_instant()
    kelvin: float | None = _optional_real()
    gate: str | None = _optional_text()
    site: str | None = _optional_text()
    volts: str | None = _optional_json()
    details: str | None = _optional_json()
    note: str | None = _optional_text()


class Wiring(Kept, table=True):
    """The lines of a cooldown, in force from ``since`` (None: from its beginning).

    ``lines``: [{line, gates: [{device: digest, gate}], source, divider, divider_u,
    offset, out_min, out_max, resolution, kind, filter_hz, attenuation_db, gain}].
    ``after`` names the wirings this one corrects; a later ``since`` corrects none.
    """

    __tablename__ = "wiring"
    __table_args__ = ({"sqlite_strict": True},)
    LINKS: ClassVar[tuple[str, ...]] = ("after", "devices")

    cooldown_no: int = _link("cooldown")
    lines: str = _json()
    since: int | None = _optional_instant()
    why: str | None = _optional_text()
    at: int = _instant()


class RawFile(Kept, table=True):
    """A file in the file store."""

    __tablename__ = "raw_file"
    __table_args__ = (Index("ix_raw_file_sha256", "sha256"), {"sqlite_strict": True})

    sha256: str = _text()
    size: int = Field(sa_type=Key)


class Tuning(Kept, table=True):
    """A gate voltage set with its context.

    ``volts``: float64 block in the order of the gate sheet, NaN where not recorded; the
    digest holds the SHA-256 of its big-endian bytes.  ``settings``: {name: {value,
    unit}}; ``occupation``: {site: n}; ``sites``: [site].
    """

    __tablename__ = "tuning"
    __table_args__ = (
        Index("ix_tuning_device_no_moment", "device_no", "moment"),
        {"sqlite_strict": True},
    )
    ASIDE: ClassVar[frozenset[str]] = frozenset({"moment"})

    device_no: int = _link("device", index=False)
    cooldown_no: int = _link("cooldown")
    gate_sheet_no: int = _link("gate_sheet")
    parent_no: int | None = _optional_link("tuning")
    raw_file_no: int | None = _optional_link("raw_file")
    level: str = _text()
    volts: bytes = Field(sa_type=Volts)
    settings: str | None = _optional_json()
    occupation: str | None = _optional_json()
    purpose: str | None = _optional_text()
    sites: str | None = _optional_json()
    at: int | None = _optional_instant()
    moment: int = Field(sa_type=Instant, description="`at`, or the guess where only the file's date is known")


class Measurement(Kept, table=True):
    """One trace, map or series, its file, and the state it was taken in.

    ``axes``: [{name, unit, level, n}], slowest first; ``signals``: [{name, unit}].
    """

    __tablename__ = "measurement"
    __table_args__ = ({"sqlite_strict": True},)
    ASIDE: ClassVar[frozenset[str]] = frozenset({"moment", "file_name"})

    tuning_no: int = _link("tuning")
    raw_file_no: int = _link("raw_file")
    layout_no: int | None = _optional_link("raw_file", index=False)
    kind: str | None = _optional_text()
    shape: str = _text()
    axes: str = _json()
    signals: str = _json()
    at: int | None = _optional_instant()
    moment: int = _instant()
    file_name: str = _text()


class Analysis(Kept, table=True):
    """One run of a method; its values are parameters and not part of its identity."""

    __tablename__ = "analysis"
    __table_args__ = ({"sqlite_strict": True},)
    ASIDE: ClassVar[frozenset[str]] = frozenset({"refused", "warnings"})
    LINKS: ClassVar[tuple[str, ...]] = ("measurements", "inputs")

    method: str = _text()
    version: str = _text()
    source_digest: str = _text()
    settings: str = _json()
    subject: str | None = _optional_text()
    refused: str | None = _optional_text()
    warnings: str | None = _optional_json()


class Parameter(Kept, table=True):
    """One extracted value with its uncertainty, or the reason why there is none.

    ``shared``: {digest: signed uncertainty}, the parts that other parameters have in
    common with this one.  ``method`` is free text for values from elsewhere, ``notes``
    {column: text} what else their table said.
    """

    __tablename__ = "parameter"
    __table_args__ = (
        Index("ix_parameter_device_no_quantity", "device_no", "quantity"),
        {"sqlite_strict": True},
    )
    ASIDE: ClassVar[frozenset[str]] = frozenset({"moment"})

    analysis_no: int | None = _optional_link("analysis")
    device_no: int = _link("device", index=False)
    cooldown_no: int | None = _optional_link("cooldown", index=False)
    tuning_no: int | None = _optional_link("tuning")
    quantity: str = _text()
    subject: str | None = _optional_text()
    value: float | None = _optional_real()
    standard_uncertainty: float | None = _optional_real()
    unit: str = _text()
    degrees_of_freedom: float | None = _optional_real()
    bound: str | None = _optional_text()
    why: str | None = _optional_text()
    conditions: str | None = _optional_json()
    shared: str | None = _optional_json()
    source: str | None = _optional_text()
    method: str | None = _optional_text()
    notes: str | None = _optional_json()
    at: int | None = _optional_instant()
    moment: int = _instant()


class Criteria(Kept, table=True):
    """A named list of limits; a newer one of the same name names the older in ``after``.

    ``requirements``: [{quantity, at_most | at_least, unit, subject, guard, scope,
    max_age_days}].
    """

    __tablename__ = "criteria"
    __table_args__ = ({"sqlite_strict": True},)
    LINKS: ClassVar[tuple[str, ...]] = ("after",)

    name: str = _text()
    requirements: str = _json()
    at: int = _instant()


class Standing(Kept, table=True):
    """A dated judgement on a state: good, usable or poor, for a purpose and sites."""

    __tablename__ = "standing"
    __table_args__ = (
        Index("ix_standing_device_no_standing_tuning_moment", "device_no", "standing", "tuning_moment"),
        {"sqlite_strict": True},
    )
    ASIDE: ClassVar[frozenset[str]] = frozenset({"device_no", "tuning_moment"})
    LINKS: ClassVar[tuple[str, ...]] = ("evidence", "after")

    tuning_no: int = _link("tuning")
    criteria_no: int | None = _optional_link("criteria")
    standing: str = _text()
    why: str | None = _optional_text()
    purpose: str | None = _optional_text()
    sites: str | None = _optional_json()
    at: int = _instant()
    device_no: int = _link("device", index=False)
    tuning_moment: int = _instant()


class Amendment(Kept, table=True):
    """A descriptive field given another value, with a reason; ``value`` is JSON."""

    __tablename__ = "amendment"
    __table_args__ = ({"sqlite_strict": True},)
    LINKS: ClassVar[tuple[str, ...]] = ("after",)

    target_no: int = _link("record")
    field: str = _text()
    value: str = _json()
    why: str = _text()
    at: int = _instant()


class Withdrawal(Kept, table=True):
    """A record taken back, with a reason; all that hangs on it is tainted."""

    __tablename__ = "withdrawal"
    __table_args__ = ({"sqlite_strict": True},)
    LINKS: ClassVar[tuple[str, ...]] = ("after",)

    target_no: int = _link("record")
    why: str = _text()
    at: int = _instant()


class SameAs(Kept, table=True):
    """Two chip records that are one chip."""

    __tablename__ = "same_as"
    __table_args__ = ({"sqlite_strict": True},)
    LINKS: ClassVar[tuple[str, ...]] = ("chips",)

    why: str = _text()
    at: int = _instant()


class Attachment(Kept, table=True):
    """A file that belongs to a record: a photograph, a page of notes."""

    __tablename__ = "attachment"
    __table_args__ = ({"sqlite_strict": True},)
    ASIDE: ClassVar[frozenset[str]] = frozenset({"file_name"})

    target_no: int = _link("record")
    raw_file_no: int = _link("raw_file")
    file_name: str = _text()


class QuantityAdded(Kept, table=True):
    """A quantity that a laboratory added to the controlled list."""

    __tablename__ = "quantity"
    __table_args__ = ({"sqlite_strict": True},)

    name: str = _text()
    unit: str = _text()
    valid_until: str = _text()
    meaning: str | None = _optional_text()


KINDS: dict[str, type[Kept]] = {
    str(table.__tablename__): table
    for table in (
        Chip,
        Device,
        GateSheet,
        GateHealth,
        Cooldown,
        Event,
        Wiring,
        RawFile,
        Tuning,
        Measurement,
        Analysis,
        Parameter,
        Criteria,
        Standing,
        Amendment,
        Withdrawal,
        SameAs,
        Attachment,
        QuantityAdded,
    )
}


def kept_tables() -> list[str]:
    """Names of all tables that must never change a row, in order of creation."""
    return [table.name for table in metadata.sorted_tables]
