"""The first schema: spine, journal, and one table a kind of record."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from typing import Any

from alembic import op
from sqlalchemy import (
    CheckConstraint,
    Column,
    ForeignKeyConstraint,
    PrimaryKeyConstraint,
    UniqueConstraint,
)

from registry.records import columns

revision = "0001"
down_revision = None

# Each unique key of a table beyond its ``no``, for the guards against REPLACE.
KEYS: dict[str, tuple[tuple[str, ...], ...]] = {
    "record": (("no",), ("digest",)),
    "link": (("record_no", "role", "target_no"),),
    "tainted": (("record_no", "withdrawal_no"),),
    "journal": (("seq",),),
    "tile": (("level", "pos"),),
}


def upgrade() -> None:
    """Make all tables, their guards, and the views for plain SQL."""
    _create_tables()
    guards = _guards()
    postgres = op.get_bind().dialect.name == "postgresql"
    if postgres:
        _run(guards.postgres_functions())
    for table in TABLES:
        if postgres:
            _run(guards.postgres_guards(table))
        else:
            _run(guards.sqlite_guards(table, KEYS.get(table, (("no",),))))
    _run(POSTGRES_VIEWS if postgres else SQLITE_VIEWS)
    if not postgres:
        bind = op.get_bind()
        rows = [(k, 2.0**k) for k in range(-1074, 972)]
        bind.exec_driver_sql("INSERT INTO power_of_two (k, value) VALUES (?, ?)", rows)


def _run(statements: list[str]) -> None:
    # As driver SQL: a colon in a statement is no bound parameter.
    for statement in statements:
        op.get_bind().exec_driver_sql(statement)


def _guards() -> Any:
    # The folder of the migrations is no package: it lies in two places (see migrating.py).
    path = Path(__file__).resolve().parents[1] / "guards.py"
    spec = importlib.util.spec_from_file_location("millikeep_guards", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


# A tuning state's volts as rows: tuning_no, position in the gate sheet, gate, volts at the
# observed level (NULL where not recorded).
POSTGRES_VIEWS = [
    """CREATE VIEW tuning_volts AS
    SELECT t.no AS tuning_no, (g.position - 1)::bigint AS position, g.described ->> 'gate' AS gate,
           CASE WHEN t.volts[g.position] = 'NaN' THEN NULL ELSE t.volts[g.position] END AS volts
    FROM tuning t JOIN gate_sheet s ON s.no = t.gate_sheet_no
    CROSS JOIN LATERAL jsonb_array_elements(s.gates::jsonb) WITH ORDINALITY AS g(described, position)""",
    """CREATE VIEW readable_time AS
    SELECT no AS record_no, kind, to_char(
      to_timestamp(0) AT TIME ZONE 'UTC' + entered * interval '1 microsecond',
      'YYYY-MM-DD"T"HH24:MI:SS.US"Z"') AS entered, person FROM record""",
]

# IEEE 754 decoded in plain SQL: 12 bits of sign and exponent, 52 bits of fraction; the
# powers of two stand in a table because SQL has no exact one.
_HEX = "(instr('0123456789ABCDEF', substr(h, {place}, 1)) - 1)"
_FRACTION = " + ".join(f"{_HEX.format(place=place)} * {16 ** (16 - place)}" for place in range(4, 17))
_TOP = " + ".join(f"{_HEX.format(place=place)} * {16 ** (3 - place)}" for place in range(1, 4))
SQLITE_VIEWS = [
    "CREATE TABLE power_of_two (k INTEGER PRIMARY KEY, value REAL NOT NULL) STRICT",
    f"""CREATE VIEW tuning_volts AS
    WITH block AS (
      SELECT t.no AS tuning_no, g.key AS position, g.value ->> 'gate' AS gate,
             hex(substr(t.volts, 8 * g.key + 1, 8)) AS h
      FROM tuning t JOIN gate_sheet s ON s.no = t.gate_sheet_no, json_each(s.gates) g),
    parts AS (SELECT tuning_no, position, gate, {_TOP} AS top, {_FRACTION} AS fraction FROM block)
    SELECT tuning_no, position, gate,
      CASE WHEN (top & 2047) = 2047 THEN NULL ELSE
        (CASE WHEN top >= 2048 THEN -1.0 ELSE 1.0 END) *
        (fraction + CASE WHEN (top & 2047) = 0 THEN 0 ELSE 4503599627370496 END) * p.value END AS volts
    FROM parts JOIN power_of_two p ON p.k = CASE
      WHEN (top & 2047) IN (0, 2047) THEN -1074 ELSE (top & 2047) - 1075 END""",
    """CREATE VIEW readable_time AS
    SELECT no AS record_no, kind,
      strftime('%Y-%m-%dT%H:%M:%S', entered / 1000000, 'unixepoch')
        || printf('.%06dZ', entered % 1000000) AS entered, person FROM record""",
]


TABLES = (
    "journal",
    "record",
    "tile",
    "amendment",
    "analysis",
    "chip",
    "cooldown",
    "criteria",
    "link",
    "quantity",
    "raw_file",
    "same_as",
    "tainted",
    "withdrawal",
    "attachment",
    "device",
    "wiring",
    "event",
    "gate_health",
    "gate_sheet",
    "tuning",
    "measurement",
    "parameter",
    "standing",
)


def _create_tables() -> None:
    _create_journal()
    _create_record()
    _create_tile()
    _create_amendment()
    _create_analysis()
    _create_chip()
    _create_cooldown()
    _create_criteria()
    _create_link()
    _create_quantity()
    _create_raw_file()
    _create_same_as()
    _create_tainted()
    _create_withdrawal()
    _create_attachment()
    _create_device()
    _create_wiring()
    _create_event()
    _create_gate_health()
    _create_gate_sheet()
    _create_tuning()
    _create_measurement()
    _create_parameter()
    _create_standing()


def _create_journal() -> None:
    op.create_table(
        "journal",
        Column("seq", columns.Key(), autoincrement=False, nullable=False),
        Column("entry", columns.Text(), nullable=False),
        Column("leaf", columns.Digest32(), nullable=False),
        Column("recorded_by", columns.Text(), nullable=True),
        CheckConstraint("length(leaf) = 32", name="ck_journal_leaf_length"),
        PrimaryKeyConstraint("seq", name="pk_journal"),
        sqlite_strict=True,
    )


def _create_record() -> None:
    op.create_table(
        "record",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("kind", columns.Text(), nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("seq", columns.Key(), nullable=False),
        Column("entered", columns.Instant(), nullable=False),
        Column("person", columns.Text(), nullable=False),
        CheckConstraint("length(digest) = 32", name="ck_record_digest_length"),
        PrimaryKeyConstraint("no", name="pk_record"),
        UniqueConstraint("digest", name="uq_record_digest"),
        sqlite_strict=True,
    )


def _create_tile() -> None:
    op.create_table(
        "tile",
        Column("level", columns.Key(), autoincrement=False, nullable=False),
        Column("pos", columns.Key(), autoincrement=False, nullable=False),
        Column("hashes", columns.Digest32(), nullable=False),
        PrimaryKeyConstraint("level", "pos", name="pk_tile"),
        sqlite_strict=True,
    )


def _create_amendment() -> None:
    op.create_table(
        "amendment",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("target_no", columns.Key(), nullable=False),
        Column("field", columns.Text(), nullable=False),
        Column("value", columns.JsonText(), nullable=False),
        Column("why", columns.Text(), nullable=False),
        Column("at", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_amendment_no"),
        ForeignKeyConstraint(["target_no"], ["record.no"], name="fk_amendment_target_no"),
        PrimaryKeyConstraint("no", name="pk_amendment"),
        sqlite_strict=True,
    )
    op.create_index("ix_amendment_target_no", "amendment", ["target_no"])


def _create_analysis() -> None:
    op.create_table(
        "analysis",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("method", columns.Text(), nullable=False),
        Column("version", columns.Text(), nullable=False),
        Column("source_digest", columns.Text(), nullable=False),
        Column("settings", columns.JsonText(), nullable=False),
        Column("subject", columns.Text(), nullable=True),
        Column("refused", columns.Text(), nullable=True),
        Column("warnings", columns.JsonText(), nullable=True),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_analysis_no"),
        PrimaryKeyConstraint("no", name="pk_analysis"),
        sqlite_strict=True,
    )


def _create_chip() -> None:
    op.create_table(
        "chip",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("wafer", columns.Text(), nullable=True),
        Column("lot", columns.Text(), nullable=True),
        Column("die", columns.Text(), nullable=True),
        Column("label", columns.Text(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_chip_no"),
        PrimaryKeyConstraint("no", name="pk_chip"),
        sqlite_strict=True,
    )


def _create_cooldown() -> None:
    op.create_table(
        "cooldown",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("label", columns.Text(), nullable=False),
        Column("cryostat", columns.Text(), nullable=False),
        Column("board", columns.Text(), nullable=True),
        Column("at", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_cooldown_no"),
        PrimaryKeyConstraint("no", name="pk_cooldown"),
        sqlite_strict=True,
    )


def _create_criteria() -> None:
    op.create_table(
        "criteria",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("name", columns.Text(), nullable=False),
        Column("requirements", columns.JsonText(), nullable=False),
        Column("at", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_criteria_no"),
        PrimaryKeyConstraint("no", name="pk_criteria"),
        sqlite_strict=True,
    )


def _create_link() -> None:
    op.create_table(
        "link",
        Column("record_no", columns.Key(), nullable=False),
        Column("role", columns.Text(), nullable=False),
        Column("target_no", columns.Key(), nullable=False),
        ForeignKeyConstraint(["record_no"], ["record.no"], name="fk_link_record_no"),
        ForeignKeyConstraint(["target_no"], ["record.no"], name="fk_link_target_no"),
        PrimaryKeyConstraint("record_no", "role", "target_no", name="pk_link"),
        sqlite_strict=True,
    )
    op.create_index("ix_link_target_no", "link", ["target_no"])


def _create_quantity() -> None:
    op.create_table(
        "quantity",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("name", columns.Text(), nullable=False),
        Column("unit", columns.Text(), nullable=False),
        Column("valid_until", columns.Text(), nullable=False),
        Column("meaning", columns.Text(), nullable=True),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_quantity_no"),
        PrimaryKeyConstraint("no", name="pk_quantity"),
        sqlite_strict=True,
    )


def _create_raw_file() -> None:
    op.create_table(
        "raw_file",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("sha256", columns.Text(), nullable=False),
        Column("size", columns.Key(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_raw_file_no"),
        PrimaryKeyConstraint("no", name="pk_raw_file"),
        sqlite_strict=True,
    )
    op.create_index("ix_raw_file_sha256", "raw_file", ["sha256"])


def _create_same_as() -> None:
    op.create_table(
        "same_as",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("why", columns.Text(), nullable=False),
        Column("at", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_same_as_no"),
        PrimaryKeyConstraint("no", name="pk_same_as"),
        sqlite_strict=True,
    )


def _create_tainted() -> None:
    op.create_table(
        "tainted",
        Column("record_no", columns.Key(), nullable=False),
        Column("withdrawal_no", columns.Key(), nullable=False),
        ForeignKeyConstraint(["record_no"], ["record.no"], name="fk_tainted_record_no"),
        ForeignKeyConstraint(["withdrawal_no"], ["record.no"], name="fk_tainted_withdrawal_no"),
        PrimaryKeyConstraint("record_no", "withdrawal_no", name="pk_tainted"),
        sqlite_strict=True,
    )


def _create_withdrawal() -> None:
    op.create_table(
        "withdrawal",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("target_no", columns.Key(), nullable=False),
        Column("why", columns.Text(), nullable=False),
        Column("at", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_withdrawal_no"),
        ForeignKeyConstraint(["target_no"], ["record.no"], name="fk_withdrawal_target_no"),
        PrimaryKeyConstraint("no", name="pk_withdrawal"),
        sqlite_strict=True,
    )
    op.create_index("ix_withdrawal_target_no", "withdrawal", ["target_no"])


def _create_attachment() -> None:
    op.create_table(
        "attachment",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("target_no", columns.Key(), nullable=False),
        Column("raw_file_no", columns.Key(), nullable=False),
        Column("file_name", columns.Text(), nullable=False),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_attachment_no"),
        ForeignKeyConstraint(["raw_file_no"], ["raw_file.no"], name="fk_attachment_raw_file_no"),
        ForeignKeyConstraint(["target_no"], ["record.no"], name="fk_attachment_target_no"),
        PrimaryKeyConstraint("no", name="pk_attachment"),
        sqlite_strict=True,
    )
    op.create_index("ix_attachment_raw_file_no", "attachment", ["raw_file_no"])
    op.create_index("ix_attachment_target_no", "attachment", ["target_no"])


def _create_device() -> None:
    op.create_table(
        "device",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("chip_no", columns.Key(), nullable=False),
        Column("name", columns.Text(), nullable=False),
        ForeignKeyConstraint(["chip_no"], ["chip.no"], name="fk_device_chip_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_device_no"),
        PrimaryKeyConstraint("no", name="pk_device"),
        sqlite_strict=True,
    )
    op.create_index("ix_device_chip_no", "device", ["chip_no"])


def _create_wiring() -> None:
    op.create_table(
        "wiring",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("cooldown_no", columns.Key(), nullable=False),
        Column("lines", columns.JsonText(), nullable=False),
        Column("since", columns.Instant(), nullable=True),
        Column("why", columns.Text(), nullable=True),
        Column("at", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["cooldown_no"], ["cooldown.no"], name="fk_wiring_cooldown_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_wiring_no"),
        PrimaryKeyConstraint("no", name="pk_wiring"),
        sqlite_strict=True,
    )
    op.create_index("ix_wiring_cooldown_no", "wiring", ["cooldown_no"])


def _create_event() -> None:
    op.create_table(
        "event",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("cooldown_no", columns.Key(), nullable=False),
        Column("device_no", columns.Key(), nullable=True),
        Column("event", columns.Text(), nullable=False),
        Column("at", columns.Instant(), nullable=False),
        Column("until", columns.Instant(), nullable=True),
        Column("kelvin", columns.Real(), nullable=True),
        Column("gate", columns.Text(), nullable=True),
        Column("site", columns.Text(), nullable=True),
        Column("volts", columns.JsonText(), nullable=True),
        Column("details", columns.JsonText(), nullable=True),
        Column("note", columns.Text(), nullable=True),
        ForeignKeyConstraint(["cooldown_no"], ["cooldown.no"], name="fk_event_cooldown_no"),
        ForeignKeyConstraint(["device_no"], ["device.no"], name="fk_event_device_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_event_no"),
        PrimaryKeyConstraint("no", name="pk_event"),
        sqlite_strict=True,
    )
    op.create_index("ix_event_cooldown_no", "event", ["cooldown_no"])
    op.create_index("ix_event_device_no", "event", ["device_no"])


def _create_gate_health() -> None:
    op.create_table(
        "gate_health",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("device_no", columns.Key(), nullable=False),
        Column("gate", columns.Text(), nullable=False),
        Column("health", columns.Text(), nullable=False),
        Column("to_gate", columns.Text(), nullable=True),
        Column("above_v", columns.Real(), nullable=True),
        Column("at", columns.Instant(), nullable=False),
        Column("note", columns.Text(), nullable=True),
        ForeignKeyConstraint(["device_no"], ["device.no"], name="fk_gate_health_device_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_gate_health_no"),
        PrimaryKeyConstraint("no", name="pk_gate_health"),
        sqlite_strict=True,
    )
    op.create_index("ix_gate_health_device_no", "gate_health", ["device_no"])


def _create_gate_sheet() -> None:
    op.create_table(
        "gate_sheet",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("device_no", columns.Key(), nullable=False),
        Column("gates", columns.JsonText(), nullable=False),
        Column("sites", columns.JsonText(), nullable=False),
        Column("pairs", columns.JsonText(), nullable=False),
        Column("why", columns.Text(), nullable=True),
        Column("at", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["device_no"], ["device.no"], name="fk_gate_sheet_device_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_gate_sheet_no"),
        PrimaryKeyConstraint("no", name="pk_gate_sheet"),
        sqlite_strict=True,
    )
    op.create_index("ix_gate_sheet_device_no", "gate_sheet", ["device_no"])


def _create_tuning() -> None:
    op.create_table(
        "tuning",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("device_no", columns.Key(), nullable=False),
        Column("cooldown_no", columns.Key(), nullable=False),
        Column("gate_sheet_no", columns.Key(), nullable=False),
        Column("parent_no", columns.Key(), nullable=True),
        Column("raw_file_no", columns.Key(), nullable=True),
        Column("level", columns.Text(), nullable=False),
        Column("volts", columns.Volts(), nullable=False),
        Column("settings", columns.JsonText(), nullable=True),
        Column("occupation", columns.JsonText(), nullable=True),
        Column("purpose", columns.Text(), nullable=True),
        Column("sites", columns.JsonText(), nullable=True),
        Column("at", columns.Instant(), nullable=True),
        Column("moment", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["cooldown_no"], ["cooldown.no"], name="fk_tuning_cooldown_no"),
        ForeignKeyConstraint(["device_no"], ["device.no"], name="fk_tuning_device_no"),
        ForeignKeyConstraint(["gate_sheet_no"], ["gate_sheet.no"], name="fk_tuning_gate_sheet_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_tuning_no"),
        ForeignKeyConstraint(["parent_no"], ["tuning.no"], name="fk_tuning_parent_no"),
        ForeignKeyConstraint(["raw_file_no"], ["raw_file.no"], name="fk_tuning_raw_file_no"),
        PrimaryKeyConstraint("no", name="pk_tuning"),
        sqlite_strict=True,
    )
    op.create_index("ix_tuning_cooldown_no", "tuning", ["cooldown_no"])
    op.create_index("ix_tuning_device_no_moment", "tuning", ["device_no", "moment"])
    op.create_index("ix_tuning_gate_sheet_no", "tuning", ["gate_sheet_no"])
    op.create_index("ix_tuning_parent_no", "tuning", ["parent_no"])
    op.create_index("ix_tuning_raw_file_no", "tuning", ["raw_file_no"])


def _create_measurement() -> None:
    op.create_table(
        "measurement",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("tuning_no", columns.Key(), nullable=False),
        Column("raw_file_no", columns.Key(), nullable=False),
        Column("layout_no", columns.Key(), nullable=True),
        Column("kind", columns.Text(), nullable=True),
        Column("shape", columns.Text(), nullable=False),
        Column("axes", columns.JsonText(), nullable=False),
        Column("signals", columns.JsonText(), nullable=False),
        Column("at", columns.Instant(), nullable=True),
        Column("moment", columns.Instant(), nullable=False),
        Column("file_name", columns.Text(), nullable=False),
        ForeignKeyConstraint(["layout_no"], ["raw_file.no"], name="fk_measurement_layout_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_measurement_no"),
        ForeignKeyConstraint(["raw_file_no"], ["raw_file.no"], name="fk_measurement_raw_file_no"),
        ForeignKeyConstraint(["tuning_no"], ["tuning.no"], name="fk_measurement_tuning_no"),
        PrimaryKeyConstraint("no", name="pk_measurement"),
        sqlite_strict=True,
    )
    op.create_index("ix_measurement_raw_file_no", "measurement", ["raw_file_no"])
    op.create_index("ix_measurement_tuning_no", "measurement", ["tuning_no"])


def _create_parameter() -> None:
    op.create_table(
        "parameter",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("analysis_no", columns.Key(), nullable=True),
        Column("device_no", columns.Key(), nullable=False),
        Column("cooldown_no", columns.Key(), nullable=True),
        Column("tuning_no", columns.Key(), nullable=True),
        Column("quantity", columns.Text(), nullable=False),
        Column("subject", columns.Text(), nullable=True),
        Column("value", columns.Real(), nullable=True),
        Column("standard_uncertainty", columns.Real(), nullable=True),
        Column("unit", columns.Text(), nullable=False),
        Column("degrees_of_freedom", columns.Real(), nullable=True),
        Column("bound", columns.Text(), nullable=True),
        Column("why", columns.Text(), nullable=True),
        Column("conditions", columns.JsonText(), nullable=True),
        Column("shared", columns.JsonText(), nullable=True),
        Column("source", columns.Text(), nullable=True),
        Column("method", columns.Text(), nullable=True),
        Column("notes", columns.JsonText(), nullable=True),
        Column("at", columns.Instant(), nullable=True),
        Column("moment", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["analysis_no"], ["analysis.no"], name="fk_parameter_analysis_no"),
        ForeignKeyConstraint(["cooldown_no"], ["cooldown.no"], name="fk_parameter_cooldown_no"),
        ForeignKeyConstraint(["device_no"], ["device.no"], name="fk_parameter_device_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_parameter_no"),
        ForeignKeyConstraint(["tuning_no"], ["tuning.no"], name="fk_parameter_tuning_no"),
        PrimaryKeyConstraint("no", name="pk_parameter"),
        sqlite_strict=True,
    )
    op.create_index("ix_parameter_analysis_no", "parameter", ["analysis_no"])
    op.create_index("ix_parameter_device_no_quantity", "parameter", ["device_no", "quantity"])
    op.create_index("ix_parameter_tuning_no", "parameter", ["tuning_no"])


def _create_standing() -> None:
    op.create_table(
        "standing",
        Column("no", columns.Key(), autoincrement=False, nullable=False),
        Column("digest", columns.Digest32(), nullable=False),
        Column("tuning_no", columns.Key(), nullable=False),
        Column("criteria_no", columns.Key(), nullable=True),
        Column("standing", columns.Text(), nullable=False),
        Column("why", columns.Text(), nullable=True),
        Column("purpose", columns.Text(), nullable=True),
        Column("sites", columns.JsonText(), nullable=True),
        Column("at", columns.Instant(), nullable=False),
        Column("device_no", columns.Key(), nullable=False),
        Column("tuning_moment", columns.Instant(), nullable=False),
        ForeignKeyConstraint(["criteria_no"], ["criteria.no"], name="fk_standing_criteria_no"),
        ForeignKeyConstraint(["device_no"], ["device.no"], name="fk_standing_device_no"),
        ForeignKeyConstraint(["no"], ["record.no"], name="fk_standing_no"),
        ForeignKeyConstraint(["tuning_no"], ["tuning.no"], name="fk_standing_tuning_no"),
        PrimaryKeyConstraint("no", name="pk_standing"),
        sqlite_strict=True,
    )
    op.create_index("ix_standing_criteria_no", "standing", ["criteria_no"])
    op.create_index(
        "ix_standing_device_no_standing_tuning_moment", "standing", ["device_no", "standing", "tuning_moment"]
    )
    op.create_index("ix_standing_tuning_no", "standing", ["tuning_no"])
