"""Coarse abundances at the nodes: straight lines, what is missing, and the compiled table."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.grid.coarse_inverse import coarse_inverse, coarse_offsets, invert_linear, levels_of
from specsolve.grid.codes import FIRST_LOG_WIDTH, MISSING, STEP
from tests.grid.synthetic import synthetic_grid, synthetic_lines

DA = np.arange(-1.4, 1.41, 0.4)
CURVE = np.array([20000, 24000, 28000, 31000, 33000, 34000, 34500, 35000])


@pytest.mark.parametrize("n_missing", [0, 1, 2, 3])
def test_missing_nodes_at_either_end_do_not_shift_the_interval(n_missing):
    for kept in (slice(n_missing, None), slice(0, 8 - n_missing)):
        row = np.full(8, MISSING, np.uint16)
        row[kept] = CURVE[kept]
        inside = np.linspace(CURVE[kept][0], CURVE[kept][-1], 23).astype(int)
        ours = invert_linear(np.tile(row, (1, inside.size, 1, 1)), inside, DA)[0, :, 0]
        np.testing.assert_allclose(ours, np.interp(inside, CURVE[kept], DA[kept]), atol=1e-6)


def test_beyond_the_ends_the_last_slope_goes_on():
    row = CURVE.astype(np.uint16)[None, None, None]
    low, high = (invert_linear(row, np.array([t]), DA)[0, 0, 0] for t in (19000, 35500))
    assert low == pytest.approx(-1.4 - 0.1)
    assert high == pytest.approx(1.4 + 500 / (500 / 0.4))


def test_too_few_or_a_hole_amid_is_nan():
    lonely = np.full(8, MISSING, np.uint16)
    lonely[4] = 30000
    holed = CURVE.astype(np.uint16)
    holed[3] = MISSING
    rows = np.stack([lonely, holed])[None, :, None]
    assert np.isnan(invert_linear(rows, np.array([30000, 29000]), DA)).all()


def test_levels_join_up():
    widths = FIRST_LOG_WIDTH + STEP * np.array([40999.0, 41000.0, 41001.0])
    lower, share = levels_of(widths)
    assert lower.tolist() == [40, 41, 41]
    np.testing.assert_allclose(share, [0.999, 0.0, 0.001])


def test_compiled_sums_are_those_of_the_plain_offsets(tmp_path, rng):
    grid = synthetic_grid(tmp_path, synthetic_lines(40, 10))
    lines = np.array([3, 11, 25, 44])
    widths = rng.uniform(-6.2, -4.6, lines.size)
    operator = rng.normal(size=(4, lines.size))
    valid = np.nonzero(grid.node_valid("lte"))
    offsets = coarse_offsets(grid.gather("lte", valid, lines), widths, grid.axes["dA"])
    expected = np.einsum("nlv,rl->rnv", offsets, operator)
    for _ in range(2):  # made, and made already
        sums = coarse_inverse(grid, "lte").combine(lines, widths, operator)
        ours = sums[:, np.ravel_multi_index(valid, grid.node_shape)]
        np.testing.assert_allclose(ours, expected, atol=1e-10, equal_nan=True)
