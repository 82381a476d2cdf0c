"""Leaving each line out in closed form against doing it."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from specsolve.balance.influence import leave_one_out, residual_changes
from specsolve.balance.minima import local_solve, preliminary_lines
from specsolve.balance.options import Options
from specsolve.balance.outside import Outside
from specsolve.balance.problem import Problem
from specsolve.balance.uncertainty import line_influence
from tests.balance.conftest import make_star

TRUTH = (5300.0, 3.6, -0.3, 1.2)


def solved_state(interpolator, rng, loss="huber", outside=(), fe2=14):
    star = make_star(interpolator, TRUTH, rng=rng, abundance_error=0.05, width_error=0.02)
    second = np.flatnonzero(star.ion == "Fe II")[fe2:]
    star = dataclasses.replace(star, use=~np.isin(np.arange(len(star)), second))
    options = Options(reduced_width_range=(-6.6, -4.5), loss=loss)
    problem = Problem(star=star, grid=interpolator.grid, outside=outside, options=options)
    minimum, _ = local_solve(problem, np.array(TRUTH), preliminary_lines(problem))
    return problem, minimum.state


@pytest.mark.parametrize("loss", ["huber", "none", "student"])
@pytest.mark.parametrize("fixed", [{}, {"logg": 3.6}, {"teff": 5300.0, "vmic": 1.2}])
def test_closed_form_equals_leaving_each_out(interpolator, rng, loss, fixed):
    outside = (Outside.fixed("invented", **fixed),) if fixed else ()
    problem, state = solved_state(interpolator, rng, loss, outside)
    assert residual_changes(problem, state) is not None
    expected = line_influence(problem, state)
    scale = np.nanmax(np.abs(expected), axis=0) + 1e-12
    np.testing.assert_allclose(leave_one_out(problem, state) / scale, expected / scale, atol=1e-8)


def test_where_one_line_decides_it_is_left_out_by_hand(interpolator, rng):
    problem, state = solved_state(interpolator, rng, fe2=1)
    assert residual_changes(problem, state) is None
    np.testing.assert_array_equal(leave_one_out(problem, state), line_influence(problem, state))
