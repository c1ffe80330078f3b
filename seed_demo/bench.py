"""How a planned file is measured on the simulated bench.

Joins plan, device, wiring, instruments and noise; knows no file format.
"""

from __future__ import annotations

import numpy as np

from seed_demo import calendar
from seed_demo.ageing import rng_for
from seed_demo.files import Moment
from seed_demo.instruments import Trace, coulomb_peaks, dot_transition, leakage_trace, pinch_off, up_and_down
from seed_demo.noise import Noise
from seed_demo.sessions import PlannedFile
from seed_demo.wiring import line_of
from seed_demo.year import Year, wiring_at

__all__ = ["measure", "moment_of"]

# Signals and noise in A; bias in V.  Common practice, no source.
_PEAK_HEIGHT = 4.0e-10
_BIAS = {"pinch-off": 1.0e-4, "coulomb-peaks": 1.0e-5, "dot-transition": 1.0e-5, "leakage": 0.0}
_NOISE = {
    "pinch-off": Noise(3.0e-12, 2.0e-12),
    "coulomb-peaks": Noise(2.0e-12, 1.5e-12),
    "dot-transition": Noise(2.5e-12, 1.5e-12),
    "leakage": Noise(4.0e-12, 2.0e-12),
}
_MIXING_CHAMBER = {"brook-3": 0.014, "heath-7": 0.285}  # K

# The leak: beyond these volts, with this conductance; a sound gate only shows the meter's noise.
_LEAK_ONSET, _LEAK_CONDUCTANCE = 1.30, 2.0e-8


def measure(planned: PlannedFile, year: Year) -> Trace:
    """Simulate the trace of a planned file; the same plan gives the same trace."""
    rng = rng_for(year.seed, "noise", planned.path)
    noise = _NOISE[planned.kind]
    device, volts, shifts = planned.device, planned.volts, planned.shifts
    line = line_of(wiring_at(device, planned.at), device, planned.gate)
    if planned.both_ways:
        wanted = up_and_down(planned.low, planned.high, planned.count)
    else:
        wanted = np.linspace(planned.low, planned.high, planned.count)
    sweep = line.settled(wanted)
    if planned.kind == "pinch-off":
        bias = _BIAS["pinch-off"]
        return pinch_off(device, planned.gate, sweep, shifts, bias=bias, noise=noise, rng=rng)
    if planned.kind == "leakage":
        leaks = planned.at >= calendar.LEAK_SEEN
        conductance = _LEAK_CONDUCTANCE if leaks else 0.0
        return leakage_trace(planned.gate, sweep, _LEAK_ONSET, conductance, noise=noise, rng=rng)
    if planned.kind == "coulomb-peaks":
        return coulomb_peaks(
            device, planned.subject, sweep, volts, shifts, height=_PEAK_HEIGHT, noise=noise, rng=rng
        )
    if planned.sensor is None:
        raise ValueError(f"{planned.path}: a transition needs a sensor")
    return dot_transition(
        device,
        planned.subject,
        planned.sensor,
        device.site(planned.subject).charges,
        sweep,
        volts,
        shifts,
        height=_PEAK_HEIGHT,
        noise=noise,
        rng=rng,
    )


def moment_of(planned: PlannedFile) -> Moment:
    """What surrounds the trace: volts, settings and lines at that time."""
    device = planned.device
    wiring = wiring_at(device, planned.at)
    return Moment(
        device=device.path,
        cooldown=planned.cooldown,
        at=planned.at,
        volts=planned.volts,
        settings={
            "bias": (_BIAS[planned.kind], "V"),
            "temperature": (_MIXING_CHAMBER[device.chip], "K"),
            "magnetic_field": (0.0, "T"),
        },
        lines={gate.name: line_of(wiring, device, gate.name) for gate in device.gates},
    )
