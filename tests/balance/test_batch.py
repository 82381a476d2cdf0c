"""Many stars: order, executors, bad stars among good ones."""

from __future__ import annotations

from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from multiprocessing import get_context

import numpy as np
import pytest

from specsolve.balance.batch import outside_of, solve_many
from specsolve.balance.outside import Outside
from specsolve.balance.solve import bare_parameters, solve
from specsolve.balance.star import Star
from specsolve.errors import InputError, OutOfGridError, UsageError
from tests.balance.conftest import make_star

TRUTHS = [(5772.0, 4.44, 0.0, 1.0), (4710.0, 2.35, -0.4, 1.55), (6000.0, 4.1, -0.2, 1.3)]


@pytest.fixture(scope="module")
def stars(interpolator):
    rng = np.random.default_rng(8)
    good = [
        make_star(interpolator, t, f"s{i}", rng=rng, abundance_error=0.03, width_error=0.02)
        for i, t in enumerate(TRUTHS)
    ]
    empty = Star.from_arrays("empty", [5000.0, 5001.0], ["Fe I", "Fe I"], [np.nan, -3.0])
    return [good[0], empty, *good[1:]]


def test_one_bad_star_leaves_the_others(stars, grid):
    solutions = solve_many(stars, grid)
    assert [s.star for s in solutions] == ["s0", "empty", "s1", "s2"]
    assert [s.status for s in solutions] == ["solved", "unsolved", "solved", "solved"]
    assert "too few usable lines" in solutions[1].reason
    assert list(solutions[1].lines.reason) == ["bad_width", "bad_width"]
    assert np.isnan(solutions[1].parameters).all()


def test_workers_change_no_bit(stars, grid):
    alone = solve_many(stars, grid)
    with ThreadPoolExecutor(2) as pool:
        threads = solve_many(stars, grid, executor=pool)
    with ProcessPoolExecutor(2, mp_context=get_context("spawn")) as pool:
        processes = solve_many(stars, grid, executor=pool)
    for one, two, three in zip(alone, threads, processes, strict=True):
        assert one.parameters.tobytes() == two.parameters.tobytes() == three.parameters.tobytes()
        assert one.cov_star.tobytes() == three.cov_star.tobytes()


def test_a_failure_inside_one_star_is_told(stars, grid):
    def broken(theta):
        raise ValueError("the invented relation broke")

    known = Outside(names=("logg",), mean=(broken,), covariance=np.array([[0.01]]), source="invented")
    solutions = solve_many(stars, grid, outside={"s1": known})
    assert solutions[2].status == "unsolved"
    assert "the invented relation broke" in solutions[2].reason
    assert "Traceback" in solutions[2].notes[-1]
    assert solutions[0].status == "solved"


def test_an_expected_error_inside_one_star_is_one_sentence(stars, grid):
    def broken(theta):
        raise OutOfGridError("teff", 9000.0, 4000.0, 7000.0)

    known = Outside(names=("logg",), mean=(broken,), covariance=np.array([[0.01]]), source="invented")
    solution = solve_many(stars[:1], grid, outside=known)[0]
    assert solution.status == "unsolved"
    assert "teff = 9000 lies outside the grid" in solution.reason


def test_outside_by_star_and_by_function(stars):
    known = Outside.fixed("invented", logg=4.4)
    assert outside_of(stars[0], {"s0": known}) == (known,)
    assert outside_of(stars[1], {"s0": known}) == ()
    assert outside_of(stars[0], lambda star: known if star.name == "s0" else None) == (known,)
    assert outside_of(stars[0], [known, known]) == (known, known)


def test_star_gives_one_solution_and_a_list_gives_several(stars, grid):
    assert solve(stars[0], grid).star == "s0"
    assert isinstance(solve(stars[:1], grid), tuple)


def test_wrong_arguments(stars, grid):
    with pytest.raises(UsageError, match="not a parameter"):
        solve(stars[0], grid, fix={"gravity": 4.4})
    with pytest.raises(UsageError, match="not a finite number"):
        bare_parameters({"teff": np.nan})
    with pytest.raises(UsageError, match="is not a number"):
        bare_parameters({"teff": "hot"})
    with pytest.raises(UsageError, match="treatment 'xyz'"):
        solve(stars[0], grid, treatment="xyz")
    with pytest.raises(InputError, match="Star"):
        solve([1, 2], grid)
