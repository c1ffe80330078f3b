"""A device's gate sheet as objects: its gates in order, its sites, its pair limits."""

from __future__ import annotations

import difflib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.currency import gate_sheet_in_force
from registry.records.descriptions import Gate, PairLimit, Site

__all__ = ["Sheet", "gates_of", "sheet_content", "sheet_of"]


@dataclass(frozen=True)
class Sheet:
    """A gate sheet.

    Attributes:
        no: its key; gates: in the order of volts; sites, pairs: may be empty.
    """

    no: int
    gates: tuple[Gate, ...]
    sites: tuple[Site, ...]
    pairs: tuple[PairLimit, ...]

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Names of the gates in order."""
        return tuple(gate.gate for gate in self.gates)

    def require_gate(self, name: str, device: str) -> None:
        """Refuse an unknown gate.

        Raises:
            InputError: names the nearest known ones.
        """
        if name not in self.names:
            raise _unknown("gate", name, self.names, device)

    def require_site(self, name: str, device: str) -> None:
        """Refuse an unknown site.

        Raises:
            InputError: names the nearest known ones.
        """
        known = tuple(site.site for site in self.sites)
        if name not in known:
            raise _unknown("site", name, known, device)


def sheet_of(connection: Connection, no: int) -> Sheet:
    """The gate sheet with this key."""
    row = connection.execute(
        text("SELECT gates, sites, pairs FROM gate_sheet WHERE no = :no"), {"no": no}
    ).one()
    return Sheet(
        no,
        tuple(Gate.from_content(gate) for gate in json.loads(row.gates)),
        tuple(Site.from_content(site) for site in json.loads(row.sites)),
        tuple(PairLimit.from_content(pair) for pair in json.loads(row.pairs)),
    )


def gates_of(connection: Connection, device_no: int) -> Sheet:
    """The gate sheet of a device that is in force."""
    return sheet_of(connection, gate_sheet_in_force(connection, device_no))


def sheet_content(
    gates: Sequence[Gate], sites: Sequence[Site], pairs: Sequence[PairLimit], *, where: str
) -> Mapping[str, Any]:
    """The content of a gate sheet record, checked against itself.

    Raises:
        InputError: no gate, a name twice, a site or pair of an unknown gate; all
            faults together.
    """
    names = [gate.gate for gate in gates]
    faults = [f"the gate {name} stands twice" for name in sorted({n for n in names if names.count(n) > 1})]
    site_names = [site.site for site in sites]
    faults += [
        f"the site {n} stands twice" for n in sorted({n for n in site_names if site_names.count(n) > 1})
    ]
    known = set(names)
    for site in sites:
        faults += [f"site {site.site}: there is no gate {gate}" for gate in site.gates if gate not in known]
    for pair in pairs:
        faults += [
            f"pair {pair.gate_a} - {pair.gate_b}: there is no gate {gate}"
            for gate in (pair.gate_a, pair.gate_b)
            if gate not in known
        ]
    if not gates:
        faults.insert(0, "there is no gate")
    if faults:
        raise InputError(
            faults[0],
            where=where,
            remedy="correct the tables; nothing was recorded",
            faults=tuple(faults[1:]),
        )
    return {
        "gates": [gate.content() for gate in gates],
        "sites": [site.content() for site in sites],
        "pairs": [pair.content() for pair in pairs],
    }


def _unknown(kind: str, name: str, known: Sequence[str], device: str) -> InputError:
    near = difflib.get_close_matches(name, known, n=3)
    listed = ", ".join(near or known[:8]) or "none"
    return InputError(
        f"there is no {kind} {name!r}",
        where=device,
        remedy=f"{'nearest' if near else 'known'}: {listed}; nothing was recorded",
    )
