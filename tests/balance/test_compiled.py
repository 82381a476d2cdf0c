"""The compiled path against the plain one: equal to 1e-9, and the plain one never loads numba."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest

from specsolve.balance.minima import local_solve, preliminary_lines
from specsolve.balance.options import Options
from specsolve.balance.outside import Outside
from specsolve.balance.problem import Problem
from specsolve.balance.zero_points import ZeroPoints
from tests.balance.conftest import make_star

TRUTH = np.array([4710.0, 2.35, -0.4, 1.55])
SCALE = np.array([250.0, 0.5, 0.5, 0.5])


@pytest.fixture(scope="module")
def star(interpolator):
    return make_star(
        interpolator, TRUTH, rng=np.random.default_rng(11), abundance_error=0.06, width_error=0.03, stated_error=0.03
    )


def reference_zero_points(grid):
    rng = np.random.default_rng(2)
    keys = grid.lines.key.tolist()
    noise = rng.normal(size=len(keys)) * 0.02
    covariance = 0.02**2 * np.eye(len(keys)) + np.outer(noise, noise)
    return ZeroPoints.reference(dict(zip(keys, (7.46 + noise).tolist(), strict=True)), covariance, "invented")


@pytest.mark.parametrize("loss", ["huber", "student", "none"])
@pytest.mark.parametrize("case", ["absolute", "differential", "gravity fixed", "few second lines", "unknown gf errors"])
def test_state_and_solution_agree(star, grid, loss, case):
    import dataclasses

    outside, zero = (), ZeroPoints.solar()
    if case == "differential":
        zero = reference_zero_points(grid)
    if case == "gravity fixed":
        outside = (Outside.fixed("invented", logg=2.35),)
    if case == "few second lines":
        keep = (star.ion == "Fe I") | (np.cumsum(star.ion == "Fe II") <= 4)
        star = dataclasses.replace(star, use=keep)
    if case == "unknown gf errors":
        lines = dataclasses.replace(grid.lines, log_gf_error=np.full(len(grid.lines), np.nan))
        grid = dataclasses.replace(grid, lines=lines)
    options = Options(loss=loss, reduced_width_range=(-6.6, -4.6))
    plain = Problem(star=star, grid=grid, options=options, outside=outside, zero_points=zero)
    compiled = plain.replace(compiled=True)
    theta = TRUTH + np.array([40.0, 0.1, -0.05, 0.1])
    one, two = plain.balance(theta), compiled.balance(theta)
    for name in ("residuals", "jacobian", "covariance_star", "covariance_list", "operator", "response"):
        first, second = getattr(one, name), getattr(two, name)
        np.testing.assert_allclose(second, first, atol=1e-8 * np.abs(first).max(), err_msg=name)
    np.testing.assert_allclose(two.weighting.robust, one.weighting.robust, atol=1e-7)
    np.testing.assert_allclose(two.weighting.scatter, one.weighting.scatter, atol=1e-9)
    np.testing.assert_allclose(two.predicted, one.predicted, atol=1e-9)
    preliminary = preliminary_lines(plain)
    a, b = (local_solve(p, TRUTH, preliminary)[0] for p in (plain, compiled))
    np.testing.assert_allclose(b.theta / SCALE, a.theta / SCALE, atol=1e-9)


def test_the_plain_path_never_loads_numba(star, grid, tmp_path):
    code = (
        "import sys, numpy as np\n"
        "import specsolve\n"
        "from specsolve.balance.star import Star\n"
        "from specsolve.grid.store import ResponseGrid\n"
        f"grid = ResponseGrid.open({str(grid.directory)!r})\n"
        "n = len(grid.lines)\n"
        "star = Star.from_arrays('x', grid.lines.wavelength_air, grid.lines.ion, np.linspace(20.0, 90.0, n))\n"
        "specsolve.solve(star, grid)\n"
        "print('numba' in sys.modules, 'astropy.table' in sys.modules)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=120)
    assert done.stdout.split() == ["False", "False"]
