"""Splines by coefficients: the same curves as by node slopes, with local support; continuation beyond missing codes."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.grid.axes import DEFAULT_DA, DEFAULT_VMIC
from specsolve.grid.codes import MISSING
from specsolve.grid.line_spline import continued, line_spline, longest_runs
from specsolve.grid.stencil import hermite_basis, spline_slopes

AXES = {
    "dA": (tuple(DEFAULT_DA), False),
    "vmic": (tuple(DEFAULT_VMIC), True),
    "uneven": ((0.0, 0.5, 1.1, 1.5, 2.0, 3.0), False),
    "vmic from 1": ((1.0, 1.5, 2.0, 2.5, 3.0), True),
    "three nodes": ((0.0, 1.0, 2.0), True),
}


def by_slopes(x, values, even, lower, at):
    """The spline by its slopes at the nodes."""
    slopes = spline_slopes(x, even) @ values
    h = x[lower + 1] - x[lower]
    parts = np.array([values[lower], values[lower + 1], slopes[lower], slopes[lower + 1]])
    return [basis @ parts for basis in hermite_basis((at - x[lower]) / h, h)]


@pytest.mark.parametrize("name", AXES)
def test_same_curve_as_by_node_slopes(name, rng):
    nodes, even = AXES[name]
    spline = line_spline(nodes, even)
    values = rng.normal(size=len(nodes))
    for lower in range(len(nodes) - 1):
        at = spline.x[lower] + 0.3 * (spline.x[lower + 1] - spline.x[lower])
        ours = [weights @ (spline.coefficients @ values) for weights in spline.weights(lower, at)]
        np.testing.assert_allclose(ours, by_slopes(spline.x, values, even, lower, at), atol=1e-12)


@pytest.mark.parametrize("name", ["dA", "vmic", "uneven", "vmic from 1"])
def test_four_coefficients_count_at_a_place(name):
    nodes, even = AXES[name]
    spline = line_spline(nodes, even)
    assert spline.width == 4
    for lower in range(len(nodes) - 1):
        at = 0.4 * spline.x[lower] + 0.6 * spline.x[lower + 1]
        for weights in spline.weights(lower, at):
            used = np.flatnonzero(np.abs(weights) > 1e-11)
            assert spline.starts[lower] <= used.min()
            assert used.max() < spline.starts[lower] + 4
        assert spline.weights(lower, at)[0].sum() == pytest.approx(1.0)


def test_longest_runs():
    there = np.array([[1, 1, 0, 1, 1, 1], [0, 0, 0, 0, 0, 0], [1, 1, 0, 1, 1, 0], [0, 1, 1, 1, 1, 1]], bool)
    first, end = longest_runs(there)
    assert first.tolist() == [3, 0, 0, 1]
    assert end.tolist() == [6, 0, 2, 6]


def test_continued_codes_leave_the_spline_of_the_rest_as_it_was(rng):
    dA = np.asarray(DEFAULT_DA)
    truth = np.round(np.cumsum(rng.uniform(2000, 4000, dA.size))).astype(np.uint16)
    codes = np.tile(truth, (1, 3, 1))
    codes[0, :, :2] = MISSING
    codes[0, 1, 7] = MISSING
    filled, first, end = continued(codes, dA)
    assert (first[0], end[0]) == (2, 7)
    assert np.array_equal(filled[codes != MISSING], codes[codes != MISSING])
    whole = line_spline(tuple(dA))
    for lower in range(2, 6):
        at = dA[lower] + 0.13
        ours = whole.weights(lower, at)[0] @ (whole.coefficients @ filled[0, 0])
        rest, _ = by_slopes(dA[2:], truth[2:].astype(float), False, lower - 2, at)
        assert abs(ours - rest) < 1.0  # codes; the continuation is rounded to whole ones


def test_a_row_of_one_code_has_no_range():
    codes = np.full((1, 2, 8), MISSING, np.uint16)
    codes[0, :, 3] = 40000
    filled, first, end = continued(codes, np.asarray(DEFAULT_DA))
    assert end[0] - first[0] < 2
    assert np.isfinite(filled).all()
