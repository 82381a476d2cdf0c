"""Matching a star's lines with a list: tolerances, repeats, bad widths, vacuum wavelengths."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.balance.options import Options
from specsolve.balance.outside import Outside, fixed_parameters, whitened_terms
from specsolve.balance.problem import Problem
from specsolve.balance.solve import solve
from specsolve.balance.star import Star, match_lines
from specsolve.lines.wavelengths import air_to_vacuum
from tests.balance.conftest import make_star

THETA = (5772.0, 4.44, 0.0, 1.0)


def test_tolerances(grid):
    lines = grid.lines
    moved = lines.wavelength_air[:3] + np.array([0.04, 0.06, 0.0])
    energy = lines.excitation_potential[:3] + np.array([0.0, 0.0, 0.03])
    star = Star.from_arrays("x", moved, lines.ion[:3], [50.0] * 3, excitation_potential=energy)
    assert match_lines(star, lines).index.tolist() == [0, -1, -1]
    other_ion = Star.from_arrays("x", lines.wavelength_air[:1], ["Fe II"], [50.0])
    assert match_lines(other_ion, lines).index[0] != 0


def test_bad_widths_have_reasons(grid):
    lines = grid.lines
    widths = [np.nan, -5.0, 0.0, 5000.0, 50.0, 50.0]
    use = [True] * 5 + [False]
    star = Star.from_arrays("x", lines.wavelength_air[:6], lines.ion[:6], widths, use=use)
    assert match_lines(star, lines).reason.tolist() == ["bad_width"] * 3 + ["huge_width", "", "marked_unused"]


def test_repeated_lines_keep_the_best_measurement(grid):
    wavelength = [grid.lines.wavelength_air[4]] * 3
    star = Star.from_arrays("x", wavelength, [grid.lines.ion[4]] * 3, [50.0, 52.0, 55.0], [5.0, 1.0, 3.0])
    found = match_lines(star, grid.lines)
    assert found.reason.tolist() == ["repeated", "", "repeated"]
    assert found.n_matched == 3


def test_vacuum_wavelengths_are_noticed(grid, interpolator):
    star = make_star(interpolator, THETA)
    shifted = Star.from_arrays("v", air_to_vacuum(star.wavelength_air), star.ion, star.equivalent_width)
    solution = solve(shifted, grid)
    assert solution.status == "unsolved"
    assert "vacuum" in solution.reason
    assert solution.flags == ("vacuum_wavelengths",)


def test_given_log_gf_overrides_the_list(grid, interpolator):
    """0.2 dex larger log gf for every line: 0.2 dex less iron."""
    star = make_star(interpolator, THETA)
    import dataclasses

    louder = dataclasses.replace(star, log_gf=grid.lines.log_gf[match_lines(star, grid.lines).index] + 0.2)
    fix = {"teff": 5772.0, "logg": 4.44, "vmic": 1.0, "feh": 0.0}
    options = Options(reduced_width_range=(-6.6, -4.5))
    first, second = (solve(s, grid, fix=fix, options=options) for s in (star, louder))
    assert second.fe1.abundance - first.fe1.abundance == pytest.approx(-0.2, abs=1e-9)
    assert np.isnan(second.lines.log_gf_error).all()  # the list's error is not that of another value


def test_cuts_are_listed_with_their_reason(grid, interpolator):
    star = make_star(interpolator, THETA)
    options = Options(excitation_range=(1.0, 4.0), wavelength_range=(5000.0, 6500.0))
    problem = Problem(star=star, grid=grid, options=options)
    lines = grid.lines
    place = problem.match.index
    outside = (lines.excitation_potential[place] < 1.0) | (lines.excitation_potential[place] > 4.0)
    assert (problem.reasons[outside] == "excitation_cut").all()
    assert set(problem.reasons.tolist()) == {"", "excitation_cut", "wavelength_cut"}


def test_identity_depends_on_numbers_not_on_the_name(grid):
    first = Star.from_arrays("a", [5000.0, 6000.0], ["Fe I", "Fe I"], [10.0, 20.0])
    second = Star.from_arrays("b", [6000.0, 5000.0], ["Fe I", "Fe I"], [20.0, 10.0])
    third = Star.from_arrays("a", [5000.0, 6000.0], ["Fe I", "Fe I"], [10.0, 20.1])
    assert first.identity == second.identity != third.identity


def test_outside_terms():
    theta = np.array([5000.0, 3.0, 0.0, 1.5])
    covariance = np.array([[100.0**2, 100.0 * 0.2 * 0.5], [100.0 * 0.2 * 0.5, 0.2**2]])
    known = Outside(names=("teff", "logg"), mean=(5100.0, 3.1), covariance=covariance, source="invented")
    z, jacobian = known.whitened(theta)
    d = np.array([-100.0, -0.1])
    assert z @ z == pytest.approx(d @ np.linalg.inv(covariance) @ d)
    step = np.array([1.0, 0.01, 0.3, 0.2])
    np.testing.assert_allclose(known.whitened(theta + step)[0] - z, jacobian @ step, rtol=1e-12)
    assert whitened_terms((), theta)[0].size == 0


def test_outside_refuses_nonsense():
    with pytest.raises(ValueError, match="different ones of"):
        Outside.fixed("x", gravity=4.0)
    with pytest.raises(ValueError, match="not a finite number"):
        Outside.fixed("x", logg=np.nan)
    with pytest.raises(ValueError, match="symmetric"):
        Outside(names=("teff",), mean=(5000.0,), covariance=np.array([[-1.0]]), source="x")
    with pytest.raises(ValueError, match="not a function"):
        Outside(names=("teff",), mean=(lambda t: (5000.0, 0.0),), covariance=np.zeros((1, 1)), source="x")
    with pytest.raises(ValueError, match="fixed twice"):
        fixed_parameters((Outside.fixed("x", logg=4.0), Outside.fixed("y", logg=4.1)))


def test_options_are_checked_and_travel_as_plain_values():
    options = Options(loss="student", excitation_range=(1, 4))
    assert Options.from_dict({**options.as_dict(), "unknown": 1}) == options
    for wrong in ({"loss": "hampel"}, {"wavelength_range": (6000.0, 5000.0)}, {"fe2_scale": "third"}):
        with pytest.raises(ValueError, match="is"):
            Options(**wrong)
