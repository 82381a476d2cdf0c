"""Density of the measured widths; the strength axis that is uncorrelated with the abundance residual."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from specsolve.balance.likelihood import minus_two_log_density
from specsolve.balance.strength import line_variances, sigma_log_width, strength_axis


def test_density_is_the_normal_density_of_log_widths(rng):
    """For straight curves of growth ln W is normal: compare with scipy at the maximum over the common abundance."""
    n, slope = 30, rng.uniform(0.3, 1.0, 30)  # dlnW/dA in units of ln 10
    sigma = rng.uniform(0.03, 0.1, n)
    y = 0.2 + rng.normal(size=n) * sigma
    ours = minus_two_log_density(y, sigma**2, 1.0 / slope, np.zeros(n, int))
    mu = np.average(y, weights=sigma**-2)
    ln_slope = slope * np.log(10.0)
    scipy = -2.0 * stats.norm.logpdf(ln_slope * y, ln_slope * mu, ln_slope * sigma).sum() - n * np.log(2.0 * np.pi)
    assert ours == pytest.approx(scipy, rel=1e-12)


def test_insensitive_corner_does_not_win():
    """Halving every dlnW/dA halves nothing in chi2 when the errors follow, but the density of the widths drops to
    less.
    """
    y, n = np.linspace(-0.1, 0.1, 20), 20
    sharp = minus_two_log_density(y, np.full(n, 0.01), np.full(n, 1.0), np.zeros(n, int))
    flat = minus_two_log_density(y, np.full(n, 0.01 + 0.03), np.full(n, 4.0), np.zeros(n, int))
    without_jacobian = (sharp + 2.0 * n * np.log(1.0 / np.log(10.0)), flat + 2.0 * n * np.log(4.0 / np.log(10.0)))
    assert flat - sharp < without_jacobian[1] - without_jacobian[0]


def test_two_groups_have_their_own_abundance(rng):
    y = np.r_[np.zeros(5), np.ones(5)]
    groups = np.r_[np.zeros(5, int), np.ones(5, int)]
    apart = minus_two_log_density(y, np.full(10, 0.01), np.ones(10), groups)
    together = minus_two_log_density(y, np.full(10, 0.01), np.ones(10), np.zeros(10, int))
    assert together - apart == pytest.approx(10 * 0.25 / 0.01)


@pytest.mark.parametrize(("sigma_gf", "sigma_width"), [(0.10, 0.03), (0.02, 0.08), (0.06, 0.06)])
def test_slope_against_the_mixture_is_unbiased(rng, sigma_gf, sigma_width):
    """Weak lines (dA/dlogW = 1), width errors and gf errors: measured widths bias the slope up, predicted ones
    down.
    """
    n = 200_000
    true = rng.uniform(-5.6, -5.0, n)
    gf_error = rng.normal(size=n) * sigma_gf  # assumed minus true log gf
    noise = rng.normal(size=n) * sigma_width
    measured, predicted = true + noise, true + gf_error
    abundance = noise - gf_error
    ones = np.ones(n)
    variances = line_variances(ones, sigma_width * ones, sigma_gf * ones, 0.0 * ones)
    mixture = strength_axis(measured, predicted, variances, sigma_gf * ones)

    def slope(x):
        return float(np.cov(x, abundance)[0, 1] / np.var(x))

    limit = 4.0 * np.std(abundance) / np.std(true) / np.sqrt(n)  # four standard errors
    assert abs(slope(mixture)) < limit
    assert slope(measured) == pytest.approx(sigma_width**2 / np.var(measured), abs=limit)
    assert slope(predicted) == pytest.approx(-(sigma_gf**2) / np.var(predicted), abs=limit)


def test_differential_axis_is_the_prediction(rng):
    measured, predicted = rng.uniform(-6, -5, 10), rng.uniform(-6, -5, 10)
    ones = np.ones(10)
    variances = line_variances(ones, 0.05 * ones, 0.0 * ones, 0.07 * ones)
    np.testing.assert_array_equal(
        strength_axis(measured, predicted, variances, 0.0 * ones, differential=True), predicted
    )


def test_unknown_gf_error_takes_the_line_to_line_term(rng):
    ones = np.ones(4)
    variances = line_variances(ones, 0.05 * ones, np.nan * ones, 0.05 * ones)
    np.testing.assert_allclose(variances.gf, 0.0)
    x = strength_axis(-5.0 * ones, -5.2 * ones, variances, np.nan * ones)
    np.testing.assert_allclose(x, -5.1)


def test_error_of_log_width():
    assert sigma_log_width(np.array([50.0]), np.array([5.0]))[0] == pytest.approx(0.1 / np.log(10.0))
