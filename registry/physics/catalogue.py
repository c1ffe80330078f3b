"""Which methods are there, what may be given to them, what do they return?

Plain facts, cheap to import: a listing of methods loads no numerical library.  The
running lives in ``methods``; each method's module takes its own entry from here.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from registry.errors import InputError

if TYPE_CHECKING:  # result.py brings numpy, which a listing does not need
    from registry.physics.result import Given

__all__ = ["FACTS", "GivenFact", "MethodFacts", "check_given", "facts", "given_fact", "number", "word"]


@dataclass(frozen=True)
class GivenFact:
    """One thing that may be given to a method.

    Attributes:
        name: as typed before the ``=``.
        unit: SI unit of the number; empty for a word.
        meaning: one plain sentence, the default included.
        words: the words allowed; empty with an empty unit means any word.
        above: the number must be greater than this (``unit``); None: any sign.
        at_most: the number must not exceed this (``unit``); None: no limit.
    """

    name: str
    unit: str
    meaning: str
    words: tuple[str, ...] = ()
    above: float | None = None
    at_most: float | None = None


@dataclass(frozen=True)
class MethodFacts:
    """What is known of a method without running it.

    Attributes:
        name, version, title: for people and for the identity of an analysis.
        main_quantity: without a value of this one the method has refused.
        quantities: name of each quantity it returns -> unit.
        givens: what may be given.
        module: the module in ``registry.physics`` whose ``run`` does the work.
        sources: all modules there whose source makes the numbers, ``module`` included.
    """

    name: str
    version: str
    title: str
    main_quantity: str
    quantities: Mapping[str, str]
    givens: tuple[GivenFact, ...]
    module: str
    sources: tuple[str, ...]


_SIGNAL = GivenFact("signal", "", "name of the signal to use; the first one if not given")
_DIRECTION = GivenFact(
    "direction", "", "sweeps to use; those of the first sweep's direction if not given", words=("up", "down")
)
_LEVER_ARM = GivenFact(
    "lever_arm", "eV/V", "pull of the swept gate on the dot, positive for holes too", above=0.0, at_most=1.0
)
_TEMPERATURE = GivenFact(
    "electron_temperature", "K", "temperature of the leads' electrons; gives the lever arm", above=0.0
)
_LEVER_ARM_OF_AXIS = GivenFact(
    "lever_arm_<axis>",
    "eV/V",
    "pull of the axis's gate on its own dot, the other gate held; positive for holes too",
    above=0.0,
    at_most=1.0,
)
_MODELS = ("single-level", "multi-level", "lifetime", "auto")
# Not the list of methods: another method added there changes no number of this one.
_SHARED_SOURCES = ("noise", "sweeps")

_ALL = (
    MethodFacts(
        name="pinch-off",
        version="1",
        title="Turn-on of a gate: threshold, pinch-off, transconductance, hysteresis",
        main_quantity="threshold_voltage",
        quantities={
            "threshold_voltage": "V",
            "pinch_off_voltage": "V",
            "max_transconductance": "S",
            "subthreshold_swing": "V",
            "on_off_ratio": "1",
            "hysteresis_voltage": "V",
        },
        givens=(
            _SIGNAL,
            _DIRECTION,
            GivenFact("level", "S", "conductance that defines pinch_off_voltage", above=0.0),
            GivenFact("bias", "V", "drain-source bias a current was measured at"),
        ),
        module="pinch_off",
        sources=(
            *_SHARED_SOURCES,
            "pinch_off",
            "psplines",
            "subthreshold",
            "trace_steps",
            "turn_on",
            "turn_on_place",
            "turn_on_quantities",
        ),
    ),
    MethodFacts(
        name="coulomb-diamonds",
        version="1",
        title="Coulomb diamonds over gate and bias: lever arm, charging energy, capacitances",
        main_quantity="lever_arm",
        quantities={
            "lever_arm": "eV/V",
            "peak_position": "V",
            "addition_voltage": "V",
            "addition_energy": "eV",
            "charging_energy": "eV",
            "gate_capacitance": "F",
            "source_capacitance": "F",
            "drain_capacitance": "F",
            "total_capacitance": "F",
        },
        givens=(
            _SIGNAL,
            _DIRECTION,
            GivenFact("bias_axis", "", "name of the bias axis; the one that begins with bias if not given"),
            GivenFact(
                "bias_at",
                "",
                "where the bias is applied; source (drain grounded) if not given, both means +-half",
                words=("source", "drain", "both"),
            ),
            GivenFact("bias_scale", "1", "true bias per volt of the bias axis; 1 if not given", above=0.0),
            GivenFact(
                "electrons",
                "",
                "few: charging energy from the smallest diamond, with a warning; many if not given",
                words=("few", "many"),
            ),
            GivenFact(
                "edge",
                "",
                "what an edge is: step of a current, peak of a conductance; auto if not given",
                words=("step", "peak", "auto"),
            ),
        ),
        module="coulomb_diamonds",
        sources=(
            "coulomb_diamonds",
            "diamond_edges",
            "diamond_fit",
            "diamond_lines",
            "diamond_map",
            "diamond_quantities",
            "sweeps",
        ),
    ),
    MethodFacts(
        name="coulomb-peaks",
        version="1",
        title="Coulomb peaks against a gate: positions, widths, spacing, temperature",
        main_quantity="peak_position",
        quantities={
            "peak_position": "V",
            "peak_width": "V",
            "addition_voltage": "V",
            "addition_energy": "eV",
            "electron_temperature": "K",
            "lever_arm": "eV/V",
        },
        givens=(
            _SIGNAL,
            _DIRECTION,
            GivenFact("model", "", "line shape; auto (the best one) if not given", words=_MODELS),
            _LEVER_ARM,
            _TEMPERATURE,
        ),
        module="coulomb_peaks",
        sources=(
            *_SHARED_SOURCES,
            "coulomb_peaks",
            "lineshapes",
            "peak_finding",
            "peak_fits",
            "peak_judgement",
            "peak_quantities",
            "peak_windows",
            "screening",
            "thermal_width",
            "window_noise",
        ),
    ),
    MethodFacts(
        name="dot-transition",
        version="1",
        title="Dot-lead transition seen by a charge sensor: position, step, temperature",
        main_quantity="transition_voltage",
        quantities={
            "transition_voltage": "V",
            "sensor_step": "A",
            "electron_temperature": "K",
            "lever_arm": "eV/V",
        },
        givens=(_SIGNAL, _DIRECTION, _LEVER_ARM, _TEMPERATURE),
        module="dot_transition",
        sources=(*_SHARED_SOURCES, "dot_transition", "lineshapes", "screening", "step_fit", "thermal_width"),
    ),
    MethodFacts(
        name="interdot-transition",
        version="1",
        title="Interdot transition seen by a charge sensor: position, step, tunnel coupling",
        main_quantity="transition_voltage",
        quantities={
            "transition_voltage": "V",
            "sensor_step": "A",
            "tunnel_coupling": "eV",
            "electron_temperature": "K",
            "lever_arm": "eV/V",
        },
        givens=(
            _SIGNAL,
            _DIRECTION,
            GivenFact(
                "lever_arm",
                "eV/V",
                "differential lever arm along the sweep, positive",
                above=0.0,
                at_most=1.0,
            ),
            GivenFact(
                "electron_temperature",
                "K",
                "temperature of the electrons; with the lever arm it tells the thermal width",
                above=0.0,
            ),
        ),
        module="interdot_transition",
        sources=(
            *_SHARED_SOURCES,
            "interdot_fit",
            "interdot_judgement",
            "interdot_quantities",
            "interdot_shape",
            "interdot_transition",
            "lineshapes",
            "screening",
            "step_fit",
        ),
    ),
    MethodFacts(
        name="noise-spectrum",
        version="1",
        title="Charge noise from a series in time: amplitude at 1 Hz, exponent, switching, lines",
        main_quantity="charge_noise_amplitude",
        quantities={"charge_noise_amplitude": "eV/√Hz", "noise_exponent": "1"},
        givens=(
            _SIGNAL,
            GivenFact("lever_arm", "eV/V", "pull of the gate on the dot, positive", above=0.0, at_most=1.0),
            GivenFact("sensor_sensitivity", "S", "slope dI/dV of the signal, of either sign"),
            GivenFact(
                "volts", "", "gate if a signal in V is volts at the gate (a tracked peak)", words=("gate",)
            ),
            GivenFact("segment", "s", "length of a segment; an eighth of the series if not given", above=0.0),
            GivenFact("lowest_frequency", "Hz", "frequencies below are not used", above=0.0),
            GivenFact("highest_frequency", "Hz", "frequencies above (a filter's) are not used", above=0.0),
        ),
        module="noise_spectrum",
        sources=("noise_spectrum", "screening", "spectrum_fit", "sweeps", "time_series", "welch"),
    ),
    MethodFacts(
        name="thermometry",
        version="1",
        title="Widths or temperatures against the refrigerator's: base temperature, lever arm",
        main_quantity="base_electron_temperature",
        quantities={"base_electron_temperature": "K", "lever_arm": "eV/V"},
        givens=(
            _SIGNAL,
            GivenFact(
                "width",
                "",
                "which width a signal in V is: k_B T, full width of a peak, or 10-90 % of a step",
                words=("thermal", "single-level", "multi-level", "ten-ninety"),
            ),
            _LEVER_ARM,
        ),
        module="thermometry",
        sources=("lineshapes", "points", "sweeps", "thermal_series", "thermometry"),
    ),
    MethodFacts(
        name="leakage",
        version="1",
        title="Leak of a gate: largest current, resistance, onset",
        main_quantity="leakage_current",
        quantities={"leakage_current": "A"},
        givens=(
            _SIGNAL,
            _DIRECTION,
            GivenFact("offset", "A", "current at zero volts; from the sweep if not given"),
            GivenFact("level", "A", "leak that marks the onset; 0.1 nA if not given", above=0.0),
        ),
        module="leakage",
        sources=(*_SHARED_SOURCES, "leak_fit", "leakage", "screening"),
    ),
    MethodFacts(
        name="cross-talk",
        version="1",
        title="Positions against another gate's volts: ratio of lever arms",
        main_quantity="cross_capacitance_ratio",
        quantities={"cross_capacitance_ratio": "1"},
        givens=(
            GivenFact("signal", "", "name of the signal to use; all of them if not given"),
            GivenFact("gate", "", "own gate of the dot; the signal's name if not given"),
            GivenFact("against", "", "the other gate; the axis' name if not given"),
        ),
        module="cross_talk",
        sources=(*_SHARED_SOURCES, "cross_line", "cross_matrix", "cross_talk", "points"),
    ),
    MethodFacts(
        name="sensor-response",
        version="1",
        title="Charge sensor against its gate: operating point, sensitivity, step, signal-to-noise",
        main_quantity="sensor_sensitivity",
        quantities={"sensor_sensitivity": "S", "sensor_step": "A", "sensor_snr": "1"},
        givens=(
            _SIGNAL,
            _DIRECTION,
            GivenFact(
                "flank", "", "side to sit on; the steeper one if not given", words=("rising", "falling")
            ),
            GivenFact("operating_point", "V", "gate volts to sit at; the steepest place if not given"),
            GivenFact(
                "shift", "V", "how far one charge moves the curve along the swept gate; gives the step"
            ),
            GivenFact("integration_time", "s", "of one reading, for sensor_snr", above=0.0),
            GivenFact("sample_time", "s", "of one sample of the sweep, for sensor_snr", above=0.0),
            GivenFact("bias", "V", "drain-source bias; turns a conductance into a current"),
        ),
        module="sensor_response",
        sources=(
            *_SHARED_SOURCES,
            "psplines",
            "screening",
            "sensor_response",
            "sensor_slope",
            "trace_steps",
        ),
    ),
    MethodFacts(
        name="stability-map",
        version="1",
        title="Map of a double dot: line slopes, addition voltages, interdot charging energy",
        main_quantity="cross_capacitance_ratio",
        quantities={
            "cross_capacitance_ratio": "1",
            "addition_voltage": "V",
            "addition_energy": "eV",
            "interdot_charging_energy": "eV",
            "mutual_capacitance": "F",
        },
        givens=(
            _SIGNAL,
            GivenFact(
                "lines",
                "",
                "what a line is: steps of a charge sensor (if not given) or ridges of a current",
                words=("steps", "ridges"),
            ),
            _LEVER_ARM_OF_AXIS,
        ),
        module="stability_map",
        sources=(
            "double_dot",
            "gate_map",
            "honeycomb",
            "line_drift",
            "line_finding",
            "line_places",
            "screening",
            "stability_map",
            "sweeps",
        ),
    ),
)

#: Every method by name.
FACTS: Mapping[str, MethodFacts] = {entry.name: entry for entry in _ALL}


def facts(name: str) -> MethodFacts:
    """Return the entry of the method called ``name``.

    Raises:
        InputError: there is no such method; the known ones are named.
    """
    try:
        return FACTS[name]
    except KeyError:
        raise InputError(
            f"no method {name!r}",
            where="method",
            remedy=f"use one of: {', '.join(FACTS)}",
        ) from None


def check_given(given: Mapping[str, Given], entry: MethodFacts) -> None:
    """Hold what was given against the method's entry.

    Raises:
        InputError: naming every fault and what is allowed.
    """
    faults = []
    for name, value in given.items():
        fact = given_fact(entry, name)
        fault = f"{name} is not known here" if fact is None else _fault(fact, value)
        if fault:
            faults.append(fault)
    if faults:
        listing = "; ".join(_describe(fact) for fact in entry.givens)
        raise InputError(
            faults[0],
            where=f"given to {entry.name}",
            remedy=f"give any of: {listing}",
            faults=tuple(faults[1:]),
        )


def given_fact(entry: MethodFacts, name: str) -> GivenFact | None:
    """Return what is known of the given called ``name``, or None.

    A fact whose name ends in ``<axis>`` stands for one given an axis of the samples.
    """
    for fact in entry.givens:
        stem, placeholder, _ = fact.name.partition("<axis>")
        if name == fact.name or (placeholder and name.startswith(stem) and len(name) > len(stem)):
            return fact
    return None


def number(given: Mapping[str, Given], name: str) -> float | None:
    """Return the number given as ``name``, or None; call ``check_given`` before."""
    return float(given[name].value) if name in given else None


def word(given: Mapping[str, Given], name: str, default: str) -> str:
    """Return the word given as ``name``, or ``default``; call ``check_given`` before."""
    return str(given[name].value) if name in given else default


def _fault(fact: GivenFact, given: Given) -> str | None:
    """Say what is wrong with one given value, or None."""
    value = given.value
    if not fact.unit:
        if not isinstance(value, str):
            return f"{fact.name}={value!r} is a number, a word is wanted"
        if fact.words and value not in fact.words:
            return f"{fact.name}={value!r} is not one of {', '.join(fact.words)}"
        return None
    if isinstance(value, str) or not math.isfinite(value):
        return f"{fact.name}={value!r} is no number"
    if not (math.isfinite(given.standard_uncertainty) and given.standard_uncertainty >= 0.0):
        return f"the uncertainty of {fact.name}, {given.standard_uncertainty!r}, is no positive number"
    if fact.above is not None and not value > fact.above:
        return f"{fact.name}={value!r} must be above {fact.above:g} {fact.unit}"
    if fact.at_most is not None and value > fact.at_most:
        return f"{fact.name}={value!r} must be at most {fact.at_most:g} {fact.unit}"
    return None


def _describe(fact: GivenFact) -> str:
    """Write one given as ``name (unit: meaning)``."""
    kind = fact.unit or "|".join(fact.words) or "a word"
    return f"{fact.name} ({kind}: {fact.meaning})"
