"""Is this a series of evenly spaced samples, and what is their interval?"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from registry.errors import InputError
from registry.physics.result import Given, Refusal
from registry.physics.sweeps import pick_signal
from registry.samples import FloatArray, Samples

__all__ = ["TimeSeries", "pick_time_series"]

#: A sample may be off its even place by this share of the interval ...
JITTER_ALLOWED = 0.5
#: ... and is worth a warning from here on.
JITTER_WARNED = 0.1
#: Share of single lost samples that may be bridged by their neighbours.
MISSING_ALLOWED = 0.002


@dataclass(frozen=True, eq=False)
class TimeSeries:
    """Evenly spaced samples.

    Attributes:
        y: shape (n,), finite, in order of time.
        interval: between samples, s.
        signal, unit: name and unit of ``y``.
        warnings: plain sentences.
    """

    y: FloatArray
    interval: float
    signal: str
    unit: str
    warnings: tuple[str, ...] = ()


def pick_time_series(samples: Samples, given: Mapping[str, Given]) -> TimeSeries:
    """Return the signal against time.

    Raises:
        InputError: not one axis of time in s, or no such signal.
        Refusal: uneven spacing, time running backwards, too many lost samples.
    """
    if len(samples.axes) != 1 or samples.axes[0].unit != "s":
        units = ", ".join(f"{axis.name} [{axis.unit}]" for axis in samples.axes)
        raise InputError(
            f"a series against time in s is wanted, the axes are {units}",
            where="samples",
            remedy="put a column of times first, or give its unit in a layout file",
        )
    one = pick_signal(samples, given)
    t, y = samples.axes[0].values, np.asarray(one.values, dtype=float)
    if t.size < 3 or not np.all(np.isfinite(t)):
        raise Refusal("the times are too few or not all there")
    if np.any(np.isinf(y)):
        raise Refusal("the series holds infinite samples: an instrument was overloaded")
    if np.any(np.diff(t) <= 0.0):
        raise Refusal("time does not always run forwards: join no runs into one series")
    interval = float((t[-1] - t[0]) / (t.size - 1))
    off = float(np.max(np.abs(t - t[0] - interval * np.arange(t.size)))) / interval
    if off > JITTER_ALLOWED:
        raise Refusal(f"the samples are not evenly spaced: one is {off:.2g} intervals off its place")
    warnings = [f"times are up to {off:.0%} of an interval uneven"] if off > JITTER_WARNED else []
    lost = ~np.isfinite(y)
    if np.any(lost):
        if np.mean(lost) > MISSING_ALLOWED or np.any(lost[1:] & lost[:-1]):
            raise Refusal(f"{int(np.sum(lost))} of {y.size} samples are missing")
        y = y.copy()
        y[lost] = np.interp(np.flatnonzero(lost), np.flatnonzero(~lost), y[~lost])
        warnings.append(f"{int(np.sum(lost))} single missing samples were bridged")
    return TimeSeries(y, interval, one.name, one.unit, tuple(warnings))
