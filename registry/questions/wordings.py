"""What a record is called in a list: a few words from its own fields.  Pure."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from typing import Any

from registry.questions.asking import spoken
from registry.records.measured import measured

__all__ = ["words_for"]

Row = Mapping[str, Any]


def words_for(kind: str, row: Row) -> str:
    """A few words for a record of ``kind`` with the stored columns ``row``."""
    return _WORDS.get(kind, _plain)(row)


def _plain(row: Row) -> str:
    return str(row.get("label") or row.get("name") or "")


def _joined(*parts: object) -> str:
    return " ".join(str(part) for part in parts if part not in (None, ""))


def _time(row: Row) -> str:
    moment = row.get("moment") or row.get("at")
    return "" if moment is None else f"at {spoken(moment)}"


def _parameter(row: Row) -> str:
    subject = f"of {row['subject']}" if row.get("subject") else ""
    if row.get("value") is None:
        return _joined(row["quantity"], subject, "has no value:", row.get("why"))
    value = measured(row["value"], row.get("standard_uncertainty"), row["unit"], row.get("bound"))
    return _joined(row["quantity"], subject, value)


def _amendment(row: Row) -> str:
    return f"{row['field']} is {json.loads(row['value'])}: {row['why']}"


_WORDS: dict[str, Callable[[Row], str]] = {
    "chip": lambda row: _joined(row["label"], *(f"{n} {row[n]}" for n in ("wafer", "lot", "die") if row[n])),
    "cooldown": lambda row: _joined(row["label"], "in", row["cryostat"], _time(row)),
    "event": lambda row: _joined(row["event"], _time(row), row.get("note")),
    "gate_health": lambda row: _joined(row["gate"], row["health"], row.get("to_gate"), _time(row)),
    "gate_sheet": lambda row: _joined(f"{len(json.loads(row['gates']))} gates", _time(row), row.get("why")),
    "wiring": lambda row: _joined(f"{len(json.loads(row['lines']))} lines", _time(row), row.get("why")),
    "raw_file": lambda row: f"sha256 {row['sha256']}, {row['size']} bytes",
    "tuning": lambda row: _joined(row.get("purpose"), _time(row)),
    "measurement": lambda row: _joined(row["file_name"], row.get("kind"), _time(row)),
    "analysis": lambda row: _joined(row["method"], row["version"], row.get("subject")),
    "parameter": _parameter,
    "standing": lambda row: _joined(row["standing"], _time(row), row.get("why")),
    "amendment": _amendment,
    "withdrawal": lambda row: str(row["why"]),
    "same_as": lambda row: str(row["why"]),
    "attachment": lambda row: str(row["file_name"]),
}
