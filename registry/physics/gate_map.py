"""Which pixels of a map over two gates does a method fit?

Brings a map into a state a fit can trust: two rising, evenly stepped voltage axes, every
pixel finite, rows in order of time or its reverse.  What cannot be brought there is
refused with the reason.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d

from registry.errors import InputError
from registry.physics.result import Given, Refusal
from registry.physics.screening import screen
from registry.physics.sweeps import pick_signal
from registry.samples import Axis, FloatArray, Samples

__all__ = ["Flags", "GateMap", "level_rows", "pick_map"]

Flags = NDArray[np.bool_]

#: A row with more of its pixels missing is left out; the rest is filled along the row.
ROW_MISSING = 0.2
#: Share of the rows that may be missing between the first and the last one.
ROWS_LOST = 0.1
#: An axis whose steps differ by more than this share is stepped anew, by interpolation, ...
EVEN_STEPS = 0.05
#: ... unless its largest step is so many times the median one.
LARGEST_STEP = 4.0
#: Share of a row that must be free of lines for its level to be told.
ROW_FREE = 0.2
#: Rows are levelled only if their changes scatter this many times more than the noise of
#: a pixel explains: levelling costs accuracy where lines run nearly along the rows.
LIFTED = 3.0
#: A change so many robust standard deviations from the usual one is a jump.
JUMP = 8.0
#: It must also be so many times the noise of a pixel's change: what lines do is less.
JUMP_PIXELS = 2.0


@dataclass(frozen=True, eq=False)
class GateMap:
    """A map over two gates, ready for a fit.

    Attributes:
        x: volts of the fast axis, rising, evenly stepped, shape (nx,).
        y: volts of the slow axis, likewise, shape (ny,).
        z: signal in its unit, finite, shape (ny, nx).
        names: of fast and slow axis.
        signal: its name.
        at_source: whether any volts are those at the source behind a divider.
        warnings: plain sentences on what was done to the pixels.
    """

    x: FloatArray
    y: FloatArray
    z: FloatArray
    names: tuple[str, str]
    signal: str
    at_source: bool = False
    warnings: tuple[str, ...] = ()

    def conditions(self) -> dict[str, str | float]:
        """Return what makes a series of its own of the quantities from this map."""
        return {"level": "source"} if self.at_source else {}


def pick_map(samples: Samples, given: Mapping[str, Given], fewest: int) -> GateMap:
    """Return the map of the wanted signal.

    Args:
        samples: a map over two gate voltages, slow axis first.
        given: ``signal`` names the signal.
        fewest: pixels along either axis that the method needs.

    Raises:
        InputError: no map over two voltages, or no such signal.
        Refusal: the pixels cannot be brought into a usable state.
    """
    slow, fast = _two_gates(samples)
    signal = pick_signal(samples, given)
    warnings: list[str] = []
    z = np.array(signal.values, dtype=float)
    if np.any(np.isinf(z)):
        raise Refusal("the map holds infinite pixels: an instrument was overloaded")
    y, z = _whole_rows(np.asarray(slow.values, dtype=float), z, warnings)
    x = np.asarray(fast.values, dtype=float)
    if min(x.size, y.size) < fewest:
        raise Refusal(f"{x.size} x {y.size} pixels are too few, {fewest} along either axis are needed")
    screen(z.ravel(), fewest * fewest)
    y, z = _rising(y, z, slow.name)
    x, turned = _rising(x, z.T, fast.name)
    y, z = _evenly(y, turned.T, slow.name, warnings)
    x, turned = _evenly(x, z.T, fast.name, warnings)
    at_source = "source" in (fast.level, slow.level)
    if at_source:
        warnings.append("volts of the map are those at the source, not divided to the gate")
    return GateMap(
        x, y, np.ascontiguousarray(turned.T), (fast.name, slow.name), signal.name, at_source, tuple(warnings)
    )


def level_rows(z: FloatArray, lines: Flags | None = None) -> FloatArray:
    """Return the map (ny, nx) freed of what jumps from row to row over the whole row.

    Charge jumps of the sensor and slow noise lift whole rows.  The median over a row of
    its difference to the row before tells how much.  Only the part faster than an eighth
    of the map is taken away, so that no step of a line is bent; a jump is taken away whole.

    Args:
        z: the map.
        lines: pixels on or near lines, shape (ny, nx), which then have no say; a line
            along the fast axis would else be taken for a jump.
    """
    change = np.diff(z, axis=0)
    if lines is None:
        lift = np.median(change, axis=1)
    else:
        free = ~(lines[1:] | lines[:-1])
        enough = np.mean(free, axis=1) > ROW_FREE
        lift = np.zeros(change.shape[0])
        for k in np.flatnonzero(enough):
            lift[k] = np.median(change[k, free[k]])
        lift[~enough] = np.median(lift[enough]) if np.any(enough) else 0.0
    apart = lift - np.median(lift)
    pixel = float(np.median(np.abs(change - np.median(change))))
    usual = 1.4826 * float(np.median(np.abs(apart)))
    if usual < LIFTED * 1.4826 * pixel / np.sqrt(z.shape[1]) and np.max(np.abs(apart)) < JUMP_PIXELS * pixel:
        return z
    jump = np.abs(apart) > max(JUMP * usual, JUMP_PIXELS * pixel)
    jumps = np.concatenate(([0.0], np.cumsum(np.where(jump, apart, 0.0))))
    level = np.concatenate(([0.0], np.cumsum(np.where(jump, 0.0, apart))))
    slow = np.asarray(gaussian_filter1d(level, z.shape[0] / 8.0, mode="nearest"), dtype=float)
    return np.asarray(z - (jumps + level - slow)[:, None], dtype=float)


def _two_gates(samples: Samples) -> tuple[Axis, Axis]:
    """Return slow and fast axis, which must be two voltages."""
    if samples.shape != "map" or len(samples.axes) != 2:
        raise InputError(
            f"a map with two swept axes is wanted, this is a {samples.shape} with {len(samples.axes)} axes",
            where="samples",
            remedy="choose a method for that shape (see `millikeep methods`)",
        )
    for axis in samples.axes:
        if axis.unit != "V":
            raise InputError(
                f"axis {axis.name!r} is in {axis.unit!r}, a gate voltage in V is wanted",
                where=f"axis {axis.name}",
                remedy="give the right unit for the axis in a layout file",
            )
    return samples.axes[0], samples.axes[1]


def _whole_rows(y: FloatArray, z: FloatArray, warnings: list[str]) -> tuple[FloatArray, FloatArray]:
    """Leave out rows that were not measured, fill single lost pixels along their row."""
    lost = np.mean(np.isnan(z), axis=1)
    kept = np.flatnonzero(lost <= ROW_MISSING)
    if not kept.size:
        raise Refusal("every row of the map has missing pixels")
    between = int(kept[-1] - kept[0] + 1 - kept.size)
    if between > ROWS_LOST * kept.size:
        raise Refusal(f"{between} rows inside the map are missing")
    if kept.size < y.size:
        warnings.append(f"{y.size - kept.size} rows that were not (wholly) measured were left out")
    y, z = y[kept], z[kept]
    filled = int(np.count_nonzero(np.isnan(z)))
    if filled:
        warnings.append(f"{filled} missing pixels were filled along their row")
        index = np.arange(z.shape[1], dtype=float)
        for k in np.flatnonzero(np.any(np.isnan(z), axis=1)):
            z[k] = _filled(index, z[k])
    return y, z


def _filled(index: FloatArray, row: FloatArray) -> FloatArray:
    """Return a row with its missing pixels interpolated."""
    good = np.isfinite(row)
    return np.interp(index, index[good], row[good])


def _rising(axis: FloatArray, z: FloatArray, name: str) -> tuple[FloatArray, FloatArray]:
    """Turn the first axis of ``z`` so that its volts rise."""
    steps = np.diff(axis)
    if not np.all(np.isfinite(axis)) or not (np.all(steps > 0.0) or np.all(steps < 0.0)):
        raise Refusal(f"the volts of {name} do not run one way")
    return (axis, z) if steps[0] > 0.0 else (axis[::-1], z[::-1])


def _evenly(axis: FloatArray, z: FloatArray, name: str, warnings: list[str]) -> tuple[FloatArray, FloatArray]:
    """Bring the first axis of ``z`` to even steps."""
    steps = np.diff(axis)
    usual = float(np.median(steps))
    if np.max(np.abs(steps - usual)) <= EVEN_STEPS * usual:
        return axis, z
    if np.max(steps) > LARGEST_STEP * usual:
        raise Refusal(f"the volts of {name} leave a gap of {np.max(steps) / usual:.2g} usual steps")
    even = np.linspace(axis[0], axis[-1], axis.size)
    place = np.interp(even, axis, np.arange(axis.size, dtype=float))
    low = np.minimum(place.astype(np.intp), axis.size - 2)
    share = (place - low)[:, None]
    warnings.append(f"{name} is stepped unevenly: the map was interpolated to even steps")
    return even, (1.0 - share) * z[low] + share * z[low + 1]
