"""Which map of current or conductance over gate and bias does a diamond fit work on?

Picks signal and axes and brings the map to one form, rows of constant bias over a rising
gate axis, remembering which axis was the slow one and in which order it was stepped.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from registry.errors import InputError
from registry.physics.catalogue import word
from registry.physics.result import Given, Refusal
from registry.physics.sweeps import pick_signal
from registry.samples import Axis, FloatArray, Samples

__all__ = ["DiamondMap", "pick_map"]

#: Fewest samples along either axis.
FEWEST = 12
#: More missing samples than this leave too little of any edge.
MISSING_ALLOWED = 0.5
#: So many samples at the very same largest (smallest) value mean a limit was hit.
SATURATED = 4


@dataclass(frozen=True, eq=False)
class DiamondMap:
    """A map in the form the fit wants.

    Attributes:
        gate: volts, rising, shape (n,).
        bias: volts, rising, shape (m,).
        y: signal, NaN where missing or saturated, shape (m, n).
        slow: which axis was stepped slowly; charge drifts from step to step of it.
        order: place in time of every row (slow bias) or column (slow gate), from 0.
        gate_name, bias_name, signal, signal_unit: names and unit.
        conditions: direction of the fast axis, and the level of the gate volts.
        warnings: plain sentences.
    """

    gate: FloatArray
    bias: FloatArray
    y: FloatArray
    slow: Literal["bias", "gate"]
    order: NDArray[np.intp]
    gate_name: str
    bias_name: str
    signal: str
    signal_unit: str
    conditions: Mapping[str, str | float]
    warnings: tuple[str, ...]


def pick_map(samples: Samples, given: Mapping[str, Given]) -> DiamondMap:
    """Return the map of the wanted signal and direction.

    Raises:
        InputError: no map over two voltages, or no bias axis, or no such signal.
        Refusal: too few usable samples, an overload, or a dead signal.
    """
    gate_at, bias_at = _axes(samples, given)
    signal = pick_signal(samples, given)
    warnings: list[str] = []
    values, slow_axis, direction = _one_direction(samples, signal.values, given, warnings)
    axes = [slow_axis, samples.axes[1].values]
    slow: Literal["bias", "gate"] = "bias" if bias_at == 0 else "gate"
    y = values if slow == "bias" else values.T
    gate, bias = (np.asarray(axes[at], dtype=float) for at in (gate_at, bias_at))
    order = np.arange(axes[0].size)
    y, gate, bias, order = _sorted(y, gate, bias, order, slow)
    conditions: dict[str, str | float] = {"direction": direction}
    axis = samples.axes[gate_at]
    if axis.level == "source":
        conditions["level"] = "source"
        warnings.append(f"volts of {axis.name} are those at the source, not divided to the gate")
    return DiamondMap(
        gate=gate,
        bias=bias,
        y=_usable(y, warnings),
        slow=slow,
        order=order,
        gate_name=axis.name,
        bias_name=samples.axes[bias_at].name,
        signal=signal.name,
        signal_unit=signal.unit,
        conditions=conditions,
        warnings=tuple(warnings),
    )


def _axes(samples: Samples, given: Mapping[str, Given]) -> tuple[int, int]:
    """Return the places of the gate axis and of the bias axis."""
    if samples.shape != "map" or len(samples.axes) != 2:
        raise InputError(
            f"a map over gate and bias is wanted, this is a {samples.shape} with {len(samples.axes)} axes",
            where="samples",
            remedy="choose a method for that shape (see `millikeep methods`)",
        )
    names = [axis.name for axis in samples.axes]
    wanted = word(given, "bias_axis", "")
    bias = [k for k, name in enumerate(names) if (name == wanted if wanted else _is_bias(name))]
    if len(bias) != 1:
        raise InputError(
            f"{'no' if not bias else 'more than one'} bias axis among {', '.join(names)}",
            where="given bias_axis" if wanted else "samples",
            remedy="name the axis of the source-drain bias: --given bias_axis=NAME",
        )
    for axis in samples.axes:
        if axis.unit != "V":
            raise InputError(
                f"axis {axis.name!r} is in {axis.unit!r}, volts are wanted",
                where=f"axis {axis.name}",
                remedy="give the right unit for the axis in a layout file",
            )
    return 1 - bias[0], bias[0]


def _is_bias(name: str) -> bool:
    """Tell whether an axis is named as the source-drain bias."""
    return name.lower().startswith("bias")


def _one_direction(
    samples: Samples, values: FloatArray, given: Mapping[str, Given], warnings: list[str]
) -> tuple[FloatArray, FloatArray, str]:
    """Return rows of one direction of the fast axis, their slow values, the direction."""
    slow: Axis = samples.axes[0]
    fast = samples.axes[1].values
    rising = fast.size < 2 or fast[-1] >= fast[0]
    own = [sweep.direction for sweep in samples.sweeps]
    if len(own) != slow.values.size:
        own = ["up" if rising else "down"] * slow.values.size
    direction = word(given, "direction", own[0] if own else "up")
    keep = np.array([one == direction for one in own], dtype=bool)
    if not np.any(keep):
        raise InputError(
            f"no sweep {direction}",
            where="given direction",
            remedy="leave it out: the map has only sweeps in the other direction",
        )
    if not np.all(keep):
        warnings.append(f"{int(np.sum(~keep))} lines swept the other way were not used")
    return np.asarray(values[keep], dtype=float), np.asarray(slow.values[keep], dtype=float), direction


def _sorted(
    y: FloatArray, gate: FloatArray, bias: FloatArray, order: NDArray[np.intp], slow: str
) -> tuple[FloatArray, FloatArray, FloatArray, NDArray[np.intp]]:
    """Return the map with both axes rising; an axis must not repeat a value."""
    by_gate, by_bias = np.argsort(gate, kind="stable"), np.argsort(bias, kind="stable")
    order = order[by_bias if slow == "bias" else by_gate]
    gate, bias = gate[by_gate], bias[by_bias]
    for values, name in ((gate, "gate"), (bias, "bias")):
        if values.size < FEWEST:
            raise Refusal(f"{values.size} values along the {name} axis are too few, {FEWEST} are needed")
        if not np.all(np.isfinite(values)) or np.any(np.diff(values) <= 0.0):
            raise Refusal(f"the {name} axis repeats or misses values")
    return y[np.ix_(by_bias, by_gate)], gate, bias, order


def _usable(y: FloatArray, warnings: list[str]) -> FloatArray:
    """Return ``y`` with saturated samples as missing; refuse a dead or broken map."""
    if np.any(np.isinf(y)):
        raise Refusal("the map holds infinite samples: an instrument was overloaded")
    y = np.array(y, dtype=float)
    missing = float(np.mean(np.isnan(y)))
    if missing > MISSING_ALLOWED:
        raise Refusal(f"{missing:.0%} of the map are missing")
    if missing:
        warnings.append(f"{missing:.1%} of the map are missing")
    good = y[np.isfinite(y)]
    low, high = float(np.min(good)), float(np.max(good))
    if low == high:
        raise Refusal("all samples are equal: the signal is dead or stuck")
    if np.unique(good).size < good.size / 2:
        return y  # coarsely digitised: equal samples mean nothing
    for extreme in (low, high):
        flat = y == extreme
        if np.count_nonzero(flat) >= SATURATED:
            warnings.append(f"{np.count_nonzero(flat)} samples at the limit {extreme:.6g} were left out")
            y[flat] = np.nan
    return y
