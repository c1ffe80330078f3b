"""Where and how steeply does a device turn on, and may one say so?

Takes the posterior of smooth curves through a trace (``psplines``), finds the pinched-off
end, the steepest place and the tangent there, and refuses curves that have no such thing.
The intercept is that of extrapolation in the linear region: V* - (I(V*) - I_off)/g_m(V*)
(D. K. Schroder, Semiconductor Material and Device Characterization, 3rd ed., Wiley 2006,
chapter 4; A. Ortiz-Conde et al., Microelectron. Reliab. 42 (2002) 583), without the
drain-bias term, as in the JEDEC dictionary's extrapolated threshold voltage.

Where the slope is nearly constant its largest value on a noisy curve is a matter of luck
and too large.  So the tangent is taken as a mean over all places that a draw of the
posterior calls steepest, in proportion to how often: one line through a straight part, the
tangent in the inflection of a curved one.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from registry.physics.psplines import CurvePosterior
from registry.physics.result import Refusal
from registry.physics.turn_on_place import GRID_PER_KNOT, behind_bend, judge, on_side, plateau_end
from registry.samples import FloatArray

__all__ = ["DRAWS", "SEED", "SOFTER", "Estimate", "TurnOn", "find_turn_on", "tangent_intercept"]

#: Draws of the posterior for each of the two penalties, and the seed they start from.
DRAWS = 200
SEED = 20260101
#: log10 of the factor between the two penalties; their half difference enters the uncertainty.
SOFTER = 1.0
#: log-likelihood over a straight line below which there is no feature.
LEAST_GAIN = 8.0
#: The off-current is the mean over this part of the plateau, away from the turn-on.
PLATEAU_USED = 0.6
#: Largest standard uncertainty of the threshold, as a share of the window.
WIDEST_UNCERTAINTY = 0.25

Index = NDArray[np.intp]


@dataclass(frozen=True)
class Estimate:
    """A number and its standard uncertainty, both in the same unit."""

    value: float
    uncertainty: float


@dataclass(frozen=True, eq=False)
class _Bundle:
    """Curves under one penalty on the grid, turned so that they rise to the right."""

    mean: FloatArray  # (G,) above the off-level of the mean curve
    mean_slope: FloatArray  # (G,)
    curves: FloatArray  # (G, D) above each draw's own off-level
    slopes: FloatArray  # (G, D)
    steepest: Index  # (D,)
    off: FloatArray  # (D,) off-level, not turned


@dataclass(frozen=True, eq=False)
class TurnOn:
    """How a device turns on, in volts and in the signal's unit.

    Attributes:
        threshold: intercept of the steepest tangent with the off-level.
        slope: largest |dI/dV|.
        off: level of the pinched-off plateau, with its sign.
        on: largest |I| above ``off`` on the curve.
        rise: on the mean curve from off to the largest value.
        snr: rise over rms noise.
        carrier: +1 if the device is on at high volts, -1 at low.
        sign: +1 if the signal grows when turning on, -1 if it falls.
        plateau_end: volts where the plateau ends.
        covariance: of threshold, slope and off, shape (3, 3).
        grid: volts, rising, shape (G,); ``curve``: mean curve there.
        warnings: plain sentences.
    """

    threshold: Estimate
    slope: Estimate
    off: Estimate
    on: Estimate
    rise: float
    snr: float
    carrier: int
    sign: int
    plateau_end: float
    covariance: FloatArray
    grid: FloatArray
    curve: FloatArray
    warnings: tuple[str, ...]
    _turned: FloatArray
    _bundles: tuple[_Bundle, _Bundle]

    def crossing(self, level: float) -> Estimate | None:
        """Return the volts where the curve first stays ``level`` above off, or None.

        ``level`` is positive, in the signal's unit.  None: the curve does not reach it, or
        not surely (one draw in twenty misses it).
        """
        found = [_crossings(self._turned, b.curves, b.steepest, level) for b in self._bundles]
        if any(np.mean(np.isnan(one)) > 0.05 for one in found):
            return None
        estimate = _combine(*((float(np.nanmedian(one)), _spread(one)) for one in found))
        return Estimate(self.carrier * estimate.value, estimate.uncertainty)


def tangent_intercept(voltage: float, current: float, slope: float, off: float = 0.0) -> float:
    """Return where the tangent through (voltage, current) meets ``off``, in volts."""
    return voltage - (current - off) / slope


def find_turn_on(posterior: CurvePosterior, volts: FloatArray) -> TurnOn:
    """Find threshold and steepest slope with their uncertainties.

    Args:
        posterior: curves through the trace.
        volts: the trace's x, shape (n,), any order; counts samples on the plateau.

    Raises:
        Refusal: there is no trustworthy turn-on; the reason carries the numbers.
    """
    grid = posterior.grid(GRID_PER_KNOT)
    values, slopes = posterior.values(grid), posterior.slopes(grid)
    mean = values @ posterior.mean()
    if posterior.gain_over_line < LEAST_GAIN:
        raise Refusal(
            f"no turn-on: a straight line does nearly as well (log-likelihood {posterior.gain_over_line:.1f})"
        )
    noise = float(np.hypot(posterior.noise.white_rms(), posterior.noise.pink_rms(volts.size)))
    carrier = on_side(mean, noise)
    turned = carrier * grid[::carrier]
    sign = 1 if mean[::carrier][-1] > mean[::carrier][0] else -1
    rising = sign * mean[::carrier]
    plateau = plateau_end(turned, rising, noise, carrier * volts)
    rng = np.random.default_rng(SEED)
    matrices = (sign * values[::carrier], sign * carrier * slopes[::carrier])
    used = turned <= turned[0] + PLATEAU_USED * (turned[plateau] - turned[0])
    bundles = (
        _bundle(posterior, 0.0, matrices, used, plateau, sign, rng),
        _bundle(posterior, SOFTER, matrices, used, plateau, sign, rng),
    )
    rise = float(np.max(bundles[0].mean))
    warnings = judge(turned, bundles[0].mean, bundles[0].mean_slope, plateau, rise / noise)
    threshold, slope = _tangent(bundles, turned)
    behind = behind_bend(bundles[0].mean_slope, plateau)
    if behind is not None:
        bundles = (_from(bundles[0], behind), _from(bundles[1], behind))
        threshold, slope = _allowing(_tangent(bundles, turned), (threshold, slope))
    off = _combine(*((float(np.mean(b.off)), float(np.std(b.off))) for b in bundles))
    _judge_numbers(threshold, turned)
    on = _combine(*((float(np.max(b.mean)), _spread(np.max(b.curves, axis=0))) for b in bundles))
    covariance = _covariance(bundles, turned, (threshold, slope, off), carrier)
    return TurnOn(
        Estimate(carrier * threshold.value, threshold.uncertainty),
        slope,
        off,
        on,
        rise,
        rise / noise,
        carrier,
        sign,
        float(carrier * turned[plateau]),
        covariance,
        grid,
        mean,
        warnings,
        turned,
        bundles,
    )


def _bundle(
    posterior: CurvePosterior,
    softer: float,
    matrices: tuple[FloatArray, FloatArray],
    used: NDArray[np.bool_],
    plateau: int,
    sign: int,
    rng: np.random.Generator,
) -> _Bundle:
    """Evaluate mean and draws under one penalty."""
    values, slopes = matrices
    center, draws = posterior.mean(softer), posterior.draws(DRAWS, rng, softer)
    mean, curves = values @ center, values @ draws
    off = np.mean(curves[used], axis=0)
    steep = slopes @ draws
    steepest = plateau + np.argmax(steep[plateau:], axis=0)
    return _Bundle(mean - np.mean(mean[used]), slopes @ center, curves - off, steep, steepest, sign * off)


def _from(bundle: _Bundle, start: int) -> _Bundle:
    """Return ``bundle`` with the steepest places looked for from ``start`` on."""
    return replace(bundle, steepest=start + np.argmax(bundle.slopes[start:], axis=0))


def _tangent(bundles: tuple[_Bundle, _Bundle], turned: FloatArray) -> tuple[Estimate, Estimate]:
    """Return threshold and largest slope."""
    return _combine(*(_threshold(b, turned) for b in bundles)), _combine(*(_slope(b) for b in bundles))


def _allowing(
    chosen: tuple[Estimate, Estimate], other: tuple[Estimate, Estimate]
) -> tuple[Estimate, Estimate]:
    """Return ``chosen`` with half its difference to ``other`` in the uncertainties."""
    threshold, slope = (
        Estimate(one.value, float(np.hypot(one.uncertainty, 0.5 * (one.value - two.value))))
        for one, two in zip(chosen, other, strict=True)
    )
    return threshold, slope


def _threshold(bundle: _Bundle, turned: FloatArray) -> tuple[float, float]:
    """Return the intercept of the pooled tangent and the spread of the draws' intercepts."""
    share = np.bincount(bundle.steepest, minlength=turned.size) / bundle.steepest.size
    slope = float(share @ bundle.mean_slope)
    if slope <= 0.0:
        raise Refusal("no steepest place: the slope cannot be told from zero")
    value = tangent_intercept(float(share @ turned), float(share @ bundle.mean), slope)
    return value, _spread(_intercepts(bundle, turned))


def _intercepts(bundle: _Bundle, turned: FloatArray) -> FloatArray:
    """Return each draw's own intercept, shape (D,)."""
    at, draw = bundle.steepest, np.arange(bundle.steepest.size)
    intercepts: FloatArray = turned[at] - bundle.curves[at, draw] / bundle.slopes[at, draw]
    return intercepts


def _slope(bundle: _Bundle) -> tuple[float, float]:
    """Return the pooled largest slope and its uncertainty.

    The draws' own maxima are larger by chance; half of that excess is added.
    """
    own = bundle.slopes[bundle.steepest, np.arange(bundle.steepest.size)]
    pooled = float(np.mean(bundle.mean_slope[bundle.steepest]))
    return pooled, float(np.hypot(_spread(own), 0.5 * (np.median(own) - pooled)))


def _spread(draws: FloatArray) -> float:
    """Return a standard uncertainty: half the 68 % range, or the 95 % range if that is wider."""
    low, lower, upper, high = np.nanpercentile(draws, [2.5, 15.87, 84.13, 97.5])
    return float(max(0.5 * (upper - lower), (high - low) / 3.92))


def _combine(firm: tuple[float, float], soft: tuple[float, float]) -> Estimate:
    """Return the mean over both penalties, half their difference in the uncertainty."""
    value = 0.5 * (firm[0] + soft[0])
    spread = np.sqrt(0.5 * (firm[1] ** 2 + soft[1] ** 2) + 0.25 * (firm[0] - soft[0]) ** 2)
    return Estimate(value, float(spread))


def _judge_numbers(threshold: Estimate, turned: FloatArray) -> None:
    """Refuse a threshold outside the window or too uncertain."""
    window = float(turned[-1] - turned[0])
    if not turned[0] <= threshold.value <= turned[-1]:
        raise Refusal("the tangent meets the off-level outside the window")
    if threshold.uncertainty > WIDEST_UNCERTAINTY * window:
        raise Refusal(
            f"the threshold is uncertain by {threshold.uncertainty:.3g} V in a window of {window:.3g} V"
        )


def _covariance(
    bundles: tuple[_Bundle, _Bundle], turned: FloatArray, estimates: tuple[Estimate, ...], carrier: int
) -> FloatArray:
    """Return the covariance of threshold, slope and off: the draws' correlation, the stated u."""
    rows = []
    for bundle in bundles:
        draw = np.arange(bundle.steepest.size)
        own = bundle.slopes[bundle.steepest, draw]
        rows.append(np.vstack((carrier * _intercepts(bundle, turned), own, bundle.off)))
    centred = np.hstack([row - np.median(row, axis=1, keepdims=True) for row in rows])
    u = np.array([estimate.uncertainty for estimate in estimates])
    spread = np.std(centred, axis=1)
    covariance: FloatArray = np.cov(centred) * np.outer(u / spread, u / spread)
    covariance[np.diag_indices(3)] = u**2
    return covariance


def _crossings(turned: FloatArray, curves: FloatArray, steepest: Index, level: float) -> FloatArray:
    """Return where each curve last passes ``level`` upward below its largest value, NaN if never."""
    found = np.full(curves.shape[1], np.nan)
    for draw in range(curves.shape[1]):
        curve = curves[:, draw]
        top = int(steepest[draw]) if curve[steepest[draw]] >= level else int(np.argmax(curve))
        below = np.flatnonzero(curve[: top + 1] < level)
        if curve[top] < level or not below.size:
            continue
        i = int(below[-1])
        found[draw] = turned[i] + (turned[i + 1] - turned[i]) * (level - curve[i]) / (curve[i + 1] - curve[i])
    return found
