"""Where is a charge sensor's curve steepest, how steep, and may one say so?

Takes the posterior of smooth curves through a trace (``psplines``); no form is given to
the curve, because sensors are Coulomb peaks, point contacts and anything between.

The largest slope on a noisy curve is too large by luck.  So the slope is the mean curve's,
averaged over all places that draws of the posterior call steepest, in proportion to how
often; half of what the draws' own largest slopes exceed it by goes into the uncertainty,
and so does half the difference between two penalties.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from registry.physics.psplines import CurvePosterior
from registry.physics.result import Refusal
from registry.samples import FloatArray

__all__ = ["DRAWS", "SEED", "SOFTER", "OperatingPoint", "find_operating_point"]

#: Draws of the posterior for each of the two penalties, and the seed they start from.
DRAWS = 200
SEED = 20260101
#: log10 of the factor between the two penalties.
SOFTER = 1.0
#: Places looked at in each knot interval.
GRID_PER_KNOT = 4
#: log-likelihood over a straight line below which there is no feature.
LEAST_GAIN = 8.0
#: Range of the curve over rms noise (white and 1/f together) below which nothing is said.
LEAST_SNR = 6.0
#: The slope must fall below this share of its maximum on both sides inside the window.
STEEP = 0.9
#: Largest relative uncertainty of the slope.
WIDEST = 0.25
#: A sine or a jump on a line explains a trace if it leaves less than this many times the curve's
#: residuals.  Tried are so many sines from this many periods in the window on (half a period
#: more or less of one is no different from a flank), then so many near the best.
SIMPLE_REST = 1.2
FEWEST_PERIODS = 1.8
SINES, NEAR_SINES = 120, 25
#: A jump of which a line leaves less than this square is none.
SLIGHTEST = 1e-9
#: Shortest period tried, in samples.
SHORTEST_PERIOD = 8.0
#: Normal quantiles that hold 68 % and 95 %, in per cent.
QUANTILES = (2.5, 15.87, 84.13, 97.5)

Flags = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class OperatingPoint:
    """The place of largest slope and what the curve does there, in the trace's units.

    Attributes:
        volts, volts_u: where; the uncertainty is nil where the place was given.
        slope, slope_u: dI/dV there, signed.
        covariance: of volts and slope, shape (2, 2).
        level: the signal there.
        grid, curve: the mean curve for drawing, each (G,).
        noise, noise_u: rms noise of a sample against its neighbours (the Allan deviation
            of one sample: white noise, and of 1/f noise what neighbours do not share).
    """

    volts: float
    volts_u: float
    slope: float
    slope_u: float
    covariance: FloatArray
    level: float
    grid: FloatArray
    curve: FloatArray
    noise: float
    noise_u: float
    _draws: tuple[FloatArray, FloatArray]

    def change(self, shift: float) -> tuple[float, float]:
        """Return what the signal does when the curve moves by ``shift`` volts, and its uncertainty."""
        low, high = self.volts - 0.5 * shift, self.volts + 0.5 * shift
        if min(low, high) < self.grid[0] or max(low, high) > self.grid[-1]:
            raise Refusal(f"a shift of {shift:.3g} V about {self.volts:.6g} V leaves the window")
        changes = [self._at(draws, low) - self._at(draws, high) for draws in self._draws]
        return _combined([(float(np.mean(one)), _spread(one)) for one in changes])

    def _at(self, draws: FloatArray, volts: float) -> FloatArray:
        """Return the draws (G, D) at a voltage between grid places, shape (D,)."""
        right = int(np.clip(np.searchsorted(self.grid, volts), 1, self.grid.size - 1))
        share = (volts - self.grid[right - 1]) / (self.grid[right] - self.grid[right - 1])
        at: FloatArray = (1.0 - share) * draws[right - 1] + share * draws[right]
        return at


def find_operating_point(
    posterior: CurvePosterior, x: FloatArray, y: FloatArray, flank: str | None, at: float | None
) -> OperatingPoint:
    """Find the steepest place of a sensor's curve.

    Args:
        posterior: curves through the trace.
        x, y: the trace, each (n,), in order of time.
        flank: ``rising`` or ``falling``: only slopes of that sign; None for either.
        at: volts to take instead of the steepest place.

    Raises:
        Refusal: there is no trustworthy slope; the reason carries the numbers.
    """
    grid = posterior.grid(GRID_PER_KNOT)
    values, slopes = posterior.values(grid), posterior.slopes(grid)
    mean, mean_slope = values @ posterior.mean(), slopes @ posterior.mean()
    noise = float(np.hypot(posterior.noise.white_rms(), posterior.noise.pink_rms(x.size)))
    snr = float(np.ptp(mean)) / noise
    _judge_curve(posterior, x, y, snr)
    sign = _sign(mean_slope, flank)
    if at is None:
        _judge_place(sign * mean_slope)
    elif not grid[0] <= at <= grid[-1]:
        raise Refusal(
            f"operating_point={at:.6g} V lies outside the sweep ({grid[0]:.6g} to {grid[-1]:.6g} V)"
        )
    rng = np.random.default_rng(SEED)
    found, curves, together = [], [], []
    for softer in (0.0, SOFTER):
        draws = posterior.draws(DRAWS, rng, softer)
        steep, center = slopes @ draws, slopes @ posterior.mean(softer)
        place = np.argmax(sign * steep, axis=0)
        if at is not None:
            place = np.full(place.size, int(np.argmin(np.abs(grid - at))))
        own, pooled = steep[place, np.arange(place.size)], float(np.mean(center[place]))
        u = float(np.hypot(_spread(own), 0.5 * (np.median(own) - pooled)))
        found.append((pooled, u, float(np.mean(grid[place])), _spread(grid[place])))
        together.append(np.vstack([grid[place], own]) - np.array([[np.mean(grid[place])], [np.median(own)]]))
        curves.append(values @ draws)
    slope, slope_u = _combined([(one[0], one[1]) for one in found])
    volts, volts_u = _combined([(one[2], one[3]) for one in found])
    if slope_u > WIDEST * abs(slope):
        raise Refusal(
            f"the slope is uncertain by {slope_u / max(abs(slope), 1e-300):.0%}, {WIDEST:.0%} are allowed"
        )
    return OperatingPoint(
        volts if at is None else at,
        volts_u if at is None else 0.0,
        slope,
        slope_u,
        _covariance(np.hstack(together), volts_u if at is None else 0.0, slope_u),
        float(np.interp(volts if at is None else at, grid, mean)),
        grid,
        mean,
        *_sample_noise(y - posterior.values(x) @ posterior.mean()),
        (curves[0], curves[1]),
    )


def _sign(mean_slope: FloatArray, flank: str | None) -> float:
    """Return +1 for a rising, -1 for a falling flank: the wanted one, or the steeper one."""
    if flank is not None:
        return 1.0 if flank == "rising" else -1.0
    return 1.0 if np.max(mean_slope) >= -np.min(mean_slope) else -1.0


def _judge_curve(posterior: CurvePosterior, x: FloatArray, y: FloatArray, snr: float) -> None:
    """Refuse noise, a straight line, and a sine (mains)."""
    if posterior.gain_over_line < LEAST_GAIN:
        raise Refusal(
            f"a straight line does nearly as well as a curve (log-likelihood {posterior.gain_over_line:.1f}, "
            f"{LEAST_GAIN:g} needed): no feature of a sensor"
        )
    if snr < LEAST_SNR:
        raise Refusal(f"the curve's range is {snr:.2g} times the noise, {LEAST_SNR:g} are needed")
    allowed = SIMPLE_REST * float(np.std(y - posterior.values(x) @ posterior.mean()))
    left, periods = _best_sine(x, y)
    if left < allowed:
        raise Refusal(
            f"a sine of {periods:.1f} periods in the sweep explains the trace: pick-up, or nothing a "
            "single flank can be told from"
        )
    left, sample = _best_jump(x, y)
    if left < allowed:
        raise Refusal(f"a jump at sample {sample} explains the trace: a charge jump, or too coarse a sweep")


def _best_jump(x: FloatArray, y: FloatArray) -> tuple[float, int]:
    """Return the rms that the best jump on a line leaves, and the sample (from 1) before it."""
    line, _ = np.linalg.qr(np.column_stack([np.ones_like(x), x - np.mean(x)]))
    rest = y - line @ (line.T @ y)
    # Jump k is 1 from sample k + 1 on: its products with line and rest are sums over the end.
    on_line = np.cumsum(line[::-1], axis=0)[::-1][1:]
    overlap = np.cumsum(rest[::-1])[::-1][1:]
    norm = np.arange(y.size - 1.0, 0.0, -1.0) - np.sum(on_line**2, axis=1)
    gain = overlap**2 / np.maximum(norm, SLIGHTEST)
    best = int(np.argmax(gain))
    return float(np.sqrt(max(float(rest @ rest) - float(gain[best]), 0.0) / y.size)), best + 1


def _best_sine(x: FloatArray, y: FloatArray) -> tuple[float, float]:
    """Return the rms that the best sine on a line leaves, and its periods in the window."""
    u = (x - x[0]) / (x[-1] - x[0])
    tried = np.geomspace(FEWEST_PERIODS, max(x.size / SHORTEST_PERIOD, 4.0), SINES)
    growth = tried[1] / tried[0]
    best = min((_sine_rest(u, y, periods), periods) for periods in tried)
    near = best[1] * np.geomspace(1.0 / growth, growth, NEAR_SINES)
    left, periods = min(best, *((_sine_rest(u, y, periods), periods) for periods in near))
    return left, float(periods)


def _sine_rest(u: FloatArray, y: FloatArray, periods: float) -> float:
    """Return the rms that a sine of so many periods on a line leaves of ``y``."""
    phase = 2.0 * np.pi * periods * u
    design = np.column_stack([np.ones_like(u), u, np.cos(phase), np.sin(phase)])
    solution = np.linalg.solve(design.T @ design, design.T @ y)
    return float(np.std(y - design @ solution))


def _judge_place(slope: FloatArray) -> None:
    """Refuse a slope that is steepest at an end of the window."""
    top = int(np.argmax(slope))
    limit = STEEP * float(slope[top])
    if slope[top] <= 0.0:
        raise Refusal("there is no such flank in the trace")
    for side, part in (("start", slope[:top]), ("end", slope[top + 1 :])):
        if not np.any(part < limit):
            raise Refusal(
                f"the slope still grows at the {side} of the window (low volts first): sweep further"
            )


def _sample_noise(rest: FloatArray) -> tuple[float, float]:
    """Return the Allan deviation of one sample and its standard uncertainty.

    For white noise the variance of squared neighbour differences makes 2 (n - 1) / 3
    degrees of freedom of them (D. W. Allan, Proc. IEEE 54 (1966) 221).
    """
    deviation = float(np.sqrt(0.5 * np.mean(np.diff(rest) ** 2)))
    return deviation, deviation / float(np.sqrt(4.0 * (rest.size - 1) / 3.0))


def _covariance(together: FloatArray, volts_u: float, slope_u: float) -> FloatArray:
    """Return the covariance of place and slope: the draws' correlation, the stated u."""
    spread = np.std(together, axis=1)
    moving = spread[0] > 0.0 and spread[1] > 0.0 and volts_u > 0.0
    correlation = float(np.mean(together[0] * together[1]) / (spread[0] * spread[1])) if moving else 0.0
    off = correlation * volts_u * slope_u
    return np.array([[volts_u**2, off], [off, slope_u**2]])


def _spread(draws: FloatArray) -> float:
    """Return a standard uncertainty: half the 68 % range, or the 95 % range if that is wider."""
    low, lower, upper, high = np.percentile(draws, QUANTILES)
    return float(max(0.5 * (upper - lower), (high - low) / 3.92))


def _combined(both: list[tuple[float, float]]) -> tuple[float, float]:
    """Return the mean over both penalties, half their difference in the uncertainty."""
    (firm, firm_u), (soft, soft_u) = both
    return 0.5 * (firm + soft), float(np.sqrt(0.5 * (firm_u**2 + soft_u**2) + 0.25 * (firm - soft) ** 2))
