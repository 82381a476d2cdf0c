"""Covariances by origin, influence and sensitivities against solving again."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from specsolve.balance.minima import local_solve, preliminary_lines
from specsolve.balance.options import Options
from specsolve.balance.outside import Outside
from specsolve.balance.problem import Problem
from specsolve.balance.solve import solve
from specsolve.balance.uncertainty import line_influence, parameter_covariances, parameter_gain
from tests.balance.conftest import make_star

WIDE = Options(reduced_width_range=(-6.6, -4.5), loss="none")
TRUTH = np.array([4710.0, 2.35, -0.4, 1.55])
SCALE = np.array([250.0, 0.5, 0.5, 0.5])


@pytest.fixture(scope="module")
def problem(interpolator):
    star = make_star(
        interpolator, TRUTH, rng=np.random.default_rng(5), abundance_error=0.01, width_error=0.01, stated_error=0.03
    )
    return Problem(star=star, grid=interpolator.grid, options=WIDE)


@pytest.fixture(scope="module")
def minimum(problem):
    return local_solve(problem, TRUTH, preliminary_lines(problem))[0]


def test_jacobian_of_the_residuals(problem, minimum):
    """With plain weights only the strength axis and the errors move beside the abundances: 3 % of the largest
    entry.
    """
    state = minimum.state
    numeric = np.zeros((4, 4))
    for k, step in enumerate(SCALE * 1e-3):
        up, down = minimum.theta.copy(), minimum.theta.copy()
        up[k] += step
        down[k] -= step
        numeric[:, k] = (problem.balance(up, state.used).residuals - problem.balance(down, state.used).residuals) / (
            2 * step
        )
    scaled = state.jacobian * SCALE
    np.testing.assert_allclose(numeric * SCALE, scaled, atol=0.03 * np.abs(scaled).max())


def test_influence_is_what_leaving_the_line_out_does(problem, minimum):
    influence = line_influence(problem, minimum.state)
    used = np.flatnonzero(minimum.state.used)
    strongest = used[np.argsort(-np.max(np.abs(influence[used] / SCALE), axis=1))[:3]]
    for line in strongest:
        without = problem.replace(dropped={int(problem.rows[line]): "left out"})
        again, _ = local_solve(without, minimum.theta, preliminary_lines(without))
        change = (again.theta - minimum.theta) / SCALE
        np.testing.assert_allclose(influence[line] / SCALE, change, atol=0.12 * np.abs(change).max() + 0.004)


def test_sensitivities_are_those_of_the_abundances(problem, interpolator):
    solution = solve(problem.star, interpolator.grid, options=WIDE)
    row = next(s for s in solution.sensitivities if s.parameter == "teff" and s.shift > 0)
    shifted = solution.parameters + np.array([100.0, 0.0, 0.0, 0.0])
    again = solve(
        problem.star,
        interpolator.grid,
        fix=dict(zip(("teff", "logg", "feh", "vmic"), shifted, strict=True)),
        options=WIDE,
    )
    # the weights of the second solve are those at its own point
    assert again.fe1.abundance - solution.fe1.abundance == pytest.approx(row.d_fe1, abs=0.004)
    assert again.fe2.abundance - solution.fe2.abundance == pytest.approx(row.d_fe2, abs=0.004)
    assert len(solution.sensitivities) == 8


def test_sensitivity_beyond_the_grid_is_nan(interpolator):
    solution = solve(make_star(interpolator, (6950.0, 4.2, -0.2, 1.3)), interpolator.grid, options=WIDE)
    plus, minus = (s for s in solution.sensitivities if s.parameter == "teff")
    assert np.isnan(plus.d_fe1)
    assert np.isfinite(minus.d_fe1)


def test_errors_scale_with_the_widths_errors(interpolator):
    """Noise-free star, so no line-to-line term: twice the stated errors, twice Cov_star's roots."""
    lines = interpolator.grid.lines
    exact = dataclasses.replace(lines, log_gf_error=np.zeros(len(lines)))
    grid = dataclasses.replace(interpolator.grid, lines=exact)
    errors = []
    for stated in (0.01, 0.02):
        star = make_star(interpolator, TRUTH, stated_error=stated)
        problem = Problem(star=star, grid=grid, options=WIDE)
        state = local_solve(problem, TRUTH, preliminary_lines(problem))[0].state
        star_part, list_part = parameter_covariances(problem, state)
        np.testing.assert_allclose(list_part, 0.0, atol=1e-20)
        errors.append(np.sqrt(np.diag(star_part)))
    np.testing.assert_allclose(errors[1] / errors[0], 2.0, rtol=1e-6)


def test_list_part_is_the_gf_errors_alone(problem, minimum):
    star_part, list_part = parameter_covariances(problem, minimum.state)
    gain = parameter_gain(problem, minimum.state)
    np.testing.assert_allclose(list_part / np.outer(SCALE, SCALE),
                               gain @ minimum.state.covariance_list @ gain.T / np.outer(SCALE, SCALE), rtol=1e-6,
                               atol=1e-12)  # fmt: skip
    assert (np.linalg.eigvalsh(star_part / np.outer(SCALE, SCALE)) > 0).all()


def test_a_sharp_outside_term_takes_over_the_error(interpolator):
    star = make_star(interpolator, TRUTH, stated_error=0.04)
    solution = solve(star, interpolator.grid, outside=Outside.gaussian("invented", teff=(4710.0, 1.0)), options=WIDE)
    assert solution.errors_star[0] == pytest.approx(1.0, rel=0.02)


def test_continuum_term_is_a_two_percent_change_of_widths(interpolator):
    star = make_star(interpolator, TRUTH, stated_error=0.03)
    first = solve(star, interpolator.grid, options=WIDE)
    more = dataclasses.replace(
        star, equivalent_width=star.equivalent_width * 1.02, equivalent_width_error=star.equivalent_width_error * 1.02
    )
    second = solve(more, interpolator.grid, options=WIDE)
    change = (second.parameters - first.parameters) / SCALE
    np.testing.assert_allclose(first.systematics["continuum"] / SCALE, change, atol=0.15 * np.abs(change).max() + 0.002)
