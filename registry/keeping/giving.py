"""What ``NAME=VALUE[±U]`` or ``NAME=PARAMETER-ID`` gives to a method."""

from __future__ import annotations

import hashlib
import json
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.naming import SHORTEST_TYPED, find_record, withdrawn
from registry.physics.catalogue import GivenFact, MethodFacts, given_fact
from registry.physics.result import Given
from registry.records.canonical import canonical_text
from registry.records.values import normal_float

__all__ = ["GivenInput", "parse_given", "parse_typed", "shared_parts"]

_PLUS_MINUS = re.compile(r"±|\+-|\+/-")
_ID = re.compile(rf"[0-9a-fA-F]{{{SHORTEST_TYPED},64}}")


@dataclass(frozen=True)
class GivenInput:
    """One given value and where it came from.

    Attributes:
        given: what the method gets.
        parameter: key and full id of the parameter it is, None where it was typed.
    """

    given: Given
    parameter: tuple[int, str] | None = None

    def setting(self) -> object:
        """How it stands among the settings of the analysis."""
        if self.parameter is not None:
            return {"parameter": self.parameter[1]}
        if isinstance(self.given.value, str):
            return self.given.value
        return {"value": self.given.value, "standard_uncertainty": self.given.standard_uncertainty}


def parse_typed(facts: MethodFacts, typed: Mapping[str, str]) -> dict[str, GivenInput]:
    """Given values where no registry is at hand: numbers and words only.

    Raises:
        InputError: not a number, a negative uncertainty, or the id of a parameter.
    """
    return {name: _typed(facts, name, value) for name, value in typed.items()}


def parse_given(
    connection: Connection, facts: MethodFacts, typed: Mapping[str, str], device: str
) -> dict[str, GivenInput]:
    """Given values with parameters of the registry among them.

    Args:
        connection: open for reading.
        facts: of the method; typed: name -> text.
        device: full id; a typed number is shared by all analyses of one device.

    Raises:
        InputError: no number and no parameter, a withdrawn one, one without a value, or
            one in another unit than the method wants.
    """
    found = {}
    for name, value in typed.items():
        fact = given_fact(facts, name)
        if fact is not None and fact.unit and not _is_number(value) and _ID.fullmatch(value.strip()):
            found[name] = _parameter(connection, fact, value.strip())
        else:
            found[name] = _typed(facts, name, value, device)
    return found


def shared_parts(shared: Mapping[str, float], inputs: Mapping[str, GivenInput]) -> dict[str, float]:
    """Signed uncertainty by source digest, from signed uncertainty by given name.

    A given that is itself made of parts hands each on in proportion (the propagation is
    linear), so that two results are seen to share a part wherever it came in.
    """
    parts: dict[str, float] = {}
    for name, signed in shared.items():
        given = inputs[name].given
        whole = given.standard_uncertainty
        if whole <= 0 or signed == 0:
            continue
        for source, part in given.components.items():
            parts[source] = parts.get(source, 0.0) + signed * part / whole
    return parts


def _typed(facts: MethodFacts, name: str, value: str, device: str = "") -> GivenInput:
    where = f"--given {name}={value}"
    fact = given_fact(facts, name)
    if fact is None or not fact.unit:
        return GivenInput(Given(value.strip()))
    number, *uncertainty = [part.strip() for part in _PLUS_MINUS.split(value)]
    if len(uncertainty) > 1 or not _is_number(number) or not all(map(_is_number, uncertainty)):
        remedy = f"write a number in {fact.unit}, as in {name}=0.1 or {name}=0.1±0.008"
        if _ID.fullmatch(number):
            remedy += "; the id of a parameter is understood by 'derive', not by 'fit'"
        raise InputError(f"{value!r} is not a number", where=where, remedy=remedy)
    mean = normal_float(float(number), where)
    spread = normal_float(float(uncertainty[0]), where) if uncertainty else 0.0
    if spread < 0:
        raise InputError("the uncertainty is negative", where=where, remedy="give one standard deviation")
    components = {}
    if spread > 0:
        source = canonical_text(
            {"given": name, "value": mean, "standard_uncertainty": spread, "device": device}
        )
        components[hashlib.sha256(source.encode()).hexdigest()] = spread
    return GivenInput(Given(mean, spread, components))


def _parameter(connection: Connection, fact: GivenFact, typed: str) -> GivenInput:
    where = f"--given {fact.name}={typed}"
    found = find_record(connection, typed, ("parameter",))
    row = connection.execute(
        text(
            "SELECT quantity, unit, value, standard_uncertainty, bound, shared FROM parameter WHERE no = :no"
        ),
        {"no": found.no},
    ).one()
    if withdrawn(connection, found.no):
        raise InputError("the parameter is withdrawn", where=where, remedy="give another one")
    if row.value is None or row.bound is not None:
        raise InputError("the parameter has no value", where=where, remedy="give another one, or a number")
    if row.unit != fact.unit:
        raise InputError(
            f"the parameter is a {row.quantity} in {row.unit}", where=where, remedy=f"give one in {fact.unit}"
        )
    spread = float(row.standard_uncertainty or 0.0)
    components: dict[str, float] = json.loads(row.shared) if row.shared else {}
    own = spread**2 - sum(part**2 for part in components.values())
    if own > 0:
        components = {**components, found.hex: math.sqrt(own)}
    return GivenInput(Given(float(row.value), spread, components), (found.no, found.hex))


def _is_number(value: str) -> bool:
    try:
        return math.isfinite(float(value))
    except ValueError:
        return False
