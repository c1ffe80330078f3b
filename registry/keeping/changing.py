"""How what is recorded is changed: by adding a record that says so, never by altering one."""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path

from sqlalchemy import text

from registry.errors import InputError
from registry.keeping.currency import heads
from registry.keeping.handle import Registry
from registry.keeping.naming import Found, find_chip, find_record
from registry.keeping.writing import Kept, Writer, refuse_future
from registry.records.values import normal_text

__all__ = ["AMENDABLE", "amend", "attach", "same_as", "withdraw"]

# Descriptive fields by kind; what a record measures or identifies is never amended but
# withdrawn and recorded again.
AMENDABLE: dict[str, tuple[str, ...]] = {
    "chip": ("label", "material", "note"),
    "device": ("name", "family", "note"),
    "cooldown": ("label", "cryostat", "board", "note"),
    "event": ("note",),
    "gate_health": ("note",),
    "tuning": ("purpose", "note"),
    "measurement": ("kind", "note"),
    "parameter": ("note",),
    "analysis": ("note",),
    "wiring": ("note",),
    "gate_sheet": ("note",),
    "standing": ("note",),
    "criteria": ("note",),
}


def amend(
    registry: Registry, record: str, field: str, value: str, *, why: str, at: int | None = None
) -> Kept:
    """Give a descriptive field another value.

    Raises:
        InputError: the field is none that may be amended; no reason.
        LookupFailed: no such record.
    """
    with registry.writing() as writer:
        return amend_on(writer, _any(writer, record), field, value, why=why, at=at)


def amend_on(
    writer: Writer, target: Found, field: str, value: str, *, why: str, at: int | None = None
) -> Kept:
    """``amend`` inside a transaction, for a record already found."""
    kind = target.kind or _kind(writer, target.no)
    allowed = AMENDABLE.get(kind, ())
    if field not in allowed:
        raise InputError(
            f"{field!r} of a {kind} cannot be amended",
            where="amend",
            remedy=f"amendable: {', '.join(allowed)}" if allowed else "withdraw it and record it anew",
        )
    moment = writer.entered if at is None else at
    refuse_future(moment, writer.entered, "amend")
    reason = _reason(why)
    links = {"target": target.no}
    again = writer.same_act("amendment", links, at=moment, field=field, value=value, why=reason)
    if again is not None:
        return again
    seen = heads(
        writer.connection,
        "amendment",
        "x.target_no = :target AND x.field = :field",
        {"target": target.no, "field": field},
    )
    return writer.keep(
        "amendment", links=links | {"after": seen}, field=field, value=value, why=reason, at=moment
    )


def withdraw(registry: Registry, record: str, *, why: str, at: int | None = None) -> Kept:
    """Take a record back; all that hangs on it is tainted in every answer.

    A withdrawal can itself be withdrawn, which restores the record; what restored cannot
    be withdrawn once more: record a new withdrawal instead.

    Raises:
        InputError: no reason, or the withdrawal of a withdrawal.
    """
    with registry.writing() as writer:
        target = _any(writer, record)
        if target.kind == "withdrawal" and _withdraws_a_withdrawal(writer, target.no):
            raise InputError(
                "this withdrawal already restored a record",
                where="withdraw",
                remedy="withdraw the record itself anew, with a reason",
            )
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, "withdraw")
        reason = _reason(why)
        links = {"target": target.no}
        again = writer.same_act("withdrawal", links, at=moment, why=reason)
        if again is not None:
            return again
        seen = heads(writer.connection, "withdrawal", "x.target_no = :target", {"target": target.no})
        kept = writer.keep("withdrawal", links=links | {"after": seen}, why=reason, at=moment)
        writer.taint(kept.no, target.no)
        if seen:
            return replace(kept, notes=("it was withdrawn before; to restore it, withdraw each withdrawal",))
        return kept


def same_as(registry: Registry, chip_a: str, chip_b: str, *, why: str, at: int | None = None) -> Kept:
    """Say that two chip records are one chip.

    Raises:
        InputError: both are the same record; no reason.
    """
    with registry.writing() as writer:
        found = [find_chip(writer.connection, chip) for chip in (chip_a, chip_b)]
        if found[0].no == found[1].no:
            raise InputError(
                "that is one record already", where="same-as", remedy="name two chip records by id"
            )
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, "same-as")
        return writer.keep(
            "same_as", links={"chips": [chip.no for chip in found]}, why=_reason(why), at=moment
        )


def attach(registry: Registry, record: str, path: str | os.PathLike[str]) -> Kept:
    """Keep a file beside a record.

    Raises:
        InputError: the file cannot be read.
        LookupFailed: no such record.
    """
    file = Path(path)
    with registry.reading() as connection:
        find_record(connection, record)
    stored = registry.files.put(file)
    with registry.writing() as writer:
        target = _any(writer, record)
        raw = writer.keep("raw_file", sha256=stored.sha256, size=stored.size)
        return writer.keep("attachment", links={"target": target.no, "raw_file": raw.no}, file_name=file.name)


def _any(writer: Writer, record: str) -> Found:
    return find_record(writer.connection, record)


def _kind(writer: Writer, no: int) -> str:
    return str(
        writer.connection.execute(text("SELECT kind FROM record WHERE no = :no"), {"no": no}).scalar_one()
    )


def _withdraws_a_withdrawal(writer: Writer, no: int) -> bool:
    kind = writer.connection.execute(
        text("SELECT r.kind FROM withdrawal w JOIN record r ON r.no = w.target_no WHERE w.no = :no"),
        {"no": no},
    ).scalar_one()
    return bool(kind == "withdrawal")


def _reason(why: str) -> str:
    reason = normal_text(why, "--why").strip()
    if not reason:
        raise InputError(
            "there is no reason", where="--why", remedy="say why; it stays beside the record for ever"
        )
    return reason
