"""Stars of the synthetic grid come back: exactly without noise, with honest errors with it, in any order and unit."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from specsolve.balance.minima import local_solve, preliminary_lines, search
from specsolve.balance.options import Options
from specsolve.balance.outside import Outside
from specsolve.balance.problem import Problem
from specsolve.balance.solve import solve, solve_problem
from specsolve.balance.star import Star
from specsolve.balance.uncertainty import parameter_covariances
from tests.balance.conftest import make_star

# Lines of every strength take part here: the synthetic star's widths follow no observer's choice.
WIDE = Options(reduced_width_range=(-6.6, -4.5))
TRUTHS = [(5772.0, 4.44, 0.0, 1.0), (4710.0, 2.35, -0.4, 1.55), (5240.0, 3.3, -1.1, 1.3), (6120.0, 3.9, 0.2, 1.45)]
SCALE = np.array([250.0, 0.5, 0.5, 0.5])


@pytest.mark.parametrize("truth", TRUTHS)
def test_without_noise_the_truth_is_a_candidate_to_numerical_precision(interpolator, truth):
    """From the whole grid, no guess. Rounding of widths leaves 1e-9; the steps end at 1e-9 of a cell."""
    solution = solve_problem(Problem(star=make_star(interpolator, truth), grid=interpolator.grid, options=WIDE))
    assert solution.status == "solved", solution.reason
    np.testing.assert_allclose((solution.parameters - truth) / SCALE, 0.0, atol=1e-7)
    np.testing.assert_allclose(solution.residuals, 0.0, atol=1e-8)
    assert solution.fe1.line_to_line == 0.0
    assert solution.fe1.abundance == pytest.approx(7.46 + truth[2], abs=1e-7)


def test_order_of_lines_changes_no_bit(interpolator, rng):
    star = make_star(interpolator, TRUTHS[1], rng=rng, abundance_error=0.05, width_error=0.03)
    order = rng.permutation(len(star))
    shuffled = Star.from_arrays(
        star.name,
        star.wavelength_air[order],
        star.ion[order],
        star.equivalent_width[order],
        star.equivalent_width_error[order],
        excitation_potential=star.excitation_potential[order],
    )
    first = solve_problem(Problem(star=star, grid=interpolator.grid))
    second = solve_problem(Problem(star=shuffled, grid=interpolator.grid))
    assert star.identity == shuffled.identity
    for name in ("parameters", "cov_star", "cov_list", "residuals"):
        assert getattr(first, name).tobytes() == getattr(second, name).tobytes(), name
    assert first.lines.abundance.tobytes() == second.lines.abundance.tobytes()


def test_units_of_the_table_change_nothing(interpolator, rng):
    from astropy import units as u
    from astropy.table import QTable

    star = make_star(interpolator, TRUTHS[0], rng=rng, abundance_error=0.05, width_error=0.03)
    table = QTable(
        {
            "wavelength_air": star.wavelength_air * u.AA,
            "ion": star.ion,
            "excitation_potential": star.excitation_potential * u.eV,
            "equivalent_width": star.equivalent_width * u.mAA,
            "equivalent_width_error": star.equivalent_width_error * u.mAA,
        }
    )
    other = QTable(table)
    other["wavelength_air"] = other["wavelength_air"].to("nm")
    other["equivalent_width"] = other["equivalent_width"].to("um")
    other["equivalent_width_error"] = other["equivalent_width_error"].to("AA")
    other["excitation_potential"] = other["excitation_potential"].to("J")
    (first,), (second,) = (solve(t, interpolator.grid) for t in (table, other))
    np.testing.assert_allclose(first.parameters / SCALE, second.parameters / SCALE, atol=1e-9)


def test_fixed_quantity_has_units(interpolator):
    from astropy import units as u

    star = make_star(interpolator, TRUTHS[0])
    solution = solve(star, interpolator.grid, fix={"teff": 5.772 * u.kK, "vmic": 1000.0 * u.m / u.s}, options=WIDE)
    assert solution.parameters[0] == pytest.approx(5772.0, abs=1e-9)
    np.testing.assert_allclose((solution.parameters - TRUTHS[0]) / SCALE, 0.0, atol=1e-7)
    assert solution.fixed == ("teff", "vmic")


def test_tenth_of_the_lines_blended(interpolator, rng):
    """Blends add 0.4 dex to a tenth of Fe I. Least squares is thrown off; the robust fit stays within its errors."""
    truth = np.array(TRUTHS[1])
    star = make_star(interpolator, truth, rng=rng, abundance_error=0.03, width_error=0.02)
    first = np.flatnonzero(star.ion == "Fe I")
    bad = rng.choice(first, size=first.size // 10, replace=False)
    width = star.equivalent_width.copy()
    width[bad] *= 10.0**0.4
    blended = dataclasses.replace(star, equivalent_width=width)
    clean, robust, plain = (
        solve_problem(Problem(star=s, grid=interpolator.grid, options=dataclasses.replace(WIDE, loss=loss)))
        for s, loss in ((star, "huber"), (blended, "huber"), (blended, "none"))
    )
    shift_robust = np.abs(robust.parameters - clean.parameters) / SCALE
    shift_plain = np.abs(plain.parameters - clean.parameters) / SCALE
    assert shift_robust.max() < 0.5 * shift_plain.max()
    assert (np.abs(robust.parameters - truth) < 4.0 * robust.errors).all()
    listed = robust.lines.reason == "down_weighted"
    rows = np.isin(robust.lines.wavelength_air.round(3), blended.wavelength_air[bad].round(3))
    used = robust.lines.used & rows
    assert (listed[used]).all()


@pytest.mark.parametrize(
    ("name", "residual"),
    [
        ("teff", "excitation_slope"),
        ("logg", "ionization_offset"),
        ("vmic", "strength_slope"),
        ("feh", "metallicity_offset"),
    ],
)
def test_a_fixed_parameter_removes_its_residual(interpolator, name, residual):
    """Fixed off the truth: the others balance, the removed residual is reported and is not zero."""
    truth = np.array(TRUTHS[1])
    place = ("teff", "logg", "feh", "vmic").index(name)
    value = float(truth[place] + 0.3 * SCALE[place])
    star = make_star(interpolator, truth)
    solution = solve(star, interpolator.grid, fix={name: value}, options=WIDE)
    assert solution.status == "solved"
    assert solution.parameters[place] == value
    assert solution.removed_residuals == (residual,)
    index = ("excitation_slope", "ionization_offset", "metallicity_offset", "strength_slope").index(residual)
    assert abs(solution.residuals[index]) > 1e-3
    np.testing.assert_allclose(np.delete(solution.residuals, index), 0.0, atol=1e-7)
    assert (solution.cov_star[place] == 0.0).all()
    assert (solution.cov_list[:, place] == 0.0).all()


def test_fixed_at_the_truth_gives_the_truth(interpolator):
    solution = solve(make_star(interpolator, TRUTHS[1]), interpolator.grid, fix={"logg": TRUTHS[1][1]}, options=WIDE)
    np.testing.assert_allclose((solution.parameters - TRUTHS[1]) / SCALE, 0.0, atol=1e-7)


def test_all_four_fixed_reports_all_residuals(interpolator):
    star = make_star(interpolator, TRUTHS[0], ion_offset=0.1)
    fix = dict(zip(("teff", "logg", "feh", "vmic"), TRUTHS[0], strict=True))
    solution = solve(star, interpolator.grid, fix=fix, options=WIDE)
    assert solution.residuals[1] == pytest.approx(0.1, abs=1e-6)
    assert len(solution.removed_residuals) == 4


def test_without_second_ion_gravity_must_be_fixed(interpolator):
    star = make_star(interpolator, TRUTHS[0])
    star = dataclasses.replace(star, use=star.ion == "Fe I")
    free = solve(star, interpolator.grid, options=WIDE)
    assert free.status == "unsolved"
    assert "fix logg" in free.reason
    fixed = solve(star, interpolator.grid, fix={"logg": TRUTHS[0][1]}, options=WIDE)
    np.testing.assert_allclose((fixed.parameters - TRUTHS[0]) / SCALE, 0.0, atol=1e-7)
    assert np.isnan(fixed.fe2.abundance)
    assert "few_fe2_lines" in fixed.flags


def test_gravity_fixed_takes_the_metallicity_from_the_first_ion(interpolator):
    star = make_star(interpolator, TRUTHS[0], ion_offset=0.12)
    solution = solve(star, interpolator.grid, fix={"logg": TRUTHS[0][1], "teff": 5772.0, "vmic": 1.0}, options=WIDE)
    assert solution.residuals[2] == pytest.approx(0.0, abs=1e-8)
    assert solution.fe1.feh == pytest.approx(solution.feh, abs=1e-8)
    assert solution.fe1.feh - solution.fe2.feh == pytest.approx(solution.residuals[1], abs=1e-12)


def test_gaussian_outside_pulls_by_the_inverse_variances(interpolator):
    """One outside gravity, 0.2 dex off: the answer is the weighted mean of it and of what the lines say (linear
    limit).
    """
    star = make_star(interpolator, TRUTHS[1], stated_error=0.05)
    alone = solve(star, interpolator.grid, options=WIDE)
    sigma = float(alone.errors[1])
    known = Outside.gaussian("invented", logg=(alone.logg + 0.2, sigma))
    both = solve(star, interpolator.grid, outside=known, options=WIDE)
    assert both.logg - alone.logg == pytest.approx(0.1, abs=0.015)
    assert both.errors[1] == pytest.approx(sigma / np.sqrt(2.0), rel=0.1)
    assert both.chi2 == pytest.approx(0.2**2 / (2.0 * sigma**2), rel=0.1)


def test_gravity_that_follows_the_temperature(interpolator):
    """A parallax gravity depends on Teff; tight, it holds its relation, not a number."""

    def mean(theta):
        return 4.44 + 4.0 * np.log10(theta[0] / 5772.0), np.array([4.0 / (theta[0] * np.log(10.0)), 0.0, 0.0, 0.0])

    known = Outside(names=("logg",), mean=(mean,), covariance=np.array([[1e-10]]), source="invented parallax")
    star = make_star(interpolator, (5700.0, 4.30, -0.1, 1.1))
    solution = solve(star, interpolator.grid, outside=known, options=WIDE)
    assert solution.logg == pytest.approx(mean(solution.parameters)[0], abs=1e-4)
    assert abs(solution.logg - 4.44) > 0.005


def pulls(interpolator, rng, n_stars, gf_per_star):
    """(theta - truth)/error for stars started at the truth; widths and gf drawn anew for each star."""
    truth = np.array(TRUTHS[1])
    out = []
    for _ in range(n_stars):
        star = make_star(interpolator, truth, rng=None, stated_error=0.04)
        factor = 1.0 + 0.04 * rng.normal(size=len(star))
        shift = 0.05 * rng.normal(size=len(star)) if gf_per_star else 0.0
        star = dataclasses.replace(
            star, equivalent_width=star.equivalent_width * factor, equivalent_width_error=0.04 * star.equivalent_width
        )
        problem = Problem(star=star, grid=interpolator.grid, options=WIDE, compiled=True)
        if gf_per_star:  # the true log gf differ from the list's by their error
            given = problem.grid.lines.log_gf[problem.match.index] + shift
            sigma = np.full(len(star), 0.05)
            star = dataclasses.replace(star, log_gf=given, log_gf_error=sigma)
            problem = Problem(star=star, grid=interpolator.grid, options=WIDE, compiled=True)
        minimum, _ = local_solve(problem, truth, preliminary_lines(problem))
        assert minimum.converged
        star_part, list_part = parameter_covariances(problem, minimum.state)
        total = star_part + list_part if gf_per_star else star_part
        out.append((minimum.theta - truth) / np.sqrt(np.diag(total)))
    return np.array(out)


@pytest.mark.parametrize("gf_per_star", [False, True])
def test_pulls_have_unit_width(interpolator, rng, gf_per_star):
    """Width noise of 4 % against Cov_star; gf errors of 0.05 dex added, against Cov_star + Cov_list."""
    n = 100
    found = pulls(interpolator, rng, n, gf_per_star)
    # standard error of a standard deviation: 1/sqrt(2 n) = 0.07; of a mean 0.1
    np.testing.assert_allclose(found.std(axis=0), 1.0, atol=0.28)
    np.testing.assert_allclose(found.mean(axis=0), 0.0, atol=0.45)


def test_search_reports_what_it_looked_at(interpolator):
    problem = Problem(star=make_star(interpolator, TRUTHS[0]), grid=interpolator.grid, options=WIDE)
    result = search(problem)
    valid = problem.grid.node_valid("lte").sum() * 8
    assert 0.5 * valid < result.n_nodes <= valid
    assert result.n_refined <= result.n_seeds
