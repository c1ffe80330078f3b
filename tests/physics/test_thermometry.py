from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from registry.errors import InputError
from registry.physics.lineshapes import BOLTZMANN_EV, SINGLE_LEVEL_FWHM
from registry.physics.result import Given
from registry.physics.thermometry import run
from registry.samples import FloatArray, Samples

from .series_tables import one, score, table

Likely = Callable[[int, int, float, float], bool]
NAME = "base_electron_temperature"
SINGLE = {"width": Given("single-level")}


def _t(n: int = 12) -> FloatArray:
    return np.geomspace(0.015, 1.0, n)


def _electrons(t: FloatArray, base: float = 0.1, exponent: float = 3.0) -> FloatArray:
    return (base**exponent + t**exponent) ** (1.0 / exponent)


def _kelvin(y: FloatArray, **more: FloatArray) -> Samples:
    return table(_t(y.size), {"T_e": y, **more}, "T_mc", "K", "K")


def _widths(y: FloatArray, arm: float = 0.1) -> Samples:
    return table(_t(y.size), {"width": SINGLE_LEVEL_FWHM * BOLTZMANN_EV * y / arm}, "T_mc", "K")


def _scatter(seed: int, n: int = 12, size: float = 0.02) -> FloatArray:
    return np.exp(size * np.random.default_rng(seed).normal(size=n))


def test_temperatures_give_the_base_temperature_back() -> None:
    result = run(_kelvin(_electrons(_t()) * _scatter(1)), {})
    assert abs(score(one(result, NAME), 0.1)) < 4.0
    assert any("coupling exponent" in warning for warning in result.warnings)


def test_widths_give_base_temperature_and_lever_arm_without_either_known() -> None:
    result = run(_widths(_electrons(_t()) * _scatter(2)), SINGLE)
    assert abs(score(one(result, NAME), 0.1)) < 4.0
    assert abs(score(one(result, "lever_arm"), 0.1)) < 4.0


def test_the_base_temperature_needs_no_kind_of_width() -> None:
    result = run(_widths(_electrons(_t()) * _scatter(2)), {})
    assert one(result, NAME) == one(run(_widths(_electrons(_t()) * _scatter(2)), SINGLE), NAME)
    assert "which width" in str(one(result, "lever_arm").why)


def test_what_the_lever_arm_contributes_is_what_another_one_would_change() -> None:
    samples = _widths(_electrons(_t(8)) * _scatter(3, 8))
    at, above = (one(run(samples, SINGLE | {"lever_arm": Given(arm, 0.005)}), NAME) for arm in (0.1, 0.1002))
    assert at.value is not None
    assert above.value is not None
    assert at.shared["lever_arm"] == pytest.approx(0.005 * (above.value - at.value) / 0.0002, rel=0.25)


def test_electrons_as_cold_as_the_refrigerator_get_an_upper_bound() -> None:
    quantity = one(run(_kelvin(_t() * _scatter(4)), {}), NAME)
    assert quantity.bound == "upper"
    assert quantity.value is not None
    assert 0.0 < quantity.value < 0.1


def test_stated_uncertainties_too_small_are_enlarged() -> None:
    y = _electrons(_t()) * _scatter(5, size=0.05)
    result = run(_kelvin(y, T_e_u=0.005 * y), {})
    assert any("enlarged" in warning for warning in result.warnings)
    assert abs(score(one(result, NAME), 0.1)) < 4.0


FLAWS: dict[str, tuple[Callable[[FloatArray], FloatArray], str]] = {
    "too few": (lambda t: np.where(np.arange(t.size) < 6, t, np.nan), "too few"),
    "negative": (lambda t: t - 0.1, "above zero"),
    "flat": (lambda t: 0.1 * _scatter(6), "hardly grow"),
    "scattered": (lambda t: _electrons(t) * _scatter(7, size=0.5), "scatter"),
    "no bend reached": (lambda t: _electrons(t, 2.0), "hardly grow|no bend|not told"),
    "a step": (lambda t: np.where(t < 0.12, 0.1, 0.3) * _scatter(8), "scatter|misfit"),
}


@pytest.mark.parametrize("flaw", FLAWS)
def test_what_does_not_follow_the_law_gets_no_temperature(flaw: str) -> None:
    make, reason = FLAWS[flaw]
    result = run(_widths(make(_t())), SINGLE)
    assert result.refused is not None
    assert any(part in result.refused for part in reason.split("|"))
    assert all(q.value is None for q in result.quantities)


def test_a_signal_in_ampere_is_an_input_error() -> None:
    with pytest.raises(InputError, match="width in V or a temperature in K"):
        run(table(_t(), {"I": _t()}, "T_mc", "K", "A"), {})


def test_an_axis_in_volts_is_an_input_error() -> None:
    with pytest.raises(InputError, match="one in K is wanted"):
        run(table(_t(), {"width": _t()}), {})


def _check(draws: int, likely: Likely) -> None:
    """Base temperature (three kinds of knowledge of the scale in turn) and lever arm cover the truth."""
    rng, scores, arms = np.random.default_rng(9), [], []
    for k in range(draws):
        n, base, exponent = (8, 12, 20)[k % 3], rng.uniform(0.05, 0.15), rng.choice([2.0, 3.0, 4.0, 5.0])
        y = _electrons(_t(n), base, exponent) * np.exp(rng.choice([0.02, 0.05]) * rng.normal(size=n))
        kind = k // 3 % 3
        given = SINGLE | ({"lever_arm": Given(0.1 * (1.0 + 0.05 * rng.normal()), 0.005)} if kind == 2 else {})
        result = run(_widths(y) if kind else _kelvin(y), given if kind else {})
        if result.refused is None and one(result, NAME).bound is None:
            scores.append(score(one(result, NAME), base))
            if kind == 1:
                arms.append(score(one(result, "lever_arm"), 0.1))
    assert likely(len(scores), draws, 0.98, 1.0)
    for found in (np.array(scores), np.array(arms)):
        assert likely(int(np.sum(np.abs(found) < 1.0)), found.size, 0.62, 0.73)
        assert likely(int(np.sum(np.abs(found) < 1.96)), found.size, 0.90, 0.97)
        assert abs(np.mean(found)) < 0.15 + 3.9 / np.sqrt(found.size)


def test_intervals_cover_the_truth_in_a_small_sample(likely: Likely) -> None:
    _check(54, likely)


@pytest.mark.slow
def test_intervals_cover_the_truth_in_2000_draws(likely: Likely) -> None:
    _check(2000, likely)
