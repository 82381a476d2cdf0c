"""`grid check`: the errors that it finds are those that are there."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.errors import InputError
from specsolve.grid.check import check_points, nearest_atmosphere, random_points
from tests.grid.double import ENGINE, SHIFTED, Model
from tests.grid.synthetic import synthetic_grid, synthetic_lines


@pytest.fixture(scope="module")
def grid(tmp_path_factory):
    return synthetic_grid(tmp_path_factory.mktemp("check"), synthetic_lines(30, 6), missing=((5500.0, 4.0, -1.0),))


def test_points_lie_off_the_nodes_in_whole_cells(grid, rng):
    points = random_points(grid, "lte", 200, rng)
    stencils = grid.stencils("lte")
    assert points.shape == (200, 4)
    for theta in points:
        cell = tuple(
            int(np.searchsorted(grid.axes[n], v) - 1) for n, v in zip(("teff", "logg", "mh"), theta, strict=False)
        )
        assert stencils.cell_valid(cell)
    assert len(np.unique(points[:, 2])) == 200
    assert len(np.unique(random_points(grid, "lte", 50, rng, 3)[:, 2])) == 3
    assert set(random_points(grid, "lte", 50, rng, 0)[:, 2]) <= set(grid.axes["mh"])


def test_the_same_seed_gives_the_same_points(grid):
    first, second = (random_points(grid, "lte", 5, np.random.default_rng(4)) for _ in range(2))
    assert np.array_equal(first, second)


def test_the_error_of_a_good_grid_is_small_and_sorted_by_stencil(grid, rng):
    seen = []
    points = random_points(grid, "lte", 150, rng)
    result = check_points(grid, points, Model, ENGINE, progress=lambda done, total: seen.append((done, total)))
    summary = result.summary()
    assert seen[-1] == (150, 150)
    assert sum(row["points"] for row in summary.values()) == 150
    assert summary["inside"]["percentile_99"] < 0.005
    assert summary["at_grid_edge"]["percentile_99"] < 0.02
    assert summary["inside"]["within_0.005"] >= 0.99
    assert summary["inside"]["width_percentile_99"] <= summary["inside"]["percentile_99"]


def test_a_wrong_grid_is_found_out(grid, rng):
    """An engine that differs by 0.01 dex in width differs by at least as much in abundance."""
    result = check_points(grid, random_points(grid, "lte", 20, rng), Model, SHIFTED)
    usable = np.isfinite(result.width_error)
    assert np.median(result.width_error[usable]) == pytest.approx(-0.01, abs=0.001)
    assert result.summary()["inside"]["median"] > 0.009


def test_a_grid_without_a_whole_cell_is_refused(tmp_path, rng):
    holes = tuple((5500.0, g, m) for g in (4.0, 4.5) for m in (0.0, 0.5))
    grid = synthetic_grid(
        tmp_path, synthetic_lines(3, 1), teff=[5250.0, 5500.0], logg=[4.0, 4.5], mh=[0.0, 0.5], missing=holes
    )
    with pytest.raises(InputError, match="no cell"):
        random_points(grid, "lte", 3, rng)


def test_the_nearest_atmosphere_is_a_usable_one():
    class Store:
        def nodes(self):
            return [(5000.0, 4.0, 0.0), (5250.0, 4.0, 0.0), (5500.0, 4.0, 0.0)]

        def has(self, teff, logg, mh):
            return teff != 5250.0

        def get(self, teff, logg, mh):
            return Model(teff, logg, mh)

    assert nearest_atmosphere(Store(), 5200.0, 4.1, 0.1).teff == 5000.0
    assert nearest_atmosphere(Store(), 5300.0, 4.1, 0.1).teff == 5500.0
