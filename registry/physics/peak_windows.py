"""What does one peak look like in its window, and how does it change with its parameters?

Every peak has a height h, a centre c, a full width at half maximum F, a straight line of
its own as background and, for the lifetime shape, a ratio g of Lorentzian width to k_B T:

    y = h shape(x; c, F, g) + a + b x + tails of the two neighbours.

All windows of a trace have the same number of samples and are stacked, one row a peak.
A window of more than ``MOST_SAMPLES`` samples is averaged in blocks, and the model with
it, so that nothing is biased and the cost stays bounded.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from registry.physics.lineshapes import (
    MULTI_LEVEL_FWHM,
    SINGLE_LEVEL_FWHM,
    multi_level,
    multi_level_slope,
    single_level,
    single_level_slope,
    thermal_lorentzian,
    thermal_lorentzian_fwhm,
    thermal_lorentzian_slopes,
)
from registry.samples import FloatArray

__all__ = [
    "Model",
    "Windows",
    "cut_windows",
    "first_parameters",
    "middle",
    "own_peak",
    "peak_and_line",
    "some_windows",
    "tails",
    "unit_signal",
    "width_constant",
]

Model = Literal["single-level", "multi-level", "lifetime"]

#: Half length of a window in full widths at half maximum.
HALF_WINDOW = 3.0
#: Samples (or blocks) of a window; more bring nothing to the fit and cost their cube.
MOST_SAMPLES = 64


@dataclass(frozen=True, eq=False)
class Windows:
    """The samples around P peaks, n blocks of m samples each.

    Attributes:
        x: shape (P, n, m), in units of the common width, from each window's own origin.
        y: block means, shape (P, n), in units of the tallest peak.
        used: False where a block lies outside the trace or on a neighbour, shape (P, n).
        origin: of x in each window, shape (P,), in common widths.
    """

    x: FloatArray
    y: FloatArray
    used: NDArray[np.bool_]
    origin: FloatArray


def cut_windows(x: FloatArray, y: FloatArray, tops: NDArray[np.intp], width: float) -> Windows:
    """Cut the windows of the peaks out of a trace.

    Args:
        x: shape (n,), monotone, in common widths.
        y: shape (n,), any unit.
        tops: sample number of each top, ascending, shape (P,).
        width: full width at half maximum in samples.
    """
    half = int(np.ceil(HALF_WINDOW * width))
    block = max(1, int(np.ceil((2 * half + 1) / MOST_SAMPLES)))
    blocks = (2 * half + 1) // block
    offset = np.arange(blocks * block) - (blocks * block) // 2
    index = tops[:, None] + offset
    middles = 0.5 * (tops[1:] + tops[:-1])
    low = np.append(-0.5, middles)
    high = np.append(middles, x.size - 0.5)
    used = (index >= np.maximum(low, 0)[:, None]) & (index <= np.minimum(high, x.size - 1)[:, None])
    inside = np.clip(index, 0, x.size - 1)
    shape = (tops.size, blocks, block)
    origin = x[tops]
    return Windows(
        x=(x[inside] - origin[:, None]).reshape(shape),
        y=y[inside].reshape(shape).mean(axis=2),
        used=used.reshape(shape).all(axis=2),
        origin=origin,
    )


def middle(count: int, most: int) -> slice:
    """Return which ``most`` of ``count`` windows lie in the middle of the trace."""
    first = max(0, (count - most) // 2)
    return slice(first, min(count, first + most))


def some_windows(windows: Windows, some: slice) -> Windows:
    """Return some of the windows."""
    return Windows(windows.x[some], windows.y[some], windows.used[some], windows.origin[some])


def first_parameters(windows: Windows, model: Model) -> FloatArray:
    """Return first parameters: common width, guessed centre, the rest by linear least squares."""
    count = windows.origin.size
    parameters = np.zeros((count, 6 if model == "lifetime" else 5))
    parameters[:, 0] = parameters[:, 2] = 1.0
    _, jacobian = own_peak(windows, parameters, model)
    design = jacobian[..., [0, 3, 4]]
    y = np.where(windows.used, windows.y, 0.0)
    parameters[:, [0, 3, 4]] = np.einsum("pki,pi->pk", np.linalg.pinv(design), y)
    return parameters


def own_peak(windows: Windows, parameters: FloatArray, model: Model) -> tuple[FloatArray, FloatArray]:
    """Return unit shape (P, n) and Jacobian (P, n, q) of the own peak and line."""
    height, centre, width = (parameters[:, k, None, None] for k in range(3))
    constant, ratio_part = width_constant(parameters, model)
    scale = constant[:, None, None] / width
    u = (windows.x - centre) * scale
    unit, slope, by_g = _shape(u, parameters, model)
    mean = windows.x.mean(axis=2)
    columns = [
        unit.mean(axis=2),
        (-height * slope * scale).mean(axis=2),
        (-height * slope * u / width).mean(axis=2),
        np.ones_like(mean),
        mean,
    ]
    if by_g is not None:
        g = np.exp(parameters[:, 5])[:, None, None]
        stretch = (ratio_part / constant)[:, None, None]
        columns.append((height * g * (by_g + slope * u * stretch)).mean(axis=2))
    jacobian = np.where(windows.used[..., None], np.stack(columns, axis=2), 0.0)
    return columns[0], jacobian


def _shape(
    u: FloatArray, parameters: FloatArray, model: Model
) -> tuple[FloatArray, FloatArray, FloatArray | None]:
    """Return unit shape, its slope by u and, for ``lifetime``, by g, at u (P, n, m)."""
    if model == "single-level":
        return single_level(u), single_level_slope(u), None
    if model == "multi-level":
        return multi_level(u), multi_level_slope(u), None
    g = np.exp(parameters[:, 5])[:, None, None]
    by_u, by_g = thermal_lorentzian_slopes(u, g)
    return thermal_lorentzian(u, g), by_u, by_g


def width_constant(parameters: FloatArray, model: Model) -> tuple[FloatArray, FloatArray]:
    """Return FWHM / k_B T of each peak, and its derivative by g."""
    count = parameters.shape[0]
    if model == "lifetime":
        return thermal_lorentzian_fwhm(np.exp(parameters[:, 5]))
    constant = SINGLE_LEVEL_FWHM if model == "single-level" else MULTI_LEVEL_FWHM
    return np.full(count, constant), np.zeros(count)


def peak_and_line(shape: FloatArray, parameters: FloatArray, windows: Windows) -> FloatArray:
    """Return own peak and line, shape (P, n)."""
    line = parameters[:, 3, None] + parameters[:, 4, None] * windows.x.mean(axis=2)
    total: FloatArray = parameters[:, 0, None] * shape + line
    return total


def unit_signal(shape: FloatArray, parameters: FloatArray) -> FloatArray:
    """Return what gain noise is proportional to: the peak, in units of the tallest."""
    signal: FloatArray = np.abs(parameters[:, 0, None]) * shape
    largest = float(np.max(signal))
    return signal / largest if largest > 0.0 else signal


def tails(windows: Windows, parameters: FloatArray, model: Model) -> FloatArray:
    """Return what the two neighbours of each peak reach into its window, shape (P, n)."""
    reach = np.zeros_like(windows.y)
    constant, _ = width_constant(parameters, model)
    for here, there in ((slice(1, None), slice(None, -1)), (slice(None, -1), slice(1, None))):
        other = parameters[there]
        shift = (windows.origin[there] + other[:, 1] - windows.origin[here])[:, None, None]
        scale = (constant[there] / other[:, 2])[:, None, None]
        unit, _, _ = _shape((windows.x[here] - shift) * scale, other, model)
        reach[here] += other[:, 0, None] * unit.mean(axis=2)
    return reach
