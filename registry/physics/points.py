"""Which points of a table does a method fit, when each row is a measurement of its own?

A row is one value of the axis and what was found there: a width, a temperature, a
position.  Rows stand in the order they were taken; the axis may run to and fro.  A
signal ``NAME`` may have a companion ``NAME_u`` with its standard uncertainties.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from registry.errors import InputError
from registry.physics.result import Given, Refusal
from registry.physics.sweeps import pick_signal
from registry.samples import FloatArray, Samples, Signal

__all__ = ["UNCERTAINTY_ENDING", "Points", "pick_points", "value_signals"]

#: A signal whose name ends so holds the uncertainties of the one named before it.
UNCERTAINTY_ENDING = "_u"


@dataclass(frozen=True, eq=False)
class Points:
    """The usable rows of one signal.

    Attributes:
        x, y: axis and signal in their units, finite, in the order of the rows, shape (n,).
        u: standard uncertainties of ``y``, shape (n,), or None if not told.
        axis, signal, signal_unit: names and unit.
        at_source: whether the axis is in volts at the source behind a divider.
        warnings: plain sentences on rows left out.
    """

    x: FloatArray
    y: FloatArray
    u: FloatArray | None
    axis: str
    signal: str
    signal_unit: str
    at_source: bool
    warnings: tuple[str, ...] = ()

    def conditions(self) -> dict[str, str | float]:
        """Return what makes a series of its own of the quantities from these points."""
        return {"level": "source"} if self.at_source else {}


def value_signals(samples: Samples, given: Mapping[str, Given]) -> tuple[Signal, ...]:
    """Return the signal given, or all that are no uncertainties of others.

    Raises:
        InputError: there is no such signal.
    """
    if "signal" in given:
        return (pick_signal(samples, given),)
    names = {one.name for one in samples.signals}
    return tuple(
        one
        for one in samples.signals
        if not (one.name.endswith(UNCERTAINTY_ENDING) and one.name.removesuffix(UNCERTAINTY_ENDING) in names)
    )


def pick_points(samples: Samples, signal: Signal, axis_unit: str, fewest: int) -> Points:
    """Return the rows of ``signal`` that hold finite numbers.

    Args:
        samples: one axis; a trace or a series.
        signal: one of its signals.
        axis_unit: unit the axis must have.
        fewest: rows the method needs.

    Raises:
        InputError: not one axis, or one in another unit.
        Refusal: too few usable rows, an infinite number, an impossible uncertainty.
    """
    if len(samples.axes) != 1:
        raise InputError(
            f"a table with one axis is wanted, this has {len(samples.axes)}",
            where="samples",
            remedy="make a table of one row a measurement: the axis first, then what was found",
        )
    axis = samples.axes[0]
    if axis.unit != axis_unit:
        raise InputError(
            f"axis {axis.name!r} is in {axis.unit!r}, one in {axis_unit} is wanted",
            where=f"axis {axis.name}",
            remedy="put the right column first, or give its unit in a layout file",
        )
    beside = [one for one in samples.signals if one.name == signal.name + UNCERTAINTY_ENDING]
    u = beside[0].values if beside else None
    if beside and beside[0].unit != signal.unit:
        raise InputError(
            f"{beside[0].name!r} is in {beside[0].unit!r}, {signal.name!r} in {signal.unit!r}",
            where=f"signal {beside[0].name}",
            remedy="write an uncertainty in the unit of its value",
        )
    columns = (axis.values, signal.values) if u is None else (axis.values, signal.values, u)
    if any(np.any(np.isinf(column)) for column in columns):
        raise Refusal("the table holds infinite numbers: a fit or an instrument failed there")
    good = np.all([np.isfinite(column) for column in columns], axis=0)
    kept = int(np.count_nonzero(good))
    if kept < fewest:
        raise Refusal(f"{kept} points are too few, {fewest} are needed")
    if u is not None and np.any(u[good] <= 0.0):
        raise Refusal(f"{int(np.sum(u[good] <= 0.0))} uncertainties are not above zero")
    left_out = axis.values.size - kept
    return Points(
        x=np.asarray(axis.values[good], dtype=float),
        y=np.asarray(signal.values[good], dtype=float),
        u=None if u is None else np.asarray(u[good], dtype=float),
        axis=axis.name,
        signal=signal.name,
        signal_unit=signal.unit,
        at_source=axis.level == "source",
        warnings=(f"{left_out} rows of {signal.name} without a number were left out",) if left_out else (),
    )
