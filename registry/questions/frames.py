"""How states, values and events of a device look as pandas tables, units in ``attrs``."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

import pandas as pd

from registry.questions.asking import ask_among
from registry.questions.devices import find_body
from registry.questions.happenings import happenings
from registry.questions.parameters import points
from registry.questions.states import load_states, volts_at_gate, wiring_of
from registry.questions.surroundings import surroundings_of
from registry.questions.tunings import list_tunings

if TYPE_CHECKING:
    from registry.keeping.handle import Registry

__all__ = ["events_frame", "parameters_frame", "states_frame"]


def states_frame(reg: Registry, device: str) -> pd.DataFrame:
    """States of a device, oldest first, indexed by id.

    Columns ``at`` (UTC), ``cooldown``, ``stretch``, ``purpose``, ``sites``, ``standing``,
    ``by``, ``withdrawn``, and one ``volts.GATE`` a gate in V at the gate (NaN where not
    recorded or not derivable); ``attrs["units"]`` maps columns to units.

    Raises:
        LookupFailed: no such device.
    """
    rows = list_tunings(reg, device)[::-1]
    with reg.reading() as connection:
        body = find_body(connection, device)
        around = surroundings_of(connection, body)
        nos = [
            row.no for row in ask_among(connection, "SELECT no FROM tuning WHERE device_no IN :nos", body.nos)
        ]
        states = {state.hex: state for state in load_states(connection, nos).values()}
    volts = [volts_at_gate(states[row.id], wiring_of(states[row.id], around.wirings)) for row in rows]
    gates = list(dict.fromkeys(gate for row in rows for gate in states[row.id].sheet.order))
    frame = pd.DataFrame(
        {
            "at": _times(row.at for row in rows),
            "cooldown": [row.cooldown for row in rows],
            "stretch": pd.array([row.stretch for row in rows], dtype="Int64"),
            "purpose": [row.purpose for row in rows],
            "sites": [" ".join(row.sites) for row in rows],
            "standing": [row.standing for row in rows],
            "by": [row.by for row in rows],
            "withdrawn": [row.withdrawn for row in rows],
            **{f"volts.{gate}": [at.get(gate, float("nan")) for at in volts] for gate in gates},
        },
        index=pd.Index([row.id for row in rows], name="id"),
    )
    frame.attrs["units"] = {f"volts.{gate}": "V" for gate in gates}
    frame.attrs["device"] = body.name
    return frame


def parameters_frame(
    reg: Registry, device: str, quantity: str | None = None, *, subject: str | None = None
) -> pd.DataFrame:
    """Values of a device by time, indexed by id; tainted ones are left out.

    Columns ``at`` (UTC), ``quantity``, ``subject``, ``value``, ``standard_uncertainty``,
    ``unit``, ``bound``, ``cooldown``, ``stretch``, ``tuning``, ``method``, ``version``;
    ``attrs["units"]`` maps quantities to units (values are kept in one unit a quantity).

    Raises:
        LookupFailed: no such device.
    """
    found = points(reg, device, quantity, subject=subject)
    names = ("quantity", "subject", "value", "standard_uncertainty", "unit", "bound", "cooldown")
    columns = {name: [getattr(point, name) for point in found] for name in names}
    frame = pd.DataFrame(
        {
            "at": _times(point.moment for point in found),
            **columns,
            "stretch": pd.array([point.stretch for point in found], dtype="Int64"),
            "tuning": [point.tuning for point in found],
            "method": [point.method for point in found],
            "version": [point.version for point in found],
        },
        index=pd.Index([point.id for point in found], name="id"),
    ).astype({"value": "float64", "standard_uncertainty": "float64"})
    frame.attrs["units"] = {point.quantity: point.unit for point in found}
    return frame


def events_frame(reg: Registry, device: str) -> pd.DataFrame:
    """Events that touched a device, oldest first, indexed by id; ``kelvin`` in K.

    Columns ``at``, ``until`` (UTC), ``event``, ``effect``, ``kelvin``, ``gate``, ``site``,
    ``note``.

    Raises:
        LookupFailed: no such device.
    """
    with reg.reading() as connection:
        found = happenings(connection, find_body(connection, device))
    frame = pd.DataFrame(
        {
            "at": _times(event.at for event in found),
            "until": _times(event.until for event in found),
            "event": [event.event for event in found],
            "effect": [event.effect for event in found],
            "kelvin": [event.kelvin for event in found],
            "gate": [event.gate for event in found],
            "site": [event.site for event in found],
            "note": [event.note for event in found],
        },
        index=pd.Index([event.digest.hex() for event in found], name="id"),
    ).astype({"kelvin": "float64"})
    frame.attrs["units"] = {"kelvin": "K"}
    return frame


def _times(moments: Iterable[int | None]) -> pd.DatetimeIndex:
    """Microseconds as UTC times, NaT where None."""
    stamps = [pd.NaT if moment is None else pd.Timestamp(moment, unit="us", tz="UTC") for moment in moments]
    return pd.DatetimeIndex(stamps, dtype="datetime64[us, UTC]")
