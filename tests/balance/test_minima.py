"""More than one balance: surfaces built so that several parameter sets give one star's widths."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.balance.minima import search
from specsolve.balance.options import Options
from specsolve.balance.outside import Outside
from specsolve.balance.problem import Problem
from specsolve.balance.scan import scan_nodes, seeds_from_scan
from specsolve.balance.solve import solve, solve_problem
from specsolve.grid.axes import DEFAULT_DA, DEFAULT_VMIC, UNITS, Axis
from specsolve.grid.codes import encode
from specsolve.grid.interpolate import Interpolator
from specsolve.grid.store import ResponseGrid
from specsolve.grid.write import write_grid
from tests.balance.conftest import make_star
from tests.grid.synthetic import LOGG, TEFF, synthetic_lines, synthetic_log_widths

WIDE = Options(reduced_width_range=(-6.6, -4.5))
CENTRE, AMPLITUDE = 5500.0, 450.0  # K
SCALE = np.array([250.0, 0.5, 0.5, 0.5])


def fold(teff):
    """Temperature that the widths feel: falls around 5500 K, so that three temperatures share a range of values."""
    return teff - 2.0 * AMPLITUDE * np.sin(np.pi * (teff - CENTRE) / 800.0) * np.exp(-(((teff - CENTRE) / 700.0) ** 4))


@pytest.fixture(scope="module")
def folded(tmp_path_factory) -> Interpolator:
    """The synthetic responses with the temperature axis folded, on a finer axis so that the cubic follows the
    fold.
    """
    lines = synthetic_lines(40, 10, seed=5)
    axes = {
        "teff": np.arange(4500.0, 6501.0, 125.0),
        "logg": LOGG[6:10],
        "mh": np.array([-1.0, -0.5, 0.0, 0.5]),
        "vmic": np.asarray(DEFAULT_VMIC)[:6],
        "dA": np.asarray(DEFAULT_DA),
    }
    mesh = np.meshgrid(fold(axes["teff"]), *list(axes.values())[1:], indexing="ij")
    codes = encode(np.moveaxis(synthetic_log_widths(lines, *mesh), -1, 3))
    directory = tmp_path_factory.mktemp("folded") / "grid"
    write_grid(
        directory,
        {"lte": codes},
        lines,
        node_axes=[Axis(n, UNITS[n], axes[n]) for n in ("teff", "logg", "mh")],
        line_axes=[Axis(n, UNITS[n], axes[n]) for n in ("vmic", "dA")],
        missing={"lte": {}},
        atmospheres_identity="0" * 64,
        description="Invented responses with three temperatures for one star",
    )
    return Interpolator(ResponseGrid.open(directory), "lte")


def temperatures_of(value: float) -> np.ndarray:
    """All temperatures of the axis that the fold sends to one value."""
    t = np.linspace(4500.003, 6499.998, 400_001)
    f = fold(t) - value
    return t[:-1][np.sign(f[:-1]) != np.sign(f[1:])]


def test_all_three_roots_are_found(folded):
    truth = np.array([5530.0, 4.0, -0.2, 1.2])
    expected = temperatures_of(float(fold(truth[0])))
    assert expected.size == 3  # the construction
    found = search(Problem(star=make_star(folded, truth), grid=folded.grid, options=WIDE)).found
    roots = sorted(
        item.minimum.theta[0] for item in found if item.minimum.objective < 1.0 and "outside_grid" not in item.flags
    )
    # the cubic through 125 K nodes follows the fold to some K
    for temperature in expected:
        assert min(abs(root - temperature) for root in roots) < 25.0
    exact = min(found, key=lambda item: np.max(np.abs(item.minimum.theta - truth) / SCALE))
    np.testing.assert_allclose((exact.minimum.theta - truth) / SCALE, 0.0, atol=1e-7)


def test_equal_candidates_are_tied_and_listed_in_a_fixed_order(folded):
    truth = np.array([5530.0, 4.0, -0.2, 1.2])
    star = make_star(folded, truth, stated_error=0.05)
    solution = solve(star, folded.grid, options=WIDE)
    assert solution.status == "tied"
    near = [c for c in solution.candidates if c.odds > 0.0]
    assert len(near) >= 2
    assert sum(c.odds for c in near) == pytest.approx(1.0)
    again = solve(star, folded.grid, options=WIDE)
    assert [tuple(c.parameters) for c in again.candidates] == [tuple(c.parameters) for c in solution.candidates]
    kinds = [d.kind for d in solution.decisions]
    assert "vmic_relation" in kinds
    assert "tied" in kinds


def test_outside_temperature_unties(folded):
    truth = np.array([5530.0, 4.0, -0.2, 1.2])
    star = make_star(folded, truth, stated_error=0.05)
    known = Outside.gaussian("invented photometry", teff=(5560.0, 60.0))
    solution = solve(star, folded.grid, outside=known, options=WIDE)
    assert solution.status == "solved"
    assert abs(solution.teff - 5530.0) < 30.0
    assert len(solution.candidates) > 1


def test_decisions_number_their_steps(folded):
    solution = solve(make_star(folded, (5530.0, 4.0, -0.2, 1.2)), folded.grid, options=WIDE)
    assert [d.step for d in solution.decisions] == list(range(1, len(solution.decisions) + 1))
    assert solution.decisions[0].kind == "search"


def test_star_beyond_the_grid_says_so(folded):
    """The star is metal-richer than the grid's last node: the best point lies on the face and is not called a
    solution.
    """
    star = make_star(folded, (5000.0, 4.0, 0.5, 1.0), feh=0.9)
    solution = solve(star, folded.grid, options=Options(reduced_width_range=(-6.6, -4.0)))
    assert solution.status == "outside_grid"
    assert "feh = 0.5" in solution.reason
    assert "outside_grid" in solution.flags


def test_fixed_value_outside_the_grid(folded):
    solution = solve(make_star(folded, (5000.0, 4.0, 0.0, 1.0)), folded.grid, fix={"logg": 1.0}, options=WIDE)
    assert solution.status == "outside_grid"
    assert "logg = 1" in solution.reason


def test_candidate_beside_a_missing_node_is_reported_with_its_flag(tmp_path):
    from tests.grid.synthetic import synthetic_grid

    lines = synthetic_lines(40, 10, seed=5)
    hole = tuple((t, 4.0, m) for t in (5250.0,) for m in (-0.5, 0.0))
    whole = Interpolator(synthetic_grid(tmp_path, lines, missing=(), name="whole"), "lte")
    holed = synthetic_grid(tmp_path, lines, missing=hole, name="holed")
    truth = (5600.0, 4.2, -0.2, 1.2)  # in the next cell but one: whole corners, neighbours missing
    star = make_star(whole, truth)
    solution = solve_problem(Problem(star=star, grid=holed, options=WIDE))
    assert "beside_missing_node" in solution.flags
    assert solution.status == "solved"
    np.testing.assert_allclose((solution.parameters - truth) / SCALE, 0.0, atol=0.1)


def test_seeds_depend_on_the_scan_alone(folded):
    problem = Problem(star=make_star(folded, (5530.0, 4.0, -0.2, 1.2)), grid=folded.grid, options=WIDE)
    allowed = np.ones(problem.rows.size, bool)
    scan = scan_nodes(problem, allowed)
    assert scan.residuals.shape[-1] == 4
    seeds = seeds_from_scan(problem, scan)
    assert all(np.isfinite(seed.theta).all() for seed in seeds)
    assert [s.chi2 for s in seeds] == sorted(s.chi2 for s in seeds)
    assert TEFF.min() <= min(s.theta[0] for s in seeds)
