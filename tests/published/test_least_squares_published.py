"""Generalised least squares against certified regression results."""

from __future__ import annotations

import numpy as np
import pytest

from registry.physics.noise import NoiseModel, gls_fit

# NIST StRD, Linear Least Squares Regression, "Norris" (calibration of ozone monitors)
X = [0.2, 337.4, 118.2, 884.6, 10.1, 226.5, 666.3, 996.3, 448.6, 777.0, 558.2, 0.4]
X += [0.6, 775.5, 666.9, 338.0, 447.5, 11.6, 556.0, 228.1, 995.8, 887.6, 120.2, 0.3]
X += [0.3, 556.8, 339.1, 887.2, 999.0, 779.0, 11.1, 118.3, 229.2, 669.1, 448.9, 0.5]
Y = [0.1, 338.8, 118.1, 888.0, 9.2, 228.1, 668.5, 998.5, 449.1, 778.9, 559.2, 0.3]
Y += [0.1, 778.1, 668.8, 339.3, 448.9, 10.8, 557.7, 228.3, 998.0, 888.8, 119.6, 0.3]
Y += [0.6, 557.6, 339.3, 888.0, 998.5, 778.9, 10.2, 117.6, 228.9, 668.4, 449.2, 0.2]
CERTIFIED = (-0.262323073774029, 1.00211681802045)
CERTIFIED_SD = (0.232818234301152, 0.429796848199937e-03)
RESIDUAL_SD, RESIDUAL_SS = 0.884796396144373, 26.6173985294224


def test_norris_is_fitted_to_its_certified_digits() -> None:
    design = np.column_stack([np.ones(36), X])
    fit = gls_fit(np.array(Y), design, NoiseModel(RESIDUAL_SD**2, 0.0, 1.0))
    np.testing.assert_allclose(fit.coefficients, CERTIFIED, rtol=1e-11)
    np.testing.assert_allclose(np.sqrt(np.diag(fit.covariance)), CERTIFIED_SD, rtol=1e-11)
    assert float(fit.residuals @ fit.residuals) == pytest.approx(RESIDUAL_SS, rel=1e-11)
