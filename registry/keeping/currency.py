"""Which records of a chain of changes are current: the heads that no later one names."""

from __future__ import annotations

from sqlalchemy import Connection, text

from registry.keeping.naming import NOT_WITHDRAWN

__all__ = ["gate_sheet_in_force", "heads", "wiring_in_force"]


def heads(connection: Connection, table: str, where: str, values: dict[str, object]) -> list[int]:
    """Numbers of the current records of ``table`` that fulfil ``where`` (alias ``x``), oldest first.

    Of one moment, the order is that of the digests: it is the same in every registry.

    Current: not withdrawn, and named in ``after``, directly or along a chain, by no record
    that is not withdrawn.  A withdrawn link in the middle of a chain does not bring the
    oldest back, because the newest was still made in knowledge of it.
    """
    sql = f"""SELECT x.no FROM "{table}" x WHERE ({where}) AND {NOT_WITHDRAWN.format(no="x.no")}
        AND NOT EXISTS (
          WITH RECURSIVE later(no) AS (
            SELECT record_no FROM link WHERE target_no = x.no AND role = 'after'
            UNION SELECT l.record_no FROM link l JOIN later ON l.target_no = later.no AND l.role = 'after')
          SELECT 1 FROM later WHERE {NOT_WITHDRAWN.format(no="later.no")})
        ORDER BY x.at, x.digest"""
    return list(connection.execute(text(sql), values).scalars())


def gate_sheet_in_force(connection: Connection, device_no: int) -> int:
    """The device's gate sheet: the current head, the newest of them where several differ."""
    return heads(connection, "gate_sheet", "x.device_no = :device", {"device": device_no})[-1]


def wiring_in_force(connection: Connection, cooldown_no: int, at: int) -> int | None:
    """The wiring of a cooldown at a moment, None if none is on record.

    Of the current wirings with the largest ``since`` not after the moment, the newest.
    """
    current = heads(
        connection,
        "wiring",
        "x.cooldown_no = :cooldown AND (x.since IS NULL OR x.since <= :at)",
        {"cooldown": cooldown_no, "at": at},
    )
    if not current:
        return None
    rows = {
        row.no: row
        for row in connection.execute(
            text("SELECT no, since, at, digest FROM wiring WHERE cooldown_no = :cooldown"),
            {"cooldown": cooldown_no},
        )
    }

    def order(no: int) -> tuple[bool, int, int, bytes]:
        row = rows[no]
        return row.since is not None, row.since or 0, row.at, bytes(row.digest)

    return max(current, key=order)
