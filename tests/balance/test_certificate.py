"""The account that a search gives of itself."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.balance.minima import search
from specsolve.balance.options import Options
from specsolve.balance.problem import Problem
from specsolve.balance.scan import scan_nodes, starts_from_scan
from specsolve.balance.solve import solve_problem
from tests.balance.conftest import make_star
from tests.grid.synthetic import synthetic_grid, synthetic_lines

WIDE = Options(reduced_width_range=(-6.6, -4.5))
TRUTH = (5300.0, 3.6, -0.3, 1.2)


@pytest.fixture(scope="module")
def problem(interpolator):
    star = make_star(interpolator, TRUTH, rng=np.random.default_rng(8), abundance_error=0.05, width_error=0.02)
    return Problem(star=star, grid=interpolator.grid, options=WIDE)


def test_the_sums_come_out(problem):
    result = search(problem)
    account = result.certificate
    assert account.complete
    assert account.n_nodes + account.n_blank == np.prod(problem.grid.node_shape) * len(problem.grid.axes["vmic"])
    assert account.n_refined == account.n_distinct + account.n_same + account.n_failed
    assert account.n_distinct == len(result.found)
    assert account.n_starts <= account.n_landed + account.n_lattice
    assert 0 < account.n_landed <= account.n_kept <= account.n_cells + account.n_partial


def test_a_limit_on_starts_is_said(problem):
    limited = problem.replace(options=Options(reduced_width_range=(-6.6, -4.5), max_seeds=1))
    solution = solve_problem(limited)
    assert not search(limited).certificate.complete
    assert "more starting points than the limit" in solution.decisions[0].reason


def test_the_cell_of_the_truth_is_kept_and_its_step_lands_near(problem):
    scan = scan_nodes(problem, np.ones(problem.rows.size, bool))
    starts = starts_from_scan(problem, scan)
    away = [np.max(np.abs(seed.theta - TRUTH) / np.array([250.0, 0.5, 0.5, 0.5])) for seed in starts.seeds]
    assert min(away) < 1.0
    assert starts.n_kept < 0.05 * starts.n_cells  # most of the grid is ruled out


def test_missing_nodes_are_counted(tmp_path):
    lines = synthetic_lines(40, 10, seed=5)
    whole = synthetic_grid(tmp_path, lines, missing=(), name="whole")
    holed = synthetic_grid(tmp_path, lines, missing=((5250.0, 4.0, -0.5),), name="holed")
    from specsolve.grid.interpolate import Interpolator

    star = make_star(Interpolator(whole, "lte"), (5600.0, 4.2, -0.2, 1.2))
    accounts = [search(Problem(star=star, grid=grid, options=WIDE)).certificate for grid in (whole, holed)]
    assert accounts[1].n_blank - accounts[0].n_blank == len(whole.axes["vmic"])
    assert accounts[1].n_partial > accounts[0].n_partial
