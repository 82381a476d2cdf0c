"""Problems rebuilt from the tables of a solve are the problems that were solved."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.errors import InputError, SpecsolveError, StoreError
from specsolve.report.tables import read_table, write_table
from specsolve.uses.local import point_at, solve_near
from specsolve.uses.results import Results, rebuild, used_lines
from specsolve.uses.shared_errors import list_modes


@pytest.fixture(scope="module")
def points(result_file, grid):
    results = Results.of(result_file)
    problems = rebuild(results, grid)
    rows = np.flatnonzero(results.solved)
    return [
        (problem, point_at(problem, results.theta[row], used_lines(results, row, problem)))
        for row, problem in zip(rows, problems, strict=True)
    ]


def test_covariances_come_back(points, solutions):
    for (_, point), solution in zip(points, solutions, strict=True):
        np.testing.assert_allclose(point.cov_list, solution.cov_list, rtol=1e-4, atol=1e-9)
        np.testing.assert_allclose(np.diag(point.cov_star), np.diag(solution.cov_star), rtol=1e-4)


def test_solving_again_from_there_changes_nothing(points, solutions):
    problem, _ = points[0]
    again = solve_near(problem, solutions[0].parameters)
    np.testing.assert_allclose(again.theta, solutions[0].parameters, rtol=1e-6, atol=1e-5)


def test_modes_hold_the_shared_errors_once(points, solutions):
    problems, found = zip(*points, strict=True)
    modes = list_modes(problems, found)
    for i, solution in enumerate(solutions):
        np.testing.assert_allclose(modes[i] @ modes[i].T, solution.cov_list, rtol=2e-3, atol=1e-9)
    correlation = (modes[0] @ modes[1].T)[2, 2] / np.sqrt((modes[0] @ modes[0].T)[2, 2] * (modes[1] @ modes[1].T)[2, 2])
    assert correlation > 0.3  # two dwarfs on one list share most of its error in [Fe/H]


def test_bad_results(result_file, grid, tmp_path, solutions):
    with pytest.raises(InputError, match="no such file"):
        Results.of(tmp_path / "nothing.ecsv")
    for kind in ("lines", "candidates", "decisions"):
        name = f"members_{kind}.ecsv"
        (tmp_path / name).write_bytes((result_file.parent / name).read_bytes())
    stars = read_table(result_file, "stars")
    stars.meta["schema"] = 99
    write_table(stars, tmp_path / "members.ecsv")
    with pytest.raises(StoreError, match="schema 99"):
        Results.of(tmp_path / "members.ecsv")
    stars.meta["schema"] = 1
    stars["grid_identity"][:] = "0" * len(stars["grid_identity"][0])
    write_table(stars, tmp_path / "members.ecsv")
    with pytest.raises(StoreError, match="another grid"):
        rebuild(Results.of(tmp_path / "members.ecsv"), grid)
    with pytest.raises(SpecsolveError, match="twice"):
        Results.of([solutions[0], solutions[0]])
    with pytest.raises(InputError, match="no star"):
        Results.of([])
