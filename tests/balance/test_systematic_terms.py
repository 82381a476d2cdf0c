"""Systematic terms of first order against solving again on responses that are moved as a whole."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.balance.minima import FoundMinimum, local_solve, preliminary_lines
from specsolve.balance.problem import Problem
from specsolve.balance.star import Star
from specsolve.balance.systematics import PERTURBATION_STEPS, stored_responses, systematic_shifts
from specsolve.constants import SOLAR_IRON
from specsolve.grid.interpolate import Interpolator
from specsolve.grid.perturbed import perturbed_grid
from specsolve.grid.store import ResponseGrid
from specsolve.matter.composition import alpha_law

SCALE = np.array([250.0, 0.5, 0.5, 0.5])
STARS = {"dwarf": (5750.0, 4.4, -0.1, 1.1), "giant": (4800.0, 2.3, -1.6, 1.6)}


@pytest.fixture(scope="module")
def packaged() -> ResponseGrid:
    return ResponseGrid.packaged()


def solved(grid, star, start) -> tuple[Problem, FoundMinimum]:
    problem = Problem(star=star, grid=grid, treatment="lte")
    minimum, allowed = local_solve(problem, np.array(start), preliminary_lines(problem))
    assert minimum.converged
    return problem, FoundMinimum(minimum, allowed, 1, ())


def star_of(grid, theta) -> Star:
    lines = grid.lines
    log_w = Interpolator(grid, "lte").widths(theta, np.full(len(lines), SOLAR_IRON + theta[2]))
    seen = np.isfinite(log_w) & (log_w > -6.3) & (log_w < -4.6) & (lines.grade <= 3)
    width = (lines.wavelength_air * 1e3 * 10.0**log_w)[seen]
    return Star.from_arrays(
        "invented", lines.wavelength_air[seen], lines.ion[seen], width, 0.03 * width,
        excitation_potential=lines.excitation_potential[seen],
    )  # fmt: skip


@pytest.mark.parametrize("kind", list(STARS))
def test_terms_of_stored_responses(packaged, kind):
    """15 % of the largest shift, in steps of the grid: the terms are first order, and weights and lines follow."""
    theta = STARS[kind]
    star = star_of(packaged, theta)
    problem, item = solved(packaged, star, theta)
    shifts, _ = systematic_shifts(problem, item, None)
    moved = {
        "missing_opacity": perturbed_grid(packaged, None, missing_opacity=PERTURBATION_STEPS["missing_opacity"]),
        "alpha": perturbed_grid(packaged, alpha_law(theta[2]) + PERTURBATION_STEPS["alpha"]),
    }
    for name, other in moved.items():
        _, again = solved(other, star, theta)
        change = (again.minimum.theta - item.minimum.theta) / SCALE
        # One number of [alpha/Fe] at all nodes is a step that grows with [Fe/H] where the law falls.
        allowed = 0.15 if name == "missing_opacity" else 0.3
        np.testing.assert_allclose(shifts[name] / SCALE, change, atol=allowed * np.abs(change).max() + 0.003)


def test_a_grid_without_stored_responses_has_no_such_term(interpolator):
    assert stored_responses(interpolator.grid) is None


def test_names_are_those_of_the_documentation():
    from specsolve.balance import systematics

    for name in ("continuum", "solar_iron", *PERTURBATION_STEPS, "fe2_scale"):
        assert f"| {name} |" in systematics.__doc__
