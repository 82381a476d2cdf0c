"""The balance as a linear operator: against plain least squares, and its covariance against random draws."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.balance.residuals import (
    balance_operator,
    deviations,
    mean_operator,
    plane_operator,
    residual_covariance,
    residual_vector,
)


@pytest.fixture
def lines(rng):
    n1, n2 = 40, 9
    is_fe2 = np.r_[np.zeros(n1, bool), np.ones(n2, bool)]
    chi = rng.uniform(0.0, 5.0, n1 + n2)
    x = rng.uniform(-6.0, -4.8, n1 + n2)
    weights = rng.uniform(50.0, 900.0, n1 + n2)
    return is_fe2, chi, x, weights


def test_plane_is_weighted_least_squares(lines, rng):
    _is_fe2, chi, x, weights = (v[:40] for v in lines)
    y = rng.normal(7.5, 0.1, 40)
    root = np.sqrt(weights)
    design = np.column_stack([np.ones(40), chi - np.average(chi, weights=weights), x - np.average(x, weights=weights)])
    expected = np.linalg.lstsq(design * root[:, None], y * root, rcond=None)[0]
    np.testing.assert_allclose(plane_operator(chi, x, weights) @ y, expected, rtol=1e-11)


def test_exact_plane_is_recovered(lines):
    is_fe2, chi, x, weights = lines
    y = np.where(is_fe2, 7.30, 7.50 + 0.02 * (chi - np.average(chi[~is_fe2], weights=weights[~is_fe2])))
    y = y + np.where(is_fe2, 0.0, -0.07 * (x - np.average(x[~is_fe2], weights=weights[~is_fe2])))
    r = residual_vector(balance_operator(is_fe2, chi, x, weights), y, mh=0.1)
    np.testing.assert_allclose(r[[0, 1, 3]], [0.02, 0.20, -0.07], atol=1e-12)
    np.testing.assert_allclose(r[2], np.average(y, weights=weights) - 0.1, atol=1e-12)
    np.testing.assert_allclose(deviations(is_fe2, chi, x, weights, y), 0.0, atol=1e-12)


def test_covariance_is_that_of_random_draws(lines, rng):
    is_fe2, chi, x, weights = lines
    g = balance_operator(is_fe2, chi, x, weights)
    variances = 1.0 / weights
    draws = rng.normal(size=(20000, weights.size)) * np.sqrt(variances)
    sample = np.cov((draws @ g.T).T)
    c = residual_covariance(g, variances)
    scale = np.sqrt(np.outer(np.diag(c), np.diag(c)))
    # 20000 draws: correlation coefficients to 1/sqrt(20000) = 0.007, variances to 1 %
    np.testing.assert_allclose(sample / scale, c / scale, atol=0.035)


def test_slope_covariance_is_the_least_squares_one(lines):
    is_fe2, chi, x, weights = lines
    first = ~is_fe2
    c = residual_covariance(balance_operator(is_fe2, chi, x, weights), 1.0 / weights)
    columns = np.stack([chi[first], x[first]])
    columns = columns - (columns @ weights[first] / weights[first].sum())[:, None]
    expected = np.linalg.inv((columns * weights[first]) @ columns.T)
    np.testing.assert_allclose(c[np.ix_([0, 3], [0, 3])], expected, rtol=1e-10)


def test_full_covariance_of_lines(lines, rng):
    is_fe2, chi, x, weights = lines
    g = balance_operator(is_fe2, chi, x, weights)
    shared = rng.normal(size=weights.size) * 0.01
    v = np.diag(1.0 / weights) + np.outer(shared, shared)
    np.testing.assert_allclose(
        residual_covariance(g, v), residual_covariance(g, 1.0 / weights) + np.outer(g @ shared, g @ shared), rtol=1e-12
    )


def test_common_axis_of_excitation_and_strength_has_no_plane(lines):
    _is_fe2, chi, _, weights = lines
    operator = plane_operator(chi, -6.0 + 0.2 * chi, weights)
    assert np.isnan(operator[1:]).all()
    assert np.isfinite(operator[0]).all()


def test_without_spread_in_excitation_the_strength_slope_is_that_of_a_line(lines, rng):
    _, _, x, weights = lines
    y = 7.5 + 0.1 * x
    operator = plane_operator(np.full(x.size, 2.5), x, weights)
    assert np.isnan(operator[1]).all()
    np.testing.assert_allclose(operator[2] @ y, 0.1, rtol=1e-12)


def test_zero_weight_lines_do_not_count(lines, rng):
    is_fe2, chi, x, weights = lines
    y = rng.normal(7.5, 0.1, weights.size)
    weights = np.where(np.arange(weights.size) % 5 == 0, 0.0, weights)
    keep = weights > 0
    full = balance_operator(is_fe2, chi, x, weights) @ y
    part = balance_operator(is_fe2[keep], chi[keep], x[keep], weights[keep]) @ y[keep]
    np.testing.assert_allclose(full, part, atol=1e-11)  # rounding of sums of abundances near 7.5


def test_no_second_ion_leaves_no_ionization_offset(lines):
    is_fe2, chi, x, weights = lines
    operator = balance_operator(is_fe2, chi, x, np.where(is_fe2, 0.0, weights))
    assert np.isnan(operator[1]).all()
    assert np.isfinite(operator[[0, 2, 3]]).all()
    assert np.isnan(mean_operator(np.zeros(3))).all()


def test_metallicity_from_the_first_ion_alone(lines, rng):
    is_fe2, chi, x, weights = lines
    y = rng.normal(7.5, 0.1, weights.size)
    operator = balance_operator(is_fe2, chi, x, weights, metallicity_from_fe1=True)
    np.testing.assert_allclose(operator[2] @ y, np.average(y[~is_fe2], weights=weights[~is_fe2]), rtol=1e-12)
