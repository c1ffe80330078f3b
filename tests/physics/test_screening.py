from __future__ import annotations

import numpy as np
import pytest

from registry.physics.result import Refusal
from registry.physics.screening import longest_run, screen
from registry.samples import FloatArray

RNG = np.random.default_rng(1)
NOISY = RNG.normal(size=100) + np.linspace(0.0, 30.0, 100)

BAD: dict[str, tuple[FloatArray, str]] = {
    "short": (NOISY[:9], "9 samples are too few"),
    "dead": (np.full(50, 0.3), "equal"),
    "two values": (np.arange(50.0) % 2, "2 different values"),
    "clipped above": (np.minimum(NOISY, 20.0), "upper limit"),
    "clipped below": (np.maximum(NOISY, 5.0), "lower limit"),
    "clipped on both sides": (np.clip(NOISY, 8.0, 20.0), "clipped"),
    "clipped and digitised": (np.rint(np.minimum(NOISY, 15.0)), "upper limit"),
    "beyond all units": (1e200 * NOISY, "no measurement"),
    "below all units": (1e-200 * NOISY, "no measurement"),
}


@pytest.mark.parametrize("flaw", BAD)
def test_a_trace_that_is_no_measurement_is_refused(flaw: str) -> None:
    y, reason = BAD[flaw]
    with pytest.raises(Refusal, match=reason):
        screen(y, 10)


@pytest.mark.parametrize("y", [NOISY, np.round(NOISY), -NOISY, 1e-15 * NOISY, NOISY + 1e6])
def test_a_good_trace_passes(y: FloatArray) -> None:
    screen(y, 10)


@pytest.mark.parametrize(
    ("flags", "run"), [([], 0), ([0, 0], 0), ([1, 1, 0, 1], 2), ([0, 1, 1, 1], 3), ([1], 1)]
)
def test_the_longest_run_is_counted(flags: list[int], run: int) -> None:
    assert longest_run(np.array(flags, dtype=bool)) == run
