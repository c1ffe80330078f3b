"""Is there one interdot transition in a trace, whole and resolved?

Refuses what is none: noise, a line, a cubic, a jump between two samples, a step that fills
the sweep or sticks out of it, two steps.  Each reason tells the numbers that decided.
"""

from __future__ import annotations

import numpy as np

from registry.physics.interdot_fit import TEN_TO_NINETY_THERMAL, GapRow, design_of
from registry.physics.lineshapes import fermi_step
from registry.physics.noise import profile_log_likelihood
from registry.physics.result import Refusal
from registry.physics.step_fit import StepFit, candidates, gains
from registry.samples import FloatArray

__all__ = ["FEWEST_SAMPLES", "judge", "judge_start"]

#: Samples below which neither noise nor transition can be told.
FEWEST_SAMPLES = 30
#: Log-likelihood a transition must gain over a straight line, and over a cubic.
GAIN_OVER_LINE = 8.0
GAIN_OVER_CUBIC = 4.0
#: Log-likelihood a second step must gain to count as one, and its least relative size.
GAIN_OF_SECOND = 10.0
SECOND_SIZE = 0.2
#: The step must be this many times its standard uncertainty, and its sample-to-sample noise.
STEP_SIGNIFICANCE = 5.0
LEAST_SNR = 5.0
#: The 10-90 % width in sampling steps (narrower: a jump between two samples), ...
NARROWEST = 1.75
#: ... as a share of the swept range at most, ...
WIDEST = 0.45
#: ... and how many of it lie between the transition and either end of the sweep at least.
INSIDE = 1.0
#: Largest relative uncertainty of the width.
WIDTH_UNCERTAINTY = 0.3


def judge(z: FloatArray, y: FloatArray, row: GapRow) -> tuple[str, ...]:
    """Refuse what is no single interdot transition; return warnings about one that is.

    Args:
        z: reduced axis (-1 ... 1), shape (n,), in order of time; ``y``: scaled signal.
        row: the fits of the transition.

    Raises:
        Refusal: saying which test failed and by how much.
    """
    _judge_step(z, y, row)
    return _judge_second(z, y, row)


def _judge_step(z: FloatArray, y: FloatArray, row: GapRow) -> None:
    """Refuse what is no step: noise, a line or a cubic does as well."""
    best = row.best
    step, u = 2.0 * abs(float(best.parameters[2])), 2.0 * float(np.sqrt(best.covariance[2, 2]))
    _judge_size(step / row.noise.white_rms())
    if step < STEP_SIGNIFICANCE * u:
        raise Refusal(f"the step is only {step / u:.2g} times its uncertainty, {STEP_SIGNIFICANCE:g} needed")
    likelihood = profile_log_likelihood(y, design_of(best, z)[:, :3])
    for degree, wanted, curve in ((1, GAIN_OVER_LINE, "straight line"), (3, GAIN_OVER_CUBIC, "cubic")):
        gain = likelihood - profile_log_likelihood(y, np.vander(z, degree + 1))
        if gain < wanted:
            raise Refusal(
                f"a {curve} explains the trace (log-likelihood gain of a transition {gain:.2g} < {wanted:g})"
            )


def _judge_size(snr: float) -> None:
    """Refuse a step that is small beside the noise of a sample."""
    if snr < LEAST_SNR:
        raise Refusal(f"the step is only {snr:.2g} times the noise of a sample, {LEAST_SNR:g} are needed")


def judge_start(z: FloatArray, step: StepFit) -> None:
    """Refuse a step too small, too narrow, too wide, too near an end, or of unknown width.

    Args:
        z: reduced axis, shape (n,).
        step: the Fermi step fitted to the trace, which tells size and width.

    Raises:
        Refusal: saying which test failed and by how much.
    """
    _judge_size(abs(float(step.parameters[2])) / step.noise.white_rms())
    width = TEN_TO_NINETY_THERMAL * float(np.exp(step.parameters[4]))
    relative = float(np.sqrt(step.covariance[4, 4]))
    sampling = 2.0 / (z.size - 1)
    room = max(1.0 - abs(float(step.parameters[3])), 0.0)
    if width < NARROWEST * sampling:
        raise Refusal(
            f"the transition is a jump: {width / sampling:.2g} sampling steps wide (10-90 %), {NARROWEST:g} "
            "needed (a charge jump, or too coarse a sweep)"
        )
    if width > WIDEST * 2.0:
        raise Refusal(f"the transition fills {width / 2.0:.0%} of the sweep, {WIDEST:.0%} are allowed")
    if room < INSIDE * width:
        raise Refusal(
            f"the transition lies {room / width:.2g} of its 10-90 % widths inside, {INSIDE:g} needed"
        )
    if relative > WIDTH_UNCERTAINTY:
        raise Refusal(f"the width is uncertain by {relative:.0%}, {WIDTH_UNCERTAINTY:.0%} are allowed")


def _judge_second(z: FloatArray, y: FloatArray, row: GapRow) -> tuple[str, ...]:
    """Refuse a trace with a second step of comparable size; warn of a small one."""
    best = row.best
    known = np.column_stack([design_of(best, z), row.jacobian(z)[:, 4:]])
    rest = y - best.model(z)
    centre, width = candidates(z)
    shapes = fermi_step((z[:, None] - centre) / width)
    amplitude, gain, _ = gains(z, rest, shapes, row.noise, known)
    at = int(np.argmax(gain))
    if gain[at] < 0.5 * GAIN_OF_SECOND:
        return ()
    wider = np.column_stack([known, shapes[:, at]])
    true_gain = profile_log_likelihood(rest, wider) - profile_log_likelihood(rest, known)
    if true_gain < GAIN_OF_SECOND:
        return ()
    share = abs(float(amplitude[at] / (2.0 * best.parameters[2])))
    if share > SECOND_SIZE:
        raise Refusal(f"more than one step: a second one of {share:.0%} of the first")
    return (f"a second, small step ({share:.0%} of the first) is in the trace",)
