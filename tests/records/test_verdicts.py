"""A value passes, fails or stays undecided by its limit and guard band (JCGM 106:2012, 8.3)."""

from __future__ import annotations

import math
from typing import Any

import pytest
from scipy import stats

from registry.records.descriptions import Requirement
from registry.records.verdicts import Outcome, Ruling, rule

AT_MOST = Requirement("electron_temperature", at_most=0.2, unit="K")
AT_LEAST = Requirement("electron_temperature", at_least=0.2, unit="K")
U = 0.01


def ruled(requirement: Requirement, value: float | None, u: float | None = U, **more: Any) -> Ruling:
    return rule(requirement, value, u, more.get("nu"), more.get("bound"))


# k of the guard band for k = 2 with nu degrees of freedom: t quantiles of Phi(2) = 0.97725
# (JCGM 100:2008, table G.2, prints 3.31, 2.65 and 2.00 for 95.45 %).
@pytest.mark.parametrize(("nu", "k"), [(3, 3.31), (5, 2.65), (None, 2.00)])
def test_few_degrees_of_freedom_widen_the_guard_band(nu: float | None, k: float) -> None:
    assert ruled(AT_MOST, 0.2 - (k + 0.006) * U, nu=nu).outcome == "pass"
    assert ruled(AT_MOST, 0.2 - (k - 0.006) * U, nu=nu).outcome == "undecided"
    assert ruled(AT_MOST, 0.2 + (k + 0.006) * U, nu=nu).outcome == "fail"


@pytest.mark.parametrize(
    ("sigmas", "outcome"),
    [(-2.01, "pass"), (-1.99, "undecided"), (0, "undecided"), (1.99, "undecided"), (2.01, "fail")],
)
def test_both_sides_of_a_limit_are_judged_alike(sigmas: float, outcome: Outcome) -> None:
    assert ruled(AT_MOST, 0.2 + sigmas * U).outcome == outcome
    assert ruled(AT_LEAST, 0.2 - sigmas * U).outcome == outcome


@pytest.mark.parametrize("nu", [None, 1, 4.5, 30])
@pytest.mark.parametrize("sigmas", [-3.0, -0.5, 0.0, 2.0])
def test_the_probability_is_that_of_the_true_value_inside(sigmas: float, nu: float | None) -> None:
    law = stats.norm() if nu is None else stats.t(nu)
    found = ruled(AT_MOST, 0.2 - sigmas * U, nu=nu).probability
    assert found == pytest.approx(float(law.cdf(sigmas)), abs=1e-9)


@pytest.mark.parametrize(("value", "outcome"), [(0.2, "pass"), (0.2 + 1e-9, "fail"), (0.1, "pass")])
def test_an_exact_value_has_no_band(value: float, outcome: Outcome) -> None:
    found = ruled(AT_MOST, value, 0.0)
    assert found.outcome == outcome
    assert found.probability == (1.0 if outcome == "pass" else 0.0)


def test_without_guard_an_unknown_uncertainty_is_taken_as_exact() -> None:
    plain = Requirement("electron_temperature", at_most=0.2, guard=0.0)
    assert ruled(plain, 0.2, None).outcome == "pass"
    assert ruled(plain, 0.21, None).outcome == "fail"
    assert ruled(plain, 0.21, None).probability is None


@pytest.mark.parametrize(("value", "u"), [(None, U), (None, None), (0.001, None)])
def test_what_is_missing_is_undecided_and_never_a_pass(value: float | None, u: float | None) -> None:
    found = ruled(AT_MOST, value, u)
    assert found.outcome == "undecided"
    assert found.probability is None


@pytest.mark.parametrize(
    ("requirement", "value", "bound", "outcome"),
    [
        (AT_MOST, 0.15, "upper", "pass"),
        (AT_MOST, 0.2, "upper", "pass"),
        (AT_MOST, 0.25, "upper", "undecided"),
        (AT_LEAST, 0.25, "lower", "pass"),
        (AT_LEAST, 0.15, "lower", "undecided"),
        (AT_LEAST, 0.9, "upper", "undecided"),
        (AT_MOST, 0.1, "lower", "undecided"),
    ],
)
def test_a_one_sided_bound_decides_only_on_its_side(
    requirement: Requirement, value: float, bound: str, outcome: Outcome
) -> None:
    assert ruled(requirement, value, bound=bound).outcome == outcome


@pytest.mark.parametrize(
    ("requirement", "value", "bound"), [(AT_MOST, 0.25, "lower"), (AT_LEAST, 0.15, "upper")]
)
def test_a_bound_wholly_beyond_the_limit_fails(requirement: Requirement, value: float, bound: str) -> None:
    assert ruled(requirement, value, bound=bound).outcome == "fail"


def test_a_limit_of_zero_is_a_limit() -> None:
    assert ruled(Requirement("lever_arm", at_most=0.0), -1.0).outcome == "pass"
    assert ruled(Requirement("lever_arm", at_least=0.0), -1.0).outcome == "fail"


def test_the_sentence_has_limit_value_and_band() -> None:
    sentence = ruled(AT_MOST, 0.15).sentence
    assert all(part in sentence for part in ("at most 0.2 K", "0.15", "± 0.01", "0.02"))
    assert not math.isnan(ruled(AT_MOST, 0.15).probability or 0.0)
