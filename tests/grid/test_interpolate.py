"""Interpolation in a grid whose truth is known in closed form (`synthetic`)."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.constants import SOLAR_IRON
from specsolve.errors import InputError, OutOfGridError
from specsolve.grid import AT_EDGE, BESIDE_MISSING, MISSING_WIDTHS, OUTSIDE_TABLE, Interpolator
from specsolve.grid.codes import MISSING, decode, encode
from tests.grid.synthetic import synthetic_grid, synthetic_lines, synthetic_log_widths

SUN = (5772.0, 4.44, 0.0, 1.0)


@pytest.fixture(scope="module")
def lines():
    return synthetic_lines(40, 8)


@pytest.fixture(scope="module")
def grid(lines, tmp_path_factory):
    return synthetic_grid(tmp_path_factory.mktemp("grid"), lines)


@pytest.fixture(scope="module")
def holed(lines, tmp_path_factory):
    """The grid with one missing node amid others."""
    return synthetic_grid(tmp_path_factory.mktemp("grid"), lines, missing=((5500.0, 4.0, -1.0),))


def random_theta(rng, low, high):
    return [float(v) for v in rng.uniform(low, high)]


def errors_at(grid, lines, rng, low, high, n_points):
    """Abundance errors and cell flags of lines of usable strength at random points of a box."""
    interpolator = Interpolator(grid)
    errors, flags = [], []
    for _ in range(n_points):
        theta = random_theta(rng, low, high)
        dA = rng.uniform(-0.6, 0.6)
        widths = synthetic_log_widths(lines, *theta, dA)
        answer = interpolator.abundances(theta, widths)
        usable = (widths > -6.5) & (widths < -4.6)
        errors.append((answer.abundance - SOLAR_IRON - theta[2] - dA)[usable])
        flags.append(np.full(int(usable.sum()), interpolator.flags(theta)))
    return np.abs(np.concatenate(errors)), np.concatenate(flags)


def test_codes_round_to_half_a_step_and_keep_missing():
    widths = np.array([-8.99996, -5.12344, -2.5, np.nan, -9.1, -2.4])
    again = decode(encode(widths))
    assert np.abs(again[:3] - widths[:3]).max() <= 0.5001e-4
    assert np.isnan(again[3:]).all()


def test_nodes_are_reproduced_to_the_rounding_of_the_codes(grid, lines):
    theta = (5500.0, 4.0, -1.0, 1.5)
    curves, _ = Interpolator(grid).curves(theta)
    truth = synthetic_log_widths(lines, *theta, grid.axes["dA"]).T
    assert np.nanmax(np.abs(curves - truth)) <= 0.51e-4
    assert np.isfinite(curves[truth > -7.0]).all()


def test_interior_error_is_within_the_budget(grid, lines, rng):
    # design: cubic interpolation errs by at most 0.005 dex for 99 % of (line, cell) pairs
    errors, _ = errors_at(grid, lines, rng, (4250, 0.5, -2.5, 0.0), (6750, 4.5, 0.0, 3.0), 150)
    assert np.nanpercentile(errors, 99) < 0.005
    assert np.nanmedian(errors) < 0.0005


def test_edge_cells_are_flagged_and_their_error_is_bounded(grid, lines, rng):
    errors, flags = errors_at(grid, lines, rng, (4000, 0.5, 0.0, 0.0), (4250, 4.5, 0.5, 3.5), 100)
    assert (flags & AT_EDGE).all()
    assert np.nanpercentile(errors, 99) < 0.01


def test_upper_vmic_cell_is_an_edge_and_the_lower_one_is_not(grid):
    # vmic enters squared: nodes mirrored at 0 stand in for those below
    interpolator = Interpolator(grid)
    assert interpolator.flags((5500.0, 4.0, -1.1, 3.4)) == AT_EDGE
    assert interpolator.flags((5500.0, 4.0, -1.1, 0.1)) == 0


def test_derivative_with_respect_to_vmic_vanishes_at_zero(grid, lines):
    theta = (5600.0, 4.1, -0.4, 0.0)
    answer = Interpolator(grid).abundances(theta, synthetic_log_widths(lines, *theta, 0.0))
    assert np.nanmax(np.abs(answer.d_theta[:, 3])) < 1e-12


@pytest.mark.parametrize(("axis", "step"), [(0, 0.1), (1, 1e-4), (2, 1e-4), (3, 1e-4)])
def test_derivatives_are_those_of_the_interpolant(grid, lines, axis, step):
    interpolator = Interpolator(grid)
    theta = np.array([5663.0, 4.31, -0.37, 1.21])
    widths = synthetic_log_widths(lines, *theta, 0.1)
    move = np.zeros(4)
    move[axis] = step
    ahead, behind = (interpolator.abundances(theta + sign * move, widths).abundance for sign in (1, -1))
    numerical = (ahead - behind) / (2 * step)
    analytic = interpolator.abundances(theta, widths).d_theta[:, axis]
    assert np.allclose(analytic, numerical, rtol=1e-5, atol=1e-7)
    # and close to the truth: the change of width at fixed abundance over the growth, from the closed formulas
    truth_ahead, truth_behind = (synthetic_log_widths(lines, *(theta + s * move), 0.1) for s in (1, -1))
    growth = (synthetic_log_widths(lines, *theta, 0.1 + 1e-4) - synthetic_log_widths(lines, *theta, 0.1 - 1e-4)) / 2e-4
    truth = -(truth_ahead - truth_behind) / (2 * step) / growth
    if axis == 2:
        truth += 1.0  # A = SOLAR_IRON + mh + dA
    scale = (1e-3, 1.0, 1.0, 1.0)[axis]  # a kelvin counts a thousandth of a dex or km/s
    assert np.nanmax(np.abs(analytic - truth)) < 0.02 * scale


def test_derivative_with_respect_to_width(grid, lines):
    interpolator = Interpolator(grid)
    widths = synthetic_log_widths(lines, *SUN, 0.0)
    ahead, behind = (interpolator.abundances(SUN, widths + step).abundance for step in (1e-5, -1e-5))
    answer = interpolator.abundances(SUN, widths)
    assert np.allclose(answer.d_width, (ahead - behind) / 2e-5, rtol=1e-6, atol=1e-6)
    weak = widths < -5.9
    assert np.all(answer.d_width[weak] > 0.95)
    assert np.all(answer.d_width[weak] < 1.25)  # on the linear part a width doubles with the abundance


@pytest.mark.parametrize(("axis", "node"), [(0, 5500.0), (1, 4.0), (2, -1.0), (3, 1.0)])
def test_value_and_first_derivatives_are_continuous_across_faces(holed, axis, node):
    """Also along faces of cells beside a missing node, where slopes are one-sided."""
    interpolator = Interpolator(holed)
    for base in ([5630.0, 4.2, -1.3, 1.2], [5800.0, 4.6, -0.6, 0.3], [5330.0, 3.8, -1.6, 0.7]):
        below, above = np.array(base), np.array(base)
        step = np.array([1e-6, 1e-9, 1e-9, 1e-9])[axis]
        below[axis], above[axis] = node - step, node + step
        curves = [interpolator.curves(theta) for theta in (below, above)]
        both = np.isfinite(curves[0][0]) & np.isfinite(curves[1][0])  # far below any measured width they may be nan
        assert both[curves[0][0] > -7.0].all()
        assert np.allclose(curves[0][0][both], curves[1][0][both], rtol=0, atol=1e-7)
        scale = np.array([1e-3, 1.0, 1.0, 1.0])[:, None]
        assert np.allclose(curves[0][1][:, both] / scale, curves[1][1][:, both] / scale, rtol=0, atol=2e-5)


def test_a_cell_with_a_missing_corner_gives_nothing(holed, lines):
    interpolator = Interpolator(holed)
    theta = (5400.0, 4.2, -1.2, 1.0)
    answer = interpolator.abundances(theta, synthetic_log_widths(lines, *theta, 0.0))
    assert np.isnan(answer.abundance).all()
    assert np.isnan(answer.d_theta).all()
    assert np.all(answer.flags & MISSING_WIDTHS)
    assert np.isnan(interpolator.widths(theta, 7.0)).all()
    curves, derivatives = interpolator.curves(theta)
    assert np.isnan(curves).all()
    assert np.isnan(derivatives).all()


def test_a_missing_node_is_never_bridged(holed, lines, tmp_path):
    """The numbers beside the gap do not depend on what lies behind it."""
    changed = synthetic_grid(tmp_path, lines, missing=((5500.0, 4.0, -1.0),))
    block = changed.codes(changed.blocks[0])
    spoiled = np.array(block)
    spoiled[:6, 6:9, 3:6] = 30000  # all of teff < 5500 around the gap
    np.save(changed.directory / changed.blocks[0].file, spoiled)
    other = type(changed).open(changed.directory, verify=False)
    first = np.arange(changed.blocks[0].n_lines)
    theta = (5600.0, 4.0, -1.0, 1.0)  # on the row of the gap, just beyond it
    for interpolated in (holed, other):
        assert Interpolator(interpolated).flags(theta) & BESIDE_MISSING
    face = (5750.0, 4.0, -1.0, 1.0)
    ours, theirs = (Interpolator(g, "lte", first).curves(face) for g in (holed, other))
    assert np.array_equal(ours[0], theirs[0], equal_nan=True)
    assert np.array_equal(ours[1][0], theirs[1][0], equal_nan=True)  # the slope along teff stops at the gap


def test_beside_a_missing_node_cells_are_flagged_and_stay_accurate(holed, lines, rng):
    errors, flags = errors_at(holed, lines, rng, (5500, 4.5, -1.0, 0.0), (5750, 5.0, -0.5, 3.0), 60)
    assert (flags & BESIDE_MISSING).all()
    assert np.nanpercentile(errors, 99) < 0.01


def test_on_a_face_the_whole_cell_is_taken(holed, lines):
    """A point on the face between a whole cell and one with a missing corner belongs to the whole one."""
    interpolator = Interpolator(holed)
    for theta in (
        (5500.0, 4.6, -1.2, 1.0),
        (5750.0, 4.2, -1.2, 1.0),
        (5250.0, 4.2, -1.2, 1.0),
        (5400.0, 3.5, -1.2, 1.0),
    ):
        answer = interpolator.abundances(theta, synthetic_log_widths(lines, *theta, 0.0))
        assert np.isfinite(answer.abundance[answer.flags & OUTSIDE_TABLE == 0]).all(), theta


@pytest.mark.parametrize(
    ("axis", "value"),
    [("teff", 3999.0), ("teff", 7001.0), ("logg", 5.1), ("mh", -3.2), ("vmic", 3.6), ("vmic", np.nan)],
)
def test_outside_the_axes_is_an_error_with_data(grid, axis, value):
    theta = dict(zip(("teff", "logg", "mh", "vmic"), SUN, strict=True)) | {axis: value}
    with pytest.raises(OutOfGridError) as caught:
        Interpolator(grid).curves(tuple(theta.values()))
    assert caught.value.axis == axis
    assert (caught.value.low, caught.value.high) == (grid.axes[axis][0], grid.axes[axis][-1])


def test_the_ends_of_the_axes_belong_to_the_grid(grid):
    for theta in ((4000.0, 0.0, -3.0, 0.0), (7000.0, 5.0, 0.5, 3.5)):
        assert np.isfinite(Interpolator(grid).curves(theta)[0][:, -1]).all()


def test_an_abundance_outside_the_table_is_nan_and_flagged(grid, lines):
    widths = synthetic_log_widths(lines, *SUN, 0.0)
    widths[0], widths[1], widths[2] = -8.5, -3.0, np.nan
    answer = Interpolator(grid).abundances(SUN, widths)
    assert np.all(answer.flags[:2] & OUTSIDE_TABLE)
    assert answer.flags[2] & MISSING_WIDTHS
    assert np.isnan(answer.abundance[:3]).all()
    assert np.isnan(answer.d_width[:3]).all()
    assert np.isfinite(answer.abundance[3:]).all()


def test_widths_are_the_inverse_of_abundances(grid, lines, rng):
    interpolator = Interpolator(grid)
    theta = (5230.0, 3.3, -0.8, 1.7)
    widths = synthetic_log_widths(lines, *theta, rng.uniform(-0.8, 0.8))
    answer = interpolator.abundances(theta, widths)
    assert np.allclose(interpolator.widths(theta, answer.abundance), widths, atol=1e-10)
    assert np.isnan(interpolator.widths(theta, SOLAR_IRON + 2.0)).all()


def test_line_selection_and_reuse_of_a_cell_do_not_change_numbers(grid, lines, rng):
    chosen = np.array([5, 17, 3])
    part, whole = Interpolator(grid, "lte", chosen), Interpolator(grid)
    for _ in range(10):
        theta = random_theta(rng, (5500, 4.0, -0.5, 1.0), (6000, 4.9, 0.4, 2.0))
        ours, theirs, fresh = part.curves(theta), whole.curves(theta), Interpolator(grid, "lte", chosen).curves(theta)
        assert np.allclose(ours[0], theirs[0][chosen], rtol=0, atol=1e-12, equal_nan=True)
        assert np.array_equal(ours[0], fresh[0], equal_nan=True)
        assert np.array_equal(ours[1], fresh[1], equal_nan=True)
    with pytest.raises(InputError):
        Interpolator(grid, "lte", [len(lines)])


def test_a_missing_width_shortens_the_curve_and_is_not_bridged(lines, tmp_path):
    grid = synthetic_grid(tmp_path, lines)
    path = grid.directory / grid.blocks[0].file
    codes = np.load(path)
    codes[7, 8, 6, 0, :, 0] = MISSING  # lowest abundance of line 0 at one node: the curve loses its end there
    codes[7, 8, 6, 1, 2, 4] = MISSING  # a hole amid the curve of line 1
    np.save(path, codes)
    grid = type(grid).open(grid.directory, verify=False)
    plain, fast = Interpolator(grid), Interpolator(grid, compiled=True)
    for interpolator in (plain, fast):
        curves, _ = interpolator.curves((5772.0, 4.2, 0.1, 1.0))
        assert np.isnan(curves[0, 0])
        assert np.isfinite(curves[0, 1:]).all()
        assert np.isnan(curves[1, 4])
        answer = interpolator.abundances(
            (5772.0, 4.2, 0.1, 1.0), synthetic_log_widths(lines, 5772.0, 4.2, 0.1, 1.0, 0.9)
        )
        assert answer.flags[1] & OUTSIDE_TABLE  # beyond the hole: not reached from the longer, lower piece


def test_compiled_path_agrees_with_the_plain_one(holed, lines, rng):
    plain, fast = Interpolator(holed), Interpolator(holed, compiled=True)
    for _ in range(60):
        theta = random_theta(rng, (4000, 0.0, -3.0, 0.0), (7000, 5.0, 0.5, 3.5))
        widths = synthetic_log_widths(lines, *theta, rng.uniform(-1.2, 1.2))
        ours, theirs = plain.abundances(theta, widths), fast.abundances(theta, widths)
        assert np.array_equal(ours.flags, theirs.flags)
        for name in ("abundance", "d_theta", "d_width"):
            assert np.allclose(getattr(ours, name), getattr(theirs, name), rtol=0, atol=1e-9, equal_nan=True)
        for one, other in zip(plain.curves(theta), fast.curves(theta), strict=True):
            assert np.allclose(one, other, rtol=0, atol=1e-9, equal_nan=True)


def test_axes_of_one_two_and_three_nodes(lines, tmp_path):
    grid = synthetic_grid(
        tmp_path, lines, teff=[5500.0, 5750.0], logg=[4.0, 4.25, 4.5], mh=[0.0], vmic=[1.0], missing=()
    )
    theta = (5625.0, 4.4, 0.0, 1.0)
    widths = synthetic_log_widths(lines, *theta, 0.0)
    for compiled in (False, True):
        answer = Interpolator(grid, compiled=compiled).abundances(theta, widths)
        assert np.nanmax(np.abs(answer.abundance - SOLAR_IRON)) < 0.05
        assert np.isnan(answer.d_theta[:, 2:]).all()  # nothing is known along an axis of one node
        assert np.isfinite(answer.d_theta[:, :2]).all()
    with pytest.raises(OutOfGridError):
        Interpolator(grid).curves((5625.0, 4.4, 0.1, 1.0))


def test_importing_and_using_the_plain_path_does_not_load_numba(grid):
    import subprocess
    import sys

    code = (
        "import sys; from specsolve.grid import Interpolator, ResponseGrid;"
        f"i = Interpolator(ResponseGrid.open({str(grid.directory)!r})); i.curves((5772.0, 4.44, 0.0, 1.0));"
        "assert 'numba' not in sys.modules and 'astropy' not in sys.modules and 'scipy' not in sys.modules"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_spline_slopes_are_those_of_the_interpolating_spline(rng):
    from scipy.interpolate import CubicSpline

    from specsolve.grid.stencil import spline_slopes

    for n in (4, 5, 8):
        x = np.cumsum(rng.uniform(0.2, 1.0, n))
        y = rng.normal(size=n)
        assert np.allclose(spline_slopes(x) @ y, CubicSpline(x, y)(x, 1))
    x = np.concatenate([[0.0], np.cumsum(rng.uniform(0.2, 1.0, 6))])
    y = rng.normal(size=7)
    mirrored = CubicSpline(np.concatenate([-x[:0:-1], x]), np.concatenate([y[:0:-1], y]))
    assert np.allclose(spline_slopes(x, even=True) @ y, mirrored(x, 1))


@pytest.mark.parametrize("nodes", [[0.0, 1.0, 2.0, 3.0, 4.0], [0.0, 0.3, 1.0, 1.4, 2.5]])
def test_node_slopes_are_exact_for_polynomials_of_their_degree(nodes):
    from specsolve.grid.stencil import slope_stencil

    x = np.array(nodes)
    usable = np.ones(5, dtype=bool)
    for node in range(5):
        indices, weights = slope_stencil(x, usable, node, 5)
        for power in range(5):
            expected = power * x[node] ** (power - 1) if power else 0.0
            assert np.isclose(weights @ x[indices] ** power, expected, atol=1e-10)


def test_node_slopes_stop_at_unusable_nodes():
    from specsolve.grid.stencil import slope_stencil

    x = np.arange(9.0)
    usable = np.array([1, 1, 0, 1, 1, 1, 0, 1, 0], dtype=bool)
    assert slope_stencil(x, usable, 0, 5)[0].tolist() == [0, 1]
    assert slope_stencil(x, usable, 4, 5)[0].tolist() == [3, 4, 5]
    assert slope_stencil(x, usable, 2, 5) is None
    assert slope_stencil(x, usable, 7, 5) is None
