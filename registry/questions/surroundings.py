"""What happened to a device, loaded once for a whole answer."""

from __future__ import annotations

from sqlalchemy import Connection

from registry.questions.asking import ALWAYS
from registry.questions.currency import marks_of
from registry.questions.devices import Body
from registry.questions.freshness import Surroundings
from registry.questions.happenings import event_rows, events_from
from registry.questions.healths import finding_rows, findings_from
from registry.questions.stretches import History, cut
from registry.questions.wirings import wiring_rows, wirings_from

__all__ = ["surroundings_of"]


def surroundings_of(connection: Connection, body: Body, as_of: int = ALWAYS) -> Surroundings:
    """Events, stretches, gate findings and wirings of a device as known at ``as_of``."""
    events = event_rows(connection, body, as_of)
    found = finding_rows(connection, body, as_of)
    wired = wiring_rows(connection, (stay.no for stay in body.stays), as_of)
    marks = marks_of(connection, (row.no for rows in (events, found, wired) for row in rows), as_of)
    standing = events_from(events, marks)
    return Surroundings(
        History(body, standing, cut(body.stays, standing)),
        findings_from(found, marks),
        wirings_from(connection, wired, body, marks.taints),
    )
