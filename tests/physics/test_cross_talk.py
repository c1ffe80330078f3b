from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from registry.errors import InputError
from registry.physics.cross_matrix import assemble
from registry.physics.cross_talk import run
from registry.physics.result import Given, Quantity, Result
from registry.samples import FloatArray

from .series_tables import one, score, table

Noise = Callable[..., FloatArray]
Likely = Callable[[int, int, float, float], bool]
IndexArray = NDArray[np.intp]
NAME = "cross_capacitance_ratio"
NOISE = 2e-4


def _x(n: int = 20) -> FloatArray:
    return np.linspace(0.0, 0.1, n)


def test_an_exact_line_gives_its_ratio_back() -> None:
    result = run(table(_x(), {"P1": 0.5 - 0.35 * _x()}), {})
    assert result.refused is None
    assert one(result, NAME, "P1<-P2").value == pytest.approx(0.35, rel=1e-9)
    assert one(result, NAME).value == pytest.approx(0.35, rel=1e-9)


@pytest.mark.parametrize("order", [np.arange(20)[::-1], np.random.default_rng(0).permutation(20)])
def test_the_order_of_the_points_does_not_matter(order: IndexArray, noise: Noise) -> None:
    y = 0.5 - 0.35 * _x() + NOISE * noise(20, 0.0, np.random.default_rng(1))
    result = run(table(_x()[order], {"P1": y[order]}), {})
    assert abs(score(one(result, NAME), 0.35)) < 4.0


def test_several_dots_give_a_row_each_and_say_what_is_missing(noise: Noise) -> None:
    rng = np.random.default_rng(2)
    columns = {f"P{k}": 0.5 - ratio * _x() + NOISE * noise(20, 0.0, rng) for k, ratio in ((1, 0.3), (3, 0.1))}
    result = run(table(_x(), columns), {})
    assert [q.subject for q in result.quantities] == ["P1<-P2", "P3<-P2"]
    assert any("P1<-P3, P3<-P1" in warning for warning in result.warnings)
    assert result.covariance is not None
    assert result.covariance.shape == (len(result.parameters),) * 2


def test_names_can_be_given_where_the_table_has_others() -> None:
    given = {"gate": Given("P1"), "against": Given("B1")}
    result = run(table(_x(), {"position": 0.5 - 0.2 * _x()}), given)
    assert one(result, NAME, "P1<-B1").value == pytest.approx(0.2, rel=1e-9)


def test_a_column_of_uncertainties_is_used_and_never_undercut(noise: Noise) -> None:
    y = 0.5 - 0.3 * _x()
    y += 1e-6 * noise(20, 0.0, np.random.default_rng(3))
    result = run(table(_x(), {"P1": y, "P1_u": np.full(20, 1e-3)}), {})
    least = 1e-3 / np.sqrt(20.0) / np.std(_x())
    u = one(result, NAME).standard_uncertainty
    assert u is not None
    assert u > 0.99 * least


def test_one_charge_jump_is_fitted_along_and_said(noise: Noise) -> None:
    y = 0.5 - 0.3 * _x() + NOISE * noise(20, 0.0, np.random.default_rng(4)) + 0.01 * (np.arange(20) >= 8)
    result = run(table(_x(), {"P1": y}), {})
    assert abs(score(one(result, NAME), 0.3)) < 4.0
    assert any("jump of 0.01" in warning for warning in result.warnings)


FLAWS: dict[str, tuple[Callable[[FloatArray, FloatArray], FloatArray], str]] = {
    "too few": (lambda x, y: np.where(np.arange(x.size) < 5, y, np.nan), "too few"),
    "infinite": (lambda x, y: np.where(np.arange(x.size) == 3, np.inf, y), "infinite"),
    "never moved": (lambda x, y: np.full(x.size, 0.5), "same at all points"),
    "curved": (lambda x, y: y - 20.0 * (x - 0.05) ** 2, "curve"),
    "two jumps": (
        lambda x, y: y + 0.02 * (np.arange(x.size) >= 6) + 0.03 * (np.arange(x.size) >= 13),
        "more than",
    ),
    "jump at the end": (lambda x, y: y + 0.02 * (np.arange(x.size) >= 19), "jumps after point"),
    "too noisy": (lambda x, y: y + 0.02 * np.cos(7.0 * np.arange(x.size) ** 2), "uncertain"),
}


@pytest.mark.parametrize("flaw", FLAWS)
def test_what_is_no_line_gets_no_ratio(flaw: str, noise: Noise) -> None:
    make, reason = FLAWS[flaw]
    y = 0.5 - 0.3 * _x() + NOISE * noise(20, 0.0, np.random.default_rng(5))
    result = run(table(_x(), {"P1": make(_x(), y)}), {})
    assert result.refused is not None
    assert reason in result.refused
    assert all(q.value is None for q in result.quantities)


def test_a_few_rows_without_a_number_are_left_out(noise: Noise) -> None:
    y = 0.5 - 0.3 * _x() + NOISE * noise(20, 0.0, np.random.default_rng(6))
    y[[2, 19]] = np.nan
    result = run(table(_x(), {"P1": y}), {})
    assert abs(score(one(result, NAME), 0.3)) < 4.0
    assert any("2 rows of P1" in warning for warning in result.warnings)


@pytest.mark.parametrize("unit", ["A", "K"])
def test_positions_in_another_unit_are_an_input_error(unit: str) -> None:
    with pytest.raises(InputError, match="V are wanted"):
        run(table(_x(), {"P1": _x()}, unit=unit), {})


def test_a_gate_against_itself_is_an_input_error() -> None:
    with pytest.raises(InputError, match="both the own and the other"):
        run(table(_x(), {"P2": _x()}), {})


def test_a_matrix_holds_ones_means_and_gaps() -> None:
    found = [
        Quantity(NAME, "1", 0.30, 0.01, subject="P1<-P2"),
        Quantity(NAME, "1", 0.34, 0.01, subject="P1<-P2"),
        Quantity(NAME, "1", 0.10, 0.02, subject="P2<-P3"),
    ]
    matrix = assemble(found)
    assert matrix.gates == ("P1", "P2", "P3")
    assert matrix.ratio[0] == pytest.approx([1.0, 0.32, np.nan], nan_ok=True)
    assert matrix.u[0, 1] == pytest.approx(0.02)
    assert matrix.missing == ("P1<-P3", "P2<-P1")


def _calibrate(draws: int, noise: Noise) -> tuple[int, FloatArray]:
    """How many were answered, and two-sided chances (t) of the errors."""
    rng, chances = np.random.default_rng(7), []
    for k in range(draws):
        n, ratio = (8, 12, 20)[k % 3], rng.uniform(0.0, 0.6)
        y = 0.5 - ratio * _x(n) + NOISE * noise(n, (0.0, 0.5, 1.0)[k // 3 % 3], rng)
        result: Result = run(table(_x(n), {"P1": y}), {})
        if result.refused is None:
            quantity = one(result, NAME)
            assert quantity.degrees_of_freedom is not None
            chances.append(2.0 * stats.t.sf(abs(score(quantity, ratio)), quantity.degrees_of_freedom))
    return len(chances), np.array(chances)


def _check(draws: int, noise: Noise, likely: Likely) -> None:
    answers, chances = _calibrate(draws, noise)
    assert likely(answers, draws, 0.98, 1.0)
    assert likely(int(np.sum(chances > 0.317)), answers, 0.66, 0.88)
    assert likely(int(np.sum(chances > 0.05)), answers, 0.93, 0.995)


def test_intervals_cover_the_truth_in_a_small_sample(noise: Noise, likely: Likely) -> None:
    _check(54, noise, likely)


@pytest.mark.slow
def test_intervals_cover_the_truth_in_2000_draws(noise: Noise, likely: Likely) -> None:
    _check(2000, noise, likely)
