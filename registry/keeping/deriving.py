"""How a measurement becomes parameters: read, run a method, keep what it says."""

from __future__ import annotations

import hashlib
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from sqlalchemy import Connection, text

from registry.errors import InputError
from registry.keeping.behind_dividers import run_at_gates
from registry.keeping.giving import GivenInput, parse_given, parse_typed, shared_parts
from registry.keeping.handle import Registry
from registry.keeping.naming import Found, device_name, find_record, withdrawn
from registry.keeping.sheets_in_force import sheet_of
from registry.keeping.wirings import DeviceWiring, wiring_of
from registry.keeping.writing import Kept, Writer
from registry.physics.methods import Method, method
from registry.physics.result import Quantity, Result
from registry.reading.entry import read_file
from registry.reading.layout import load_layout, parse_layout
from registry.records.canonical import canonical_text
from registry.records.values import normal_json
from registry.samples import Samples

if TYPE_CHECKING:
    from sqlalchemy import Row

__all__ = ["Derived", "derive", "derive_samples", "fit_file"]


@dataclass(frozen=True)
class Derived:
    """An analysis in the registry.

    Attributes:
        kept: the analysis; measurement: full id of what it was made from.
        result: what the method said.
        parameters: one record for each of ``result.quantities``, in that order.
    """

    kept: Kept
    measurement: str
    result: Result
    parameters: tuple[Kept, ...]


def fit_file(
    name: str,
    path: str | os.PathLike[str],
    *,
    layout: str | os.PathLike[str] | None = None,
    given: Mapping[str, str] | None = None,
) -> Result:
    """Run a method on a bare file; needs no registry and records nothing.

    Raises:
        InputError: unknown method, a file that cannot be read, or wrong given values.
    """
    chosen = method(name)
    samples = read_file(Path(path), load_layout(Path(layout)) if layout is not None else None)
    inputs = parse_typed(chosen.facts, _asked(samples, name) | dict(given or {}))
    return chosen.run(samples, {key: value.given for key, value in inputs.items()})


def derive(
    registry: Registry,
    name: str,
    measurements: Sequence[str],
    *,
    given: Mapping[str, str] | None = None,
    subject: str | None = None,
) -> list[Derived]:
    """Run a method on measurements of the registry and keep what it says.

    Args:
        registry: open for writing.
        name: method; measurements: ids; each is analysed for itself.
        given: name -> ``0.1±0.008``, a word, or the id of a parameter.
        subject: site or gate that the summary values are about.

    Returns:
        One answer a measurement.  A refused fit is an answer too: its quantities are kept
        without a value and with the reason.

    Raises:
        InputError: unknown method, wrong given values, an unknown subject, a withdrawn
            measurement.
        DamageError: the stored file is not what was admitted.
    """
    answers = []
    for typed in measurements:
        with registry.reading() as connection:
            found = find_record(connection, typed, ("measurement",))
        samples = stored_samples(registry, found.no)
        answers.append(derive_samples(registry, name, found, samples, given=given, subject=subject))
    return answers


def derive_samples(
    registry: Registry,
    name: str,
    measurement: Found,
    samples: Samples,
    *,
    given: Mapping[str, str] | None = None,
    subject: str | None = None,
) -> Derived:
    """``derive`` for a measurement whose file has just been read."""
    chosen = method(name)
    with registry.reading() as connection:
        context = _context(connection, measurement)
        if subject is not None:
            _check_subject(connection, context, subject)
        typed = _asked(samples, name) | dict(given or {})
        inputs = parse_given(connection, chosen.facts, typed, context.device_hex)
        wiring = wiring_of(connection, context.device_no, context.cooldown_no, context.moment)
    given_values = {key: value.given for key, value in inputs.items()}
    result, dividers = run_at_gates(chosen, samples, given_values, wiring)
    if subject is not None:
        result = replace(
            result, quantities=tuple(_about(quantity, subject) for quantity in result.quantities)
        )
    with registry.writing() as writer:
        kept = _keep_analysis(writer, chosen, result, measurement, inputs, subject)
        named = {_divider_source(writer, wiring, part.line): part.parts for part in dividers}
        parameters = _keep_parameters(writer, kept, result, context, inputs, named)
    return Derived(kept, measurement.hex, result, parameters)


def stored_samples(registry: Registry, measurement_no: int) -> Samples:
    """The samples of a measurement, read again from the file store.

    Raises:
        DamageError: a stored file is missing or is not what was admitted.
    """
    with registry.reading() as connection:
        row = connection.execute(
            text(
                """SELECT m.file_name, f.sha256, l.sha256 AS layout FROM measurement m
                JOIN raw_file f ON f.no = m.raw_file_no LEFT JOIN raw_file l ON l.no = m.layout_no
                WHERE m.no = :no"""
            ),
            {"no": measurement_no},
        ).one()
    layout = None
    if row.layout is not None:
        registry.files.verify(row.layout)
        layout = parse_layout(registry.files.open_path(row.layout).read_bytes(), "stored layout")
    registry.files.verify(row.sha256)
    return read_file(registry.files.open_path(row.sha256), layout, shown_as=row.file_name)


# --- running -----------------------------------------------------------------------------


def _asked(samples: Samples, name: str) -> dict[str, str]:
    """Given values that the file's layout brings for this method."""
    asked = samples.derive
    if not asked or asked.get("method") != name:
        return {}
    return {key: str(value) for key, value in (asked.get("given") or {}).items()}


def _about(quantity: Quantity, subject: str) -> Quantity:
    return replace(quantity, subject=subject) if quantity.subject is None else quantity


# --- keeping -----------------------------------------------------------------------------


@dataclass(frozen=True)
class _Context:
    device_no: int
    device_hex: str
    cooldown_no: int
    tuning_no: int
    gate_sheet_no: int
    at: int | None
    moment: int


def _context(connection: Connection, measurement: Found) -> _Context:
    if withdrawn(connection, measurement.no):
        raise InputError(
            "the measurement is withdrawn, or hangs on a record that is",
            where=measurement.hex[:10],
            remedy="'millikeep lineage' shows why; admit the right file and derive from that",
        )
    row: Row[Any] = connection.execute(
        text(
            """SELECT t.device_no, r.digest, t.cooldown_no, t.no AS tuning_no, t.gate_sheet_no, m.at, m.moment
            FROM measurement m JOIN tuning t ON t.no = m.tuning_no JOIN record r ON r.no = t.device_no
            WHERE m.no = :no"""
        ),
        {"no": measurement.no},
    ).one()
    return _Context(
        row.device_no,
        bytes(row.digest).hex(),
        row.cooldown_no,
        row.tuning_no,
        row.gate_sheet_no,
        row.at,
        row.moment,
    )


def _check_subject(connection: Connection, context: _Context, subject: str) -> None:
    sheet = sheet_of(connection, context.gate_sheet_no)
    if subject not in sheet.names:
        sheet.require_site(subject, device_name(connection, context.device_no))


def _keep_analysis(
    writer: Writer,
    chosen: Method,
    result: Result,
    measurement: Found,
    inputs: Mapping[str, GivenInput],
    subject: str | None,
) -> Kept:
    settings: dict[str, object] = dict(result.settings)
    if inputs:
        settings["given"] = {name: value.setting() for name, value in inputs.items()}
    used = sorted({value.parameter[0] for value in inputs.values() if value.parameter is not None})
    return writer.keep(
        "analysis",
        links={"measurements": [measurement.no], "inputs": used},
        beside={"with": _library_versions()},
        method=result.method,
        version=result.version,
        source_digest=result.source_digest,
        settings=settings,
        subject=subject,
        refused=result.refused,
        warnings=list(result.warnings) or None,
    )


def _divider_source(writer: Writer, wiring: DeviceWiring, line: str) -> str:
    """One name for one line of one wiring: all volts behind it share its divider."""
    assert wiring.no is not None
    return hashlib.sha256(f"{writer.digest_hex(wiring.no)}:{line}".encode()).hexdigest()


def _keep_parameters(
    writer: Writer,
    analysis: Kept,
    result: Result,
    context: _Context,
    inputs: Mapping[str, GivenInput],
    dividers: Mapping[str, Mapping[int, float]],
) -> tuple[Kept, ...]:
    present = {} if analysis.new else _present(writer, analysis.no)
    kept = []
    for place, quantity in enumerate(result.quantities):
        # The same analysis, run on another computer, differs in its last digits: its
        # values are the ones on record.
        again = present.get(_slot(quantity.quantity, quantity.subject, quantity.conditions))
        if again is not None:
            kept.append(again)
            continue
        shared = shared_parts(quantity.shared, inputs)
        spread = quantity.standard_uncertainty
        for source, parts in dividers.items():
            if place in parts and spread is not None:
                shared[source] = parts[place]
                spread = math.hypot(spread, parts[place])
        kept.append(
            writer.keep(
                "parameter",
                links={
                    "analysis": analysis.no,
                    "device": context.device_no,
                    "cooldown": context.cooldown_no,
                    "tuning": context.tuning_no,
                },
                quantity=quantity.quantity,
                subject=quantity.subject,
                value=quantity.value,
                standard_uncertainty=spread,
                unit=quantity.unit,
                degrees_of_freedom=quantity.degrees_of_freedom,
                bound=quantity.bound,
                why=quantity.why,
                conditions=dict(quantity.conditions) or None,
                shared=shared or None,
                at=context.at,
                moment=context.moment,
            )
        )
    return tuple(kept)


def _present(writer: Writer, analysis_no: int) -> dict[tuple[str, str, str], Kept]:
    rows = writer.connection.execute(
        text(
            "SELECT no, digest, quantity, subject, conditions FROM parameter "
            "WHERE analysis_no = :no ORDER BY no"
        ),
        {"no": analysis_no},
    )
    return {
        (row.quantity, row.subject or "", row.conditions or "{}"): Kept(row.no, bytes(row.digest), new=False)
        for row in rows
    }


def _slot(quantity: str, subject: str | None, conditions: Mapping[str, str | float]) -> tuple[str, str, str]:
    return quantity, subject or "", canonical_text(normal_json(dict(conditions), "conditions"))


def _library_versions() -> str:
    import numpy as np
    import scipy

    return f"numpy {np.__version__}, scipy {scipy.__version__}"
