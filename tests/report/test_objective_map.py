"""The map of the objective: what it shows where, as table and as picture."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from specsolve.balance.minima import search
from specsolve.balance.objective_map import objective_map
from specsolve.balance.options import Options
from specsolve.balance.problem import Problem
from specsolve.balance.samples import Samples
from specsolve.balance.solve import solve_problem
from specsolve.balance.star import Star
from specsolve.balance.tiebreak import rank
from specsolve.constants import SOLAR_IRON
from specsolve.grid.interpolate import Interpolator
from specsolve.report.extras import write_extras
from specsolve.report.objective_map import ELLIPSE, ellipse, map_figure, save_maps
from specsolve.report.tables import read_table
from tests.grid.synthetic import synthetic_grid, synthetic_lines

TRUTH = np.array([5240.0, 3.3, -0.6, 1.3])
WIDE = Options(reduced_width_range=(-6.6, -4.5))


@pytest.fixture(scope="module")
def problem(tmp_path_factory):
    grid = synthetic_grid(tmp_path_factory.mktemp("map"), synthetic_lines(40, 10, seed=5))
    lines = grid.lines
    width = 10.0 ** Interpolator(grid, "lte").widths(TRUTH, np.full(len(lines), SOLAR_IRON + TRUTH[2]))
    width = width * lines.wavelength_air * 1e3
    star = Star.from_arrays(
        "invented",
        lines.wavelength_air,
        lines.ion,
        width,
        0.05 * width,
        excitation_potential=lines.excitation_potential,
    )
    return Problem(star=star, grid=grid, options=WIDE)


@pytest.fixture(scope="module")
def solution(problem):
    solved = solve_problem(problem)
    ranking = rank(problem, search(problem))
    chart = objective_map(problem, ranking.found[0], ranking.candidates, points=(7, 7))
    samples = Samples(np.zeros(3, dtype=int), np.tile(TRUTH, (3, 1)), np.zeros(3), 0.5)
    return dataclasses.replace(solved, objective_map=chart, samples=samples)


def test_the_map_is_lowest_at_the_solution_and_profiled(solution):
    chart = solution.objective_map
    assert chart.teff[0] < solution.teff < chart.teff[-1]
    assert chart.logg[0] < solution.logg < chart.logg[-1]
    i, j = np.unravel_index(np.nanargmin(chart.objective), chart.objective.shape)
    assert abs(chart.teff[i] - solution.teff) <= np.diff(chart.teff)[0]
    assert abs(chart.logg[j] - solution.logg) <= np.diff(chart.logg)[0]
    assert np.isfinite(chart.objective).mean() > 0.8


def test_each_point_is_the_least_over_the_inner_parameters(problem, solution):
    """Moving [Fe/H] or vmic away from the fitted values makes the residuals, in the metric there, no smaller."""
    chart, ranking = solution.objective_map, rank(problem, search(problem))
    allowed = ranking.found[0].allowed
    for i, j in ((1, 1), (3, 3), (5, 4)):
        theta = np.array([chart.teff[i], chart.logg[j], chart.feh[i, j], chart.vmic[i, j]])
        here = problem.balance(theta, allowed)
        assert here.residuals @ np.linalg.solve(here.covariance, here.residuals) == pytest.approx(
            chart.objective[i, j], rel=1e-3, abs=1e-4
        )
        for step in ([0, 0, 0.05, 0], [0, 0, -0.05, 0], [0, 0, 0, 0.1], [0, 0, 0, -0.1]):
            moved = problem.balance(theta + step, allowed).residuals
            value = moved @ np.linalg.solve(here.covariance, moved)
            assert value > chart.objective[i, j] - 0.01 * (1.0 + chart.objective[i, j])


def test_residuals_change_sign_across_the_solution(solution):
    chart = solution.objective_map
    assert np.nanmin(chart.excitation_slope) < 0.0 < np.nanmax(chart.excitation_slope)
    assert np.nanmin(chart.ionization_offset) < 0.0 < np.nanmax(chart.ionization_offset)


def test_tables_are_written_and_read_back(solution, tmp_path):
    paths = write_extras([solution, dataclasses.replace(solution, star="second")], tmp_path / "run.ecsv")
    assert {path.name for path in paths.values()} == {"run_samples.ecsv", "run_map.ecsv"}
    chart = read_table(paths["map"], "map")
    assert len(chart) == 2 * 49
    np.testing.assert_array_equal(np.asarray(chart["objective"])[:49], solution.objective_map.objective.ravel())
    samples = read_table(paths["samples"], "samples")
    assert list(samples["star"]) == ["invented"] * 3 + ["second"] * 3
    np.testing.assert_array_equal(samples["teff"], TRUTH[0])


def test_nothing_is_written_where_nothing_was_asked_for(solution, tmp_path):
    bare = dataclasses.replace(solution, samples=None, objective_map=None)
    assert write_extras([bare], tmp_path / "run") == {}
    assert save_maps([bare], tmp_path, ["run"]) == []


def test_the_picture_shows_every_candidate(solution, tmp_path):
    first = solution.candidates[0]
    second = dataclasses.replace(
        first, index=1, parameters=first.parameters + np.array([120.0, 0.2, 0.0, 0.0]), odds=0.3
    )
    aside = dataclasses.replace(first, index=2, set_aside="the minimum lies at the edge of the grid")
    tied = dataclasses.replace(solution, candidates=(first, second, aside), status="tied")
    figure = map_figure(tied)
    labels = {text.get_text() for text in figure.axes[0].texts}
    assert {"0", "1", "2"} <= labels
    words = " ".join(text.get_text() for text in figure.texts)
    assert "2 minima" in words
    assert "set aside" in words
    paths = save_maps([tied], tmp_path, ["invented_lte"], "png")
    assert paths[0].stat().st_size > 10_000


def test_ellipse_is_the_joint_68_percent_region(solution):
    one = solution.candidates[0]
    away = (ellipse(one) - one.parameters[:2, None]).T
    distance = np.einsum("ni,ij,nj->n", away, np.linalg.inv(one.covariance[:2, :2]), away)
    np.testing.assert_allclose(distance, ELLIPSE, rtol=1e-9)
