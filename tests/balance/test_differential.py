"""Zero points from a reference star, and our own Sun."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from specsolve.balance.differential import reference_star
from specsolve.balance.options import Options
from specsolve.balance.own_sun import SUN_LOGG, SUN_TEFF_K, SolarLines, solar_lines, solar_star
from specsolve.balance.solve import solve
from specsolve.balance.zero_points import ZeroPoints
from specsolve.errors import InputError
from specsolve.lines import default_line_list
from tests.balance.conftest import make_star

WIDE = Options(reduced_width_range=(-6.6, -4.5))
SCALE = np.array([250.0, 0.5, 0.5, 0.5])
REFERENCE = {"teff": 5772.0, "logg": 4.438, "feh": 0.0}


def wrong_gf(star, shift):
    """The star with log gf that are wrong by `shift` a line: abundances move by its negative."""
    return dataclasses.replace(star, log_gf=shift)


@pytest.fixture
def pair(interpolator, rng):
    """A star and its reference, both on a list whose gf are wrong by 0.3 dex rms."""
    lines = interpolator.grid.lines
    truth = (5850.0, 4.30, 0.1, 1.15)
    reference = make_star(interpolator, (5772.0, 4.438, 0.0, 1.0), name="reference", feh=0.0)
    star = make_star(interpolator, truth, name="target")
    shift = 0.1 * rng.normal(size=len(lines))
    given = lines.log_gf + shift
    return wrong_gf(star, given), wrong_gf(reference, given), np.array(truth)


def test_wrong_log_gf_cancel(interpolator, pair):
    """gf wrong by 0.1 dex rms: they cancel; what remains comes from the microturbulence that they give the
    reference.
    """
    star, reference, truth = pair
    absolute = solve(star, interpolator.grid, options=WIDE)
    differential = solve(
        star,
        interpolator.grid,
        reference=reference,
        reference_parameters={**REFERENCE, "vmic": 1.0},
        options=WIDE,
    )
    np.testing.assert_allclose((differential.parameters - truth) / SCALE, 0.0, atol=1e-6)
    assert np.abs((absolute.parameters - truth) / SCALE).max() > 0.05
    assert "reference" in differential.zero_point_source


def test_reference_against_itself_returns_its_parameters(interpolator, pair):
    _, reference, _ = pair
    found = reference_star(reference, interpolator.grid, parameters=REFERENCE, options=WIDE)
    solution = solve(reference, interpolator.grid, reference=reference, reference_parameters=REFERENCE, options=WIDE)
    np.testing.assert_allclose((solution.parameters - found.theta) / SCALE, 0.0, atol=1e-6)
    np.testing.assert_allclose(solution.lines.relative_abundance[solution.lines.used], 0.0, atol=1e-7)


def test_reference_metallicity_is_taken_off(interpolator, pair):
    _star, reference, _truth = pair
    shifted = {**REFERENCE, "feh": 0.0, "vmic": 1.0}
    zero = reference_star(reference, interpolator.grid, parameters=shifted, options=WIDE).zero_points
    poor = ZeroPoints.reference(
        dict(zip(zero.keys, (zero.values + 0.2).tolist(), strict=True)), zero.covariance, "0.2 dex richer"
    )
    values, covariance = poor.for_lines([zero.keys[3], "no such line"])
    assert values[0] == pytest.approx(zero.values[3] + 0.2)
    assert np.isnan(values[1])
    assert (covariance[1] == 0.0).all()


def test_reference_errors_go_to_the_shared_covariance(interpolator, pair):
    star, reference, _ = pair
    solution = solve(star, interpolator.grid, reference=reference, reference_parameters=REFERENCE, options=WIDE)
    assert (solution.errors_list > 0.0).all()
    # equal stars, equal widths' errors: the reference contributes about as much as the star itself
    assert 0.6 < solution.errors_list[0] / solution.errors_star[0] < 1.6
    assert "solar_iron" not in solution.systematics


def test_unknown_reference_parameters_are_asked_for(interpolator, pair):
    star, reference, _ = pair
    with pytest.raises(InputError, match="teff, logg and feh"):
        solve(star, interpolator.grid, reference=reference)
    with pytest.raises(InputError, match="not in the table"):
        solve([star], interpolator.grid, reference="nobody")


def test_line_without_zero_point_is_left_out_with_its_reason(interpolator, pair):
    star, reference, _ = pair
    use = np.ones(len(reference), bool)
    use[5] = False
    solution = solve(
        star,
        interpolator.grid,
        reference=dataclasses.replace(reference, use=use),
        reference_parameters=REFERENCE,
        options=WIDE,
    )
    assert solution.lines.reason[5] == "not_in_reference_star"


def test_solar_table_fits_the_default_list():
    star = solar_star()
    assert len(star) >= 100
    lines = default_line_list()
    distance = np.abs(star.wavelength_air[:, None] - lines.wavelength_air[None, :]).min(axis=1)
    assert distance.max() < 0.01
    # widths of the Sun between 5 and 130 mA: what hand measurement of unblended lines gives
    assert 5.0 < star.equivalent_width.min() < star.equivalent_width.max() < 150.0
    assert (SUN_TEFF_K, SUN_LOGG) == (5772.0, 4.438)


def test_own_sun_needs_lines_in_common(interpolator):
    """The synthetic list has none of the Sun's lines: no zero, not a wrong one."""
    sun = solar_lines(interpolator.grid, "lte")
    assert not sun.abundance
    solution = solve(make_star(interpolator, (5772.0, 4.4, 0.0, 1.0)), interpolator.grid, options=WIDE)
    assert np.isnan(solution.fe1.own_sun)
    assert solution.fe1.own_sun_n_lines == 0


def test_own_sun_is_the_weighted_mean_on_the_stars_log_gf():
    sun = SolarLines({f"l{i}": 7.40 + 0.01 * i for i in range(8)}, 1.0)
    keys = np.array([f"l{i}" for i in range(8)])
    is_fe2 = np.arange(8) >= 6
    weights = np.r_[1.0, 3.0, np.ones(6)]
    (fe1, n1), (fe2, n2) = sun.means(keys, np.full(8, 0.05), is_fe2, weights)
    assert (n1, n2) == (6, 2)
    assert fe1 == pytest.approx(np.average(7.40 + 0.01 * np.arange(6), weights=weights[:6]) - 0.05)
    assert fe2 == pytest.approx(7.465 - 0.05)
    (few, _), _ = sun.means(keys[:4], np.zeros(4), is_fe2[:4], weights[:4])
    assert np.isnan(few)


def shared_errors(star, reference, grid, **errors):
    solution = solve(
        star, grid, reference=reference, reference_parameters=REFERENCE, reference_errors=errors, options=WIDE
    )
    return solution


def test_errors_of_the_reference_parameters_are_carried(interpolator, pair):
    """Cov_list by propagation equals what happens when the reference's parameters are really wrong by their errors."""
    star, reference, _ = pair
    grid = interpolator.grid
    exact = shared_errors(star, reference, grid)
    for name, error in (("teff", 40.0), ("logg", 0.08), ("feh", 0.05)):
        carried = shared_errors(star, reference, grid, **{name: error})
        np.testing.assert_allclose(carried.parameters, exact.parameters)
        moved = solve(
            star,
            grid,
            reference=reference,
            reference_parameters={**REFERENCE, name: REFERENCE[name] + error},
            options=WIDE,
        )
        shift = (moved.parameters - exact.parameters) / SCALE
        added = (carried.cov_list - exact.cov_list) / np.outer(SCALE, SCALE)
        # first order against a step of finite size: a tenth, and a floor of 0.5 K or 1e-3 dex
        np.testing.assert_allclose(added, np.outer(shift, shift), rtol=0.1, atol=0.1 * np.abs(shift).max() ** 2 + 4e-6)
        np.testing.assert_allclose(carried.cov_star, exact.cov_star, rtol=1e-9)


def test_noise_of_the_reference_is_carried(interpolator, rng):
    """Reference stars with noise: the scatter of the target's parameters is the stated shared error."""
    truth, grid = np.array([5850.0, 4.30, 0.1, 1.15]), interpolator.grid
    star = make_star(interpolator, truth, name="target")
    found, stated = [], []
    for _ in range(12):
        reference = make_star(interpolator, (5772.0, 4.438, 0.0, 1.0), name="reference", rng=rng, width_error=0.02)
        # gf is right here, and said to be: what its errors would do to the vmic is no part of this scatter
        reference = dataclasses.replace(reference, log_gf_error=np.full(len(reference), 1e-4))
        solution = solve(star, grid, reference=reference, reference_parameters=REFERENCE, options=WIDE)
        found.append(solution.parameters)
        stated.append(solution.errors_list)
    scatter = np.std((np.array(found) - truth) / SCALE, axis=0)
    # 12 draws know a standard deviation to 20 %; three of these
    ratio = scatter / np.mean(np.array(stated) / SCALE, axis=0)
    # The stated error of vmic is too large by two to four: that of the reference's vmic and the noise of its lines, which
    # go against each other, are added as if independent. Errors on the safe side are let pass, with this known.
    assert ((ratio > [0.4, 0.4, 0.4, 0.15]) & (ratio < 1.7)).all(), ratio


def test_reference_note_and_covariance(interpolator, pair):
    _, reference, _ = pair
    found = reference_star(
        reference, interpolator.grid, parameters=REFERENCE, options=WIDE, parameter_errors={"teff": 30.0}
    )
    assert found.covariance[0, 0] == pytest.approx(900.0)
    assert found.covariance[3, 3] > 0.0
    assert found.covariance[0, 3] != 0.0  # the vmic follows the temperature
    assert "errors 30 K" in found.note
    with pytest.raises(InputError, match="no value"):
        reference_star(reference, interpolator.grid, parameters=REFERENCE, options=WIDE, parameter_errors={"vmic": 0.1})
    with pytest.raises(InputError, match="must not be negative"):
        reference_star(
            reference, interpolator.grid, parameters=REFERENCE, options=WIDE, parameter_errors={"teff": -1.0}
        )
