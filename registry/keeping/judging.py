"""How a judgement on a tuning state, and the criteria for one, enter the registry."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from sqlalchemy import text

from registry.errors import InputError
from registry.keeping.currency import heads
from registry.keeping.handle import Registry
from registry.keeping.naming import Found, device_name, find_tuning
from registry.keeping.sheets_in_force import sheet_of
from registry.keeping.units_of import quantity_unit
from registry.keeping.writing import Kept, Writer, refuse_future
from registry.records.canonical import canonical_text
from registry.records.descriptions import Requirement, check_name
from registry.records.units import to_si
from registry.records.values import normal_text

__all__ = ["STANDINGS", "add_criteria", "judge", "keep_standing"]

# Worst first: of judgements that did not see each other the worst counts.
STANDINGS = ("poor", "usable", "good")


def add_criteria(
    registry: Registry, name: str, requirements: Sequence[Requirement], *, at: int | None = None
) -> Kept:
    """Record criteria; a newer list of the same name supersedes the older.

    Limits are converted to the quantities' units.

    Raises:
        InputError: no requirement, an unknown quantity, a unit that does not fit.
    """
    with registry.writing() as writer:
        name = check_name(name, "criteria name")
        if not requirements:
            raise InputError(
                "there is no requirement", where=name, remedy="write at least one [[require]] table"
            )
        content = [_in_unit(writer, requirement).content() for requirement in requirements]
        seen = heads(writer.connection, "criteria", "x.name = :name", {"name": name})
        same = [no for no in seen if _requirements(writer, no) == canonical_text(content)]
        if same:
            return Kept(same[-1], bytes.fromhex(writer.digest_hex(same[-1])), new=False)
        moment = writer.entered if at is None else at
        refuse_future(moment, writer.entered, name)
        return writer.keep("criteria", links={"after": seen}, name=name, requirements=content, at=moment)


def judge(
    registry: Registry,
    tuning: str,
    standing: str,
    *,
    why: str,
    purpose: str | None = None,
    sites: Sequence[str] = (),
    at: int | None = None,
) -> Kept:
    """Record a person's judgement on a state.

    It supersedes earlier judgements on the same state for the same purpose and sites; a
    judgement entered elsewhere that neither saw stays beside it as a conflict.

    Raises:
        InputError: unknown standing or site, no reason, a time before the state.
    """
    with registry.writing() as writer:
        found = find_tuning(writer.connection, tuning)
        reason = normal_text(why, "--why").strip()
        if not reason:
            raise InputError("there is no reason", where="--why", remedy="say why the state is judged so")
        return keep_standing(writer, found, standing, why=reason, purpose=purpose, sites=sites, at=at)


def keep_standing(
    writer: Writer,
    tuning: Found,
    standing: str,
    *,
    why: str | None = None,
    purpose: str | None = None,
    sites: Sequence[str] = (),
    criteria: int | None = None,
    evidence: Sequence[int] = (),
    at: int | None = None,
) -> Kept:
    """Record a judgement inside a transaction, with its criteria and evidence if it has any."""
    if standing not in STANDINGS:
        raise InputError(
            f"the standing {standing!r} is unknown", where="judge", remedy="write good, usable or poor"
        )
    connection = writer.connection
    state = connection.execute(
        text("SELECT device_no, gate_sheet_no, moment FROM tuning WHERE no = :no"), {"no": tuning.no}
    ).one()
    sheet = sheet_of(connection, state.gate_sheet_no)
    for site in sites:
        sheet.require_site(site, device_name(connection, state.device_no))
    moment = writer.entered if at is None else at
    refuse_future(moment, writer.entered, "judge")
    if moment < state.moment:
        raise InputError(
            "the judgement lies before the state it judges", where="--at", remedy="give a later time"
        )
    listed = sorted(set(sites)) or None
    links = {"tuning": tuning.no, "criteria": criteria, "evidence": sorted(set(evidence))}
    again = writer.same_act(
        "standing", links, at=moment, standing=standing, why=why, purpose=purpose, sites=listed
    )
    if again is not None:
        return again
    same_scope = (
        "x.tuning_no = :tuning AND coalesce(x.purpose, '') = :purpose AND coalesce(x.sites, '') = :sites"
    )
    seen = heads(
        connection,
        "standing",
        same_scope,
        {"tuning": tuning.no, "purpose": purpose or "", "sites": canonical_text(listed) if listed else ""},
    )
    return writer.keep(
        "standing",
        links=links | {"after": seen, "device": state.device_no},
        standing=standing,
        why=why,
        purpose=purpose,
        sites=listed,
        at=moment,
        tuning_moment=state.moment,
    )


def _in_unit(writer: Writer, requirement: Requirement) -> Requirement:
    unit = quantity_unit(writer.connection, requirement.quantity)
    written = requirement.unit if requirement.unit is not None else unit
    where = f"requirement on {requirement.quantity}"

    def converted(value: float | None) -> float | None:
        if value is None:
            return None
        numbers, si_unit = to_si([value], written, where=where)
        if si_unit != unit:
            raise InputError(f"the unit {written!r} does not fit", where=where, remedy=f"give it in {unit}")
        return float(numbers[0])

    return replace(
        requirement,
        at_most=converted(requirement.at_most),
        at_least=converted(requirement.at_least),
        unit=unit,
    )


def _requirements(writer: Writer, no: int) -> str:
    sql = text("SELECT requirements FROM criteria WHERE no = :no")
    return str(writer.connection.execute(sql, {"no": no}).scalar_one())
