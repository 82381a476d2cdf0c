"""First-order responses: interpolation, the moved grid, and the packaged store."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.errors import StoreError, UsageError
from specsolve.grid.codes import MISSING, decode
from specsolve.grid.interpolate import Interpolator
from specsolve.grid.perturbations import (
    ALPHA,
    MISSING_OPACITY,
    PACKAGED,
    NodeSpline,
    Perturbations,
    polynomial_weights,
    read_perturbations,
    write_perturbations,
)
from specsolve.grid.perturbed import perturbed_grid, responses_at_nodes
from specsolve.grid.store import ResponseGrid
from specsolve.matter.composition import alpha_law

LARGEST_MB = 3.0


@pytest.fixture(scope="module")
def grid():
    return ResponseGrid.packaged()


@pytest.fixture(scope="module")
def stored():
    return Perturbations.packaged()


def test_the_spline_is_exact_at_its_nodes_and_for_quadratics(rng):
    nodes = rng.uniform((4000.0, 0.0, -3.0), (7000.0, 5.0, 0.5), size=(60, 3))
    spline = NodeSpline(nodes)
    np.testing.assert_allclose(spline.weights(nodes), np.eye(60), atol=1e-8)

    def quadratic(x):
        a, b, c = x[:, 0] / 1000.0, x[:, 1], x[:, 2]
        return 1.0 + a - 2.0 * b * c + 0.3 * a * a + c * c

    points = rng.uniform((4500.0, 1.0, -2.0), (6500.0, 4.0, 0.0), size=(20, 3))
    np.testing.assert_allclose(spline.weights(points) @ quadratic(nodes), quadratic(points), atol=1e-7)
    assert not spline.holds(np.array([[4000.0, 5.5, 0.0]]))[0]


def test_polynomials_along_vmic_and_dA():
    nodes = (-1.4, -0.7, 0.0, 0.7, 1.4)
    at = np.array([-1.1, 0.3])
    np.testing.assert_allclose(polynomial_weights(nodes, at) @ np.array(nodes) ** 4, at**4)


def test_the_packaged_store_fits_the_packaged_grid(grid, stored, figure):
    size = PACKAGED.stat().st_size / 1e6
    figure("size of the stored responses", size, "MB", limit=f"< {LARGEST_MB:g}")
    assert size < LARGEST_MB
    assert Perturbations.of_grid(grid) is stored
    assert {ALPHA, MISSING_OPACITY} <= set(stored.names)
    assert (stored.line_places(grid.lines.key) >= 0).all()


def test_nodes_without_a_response_are_missing_not_guessed(grid, figure):
    moved = perturbed_grid(grid, alpha=0.3)
    lost = set(moved.missing("lte")) - set(grid.missing("lte"))
    figure("nodes of the grid without a response to alpha", len(lost), limit="0 wanted")
    assert len(lost) <= 10
    for node in lost:
        assert "did not converge" in moved.missing("lte")[node]
        assert (moved.codes(moved.blocks[0])[node] == MISSING).all()
        # beside the limit of radiation pressure, or beside the coolest dwarf, which has no atmosphere
        assert grid.axes["logg"][node[1]] < 2.0 or grid.axes["teff"][node[0]] <= 4500.0


def test_the_moved_grid_is_the_grid_plus_p_times_the_response(grid):
    moved = perturbed_grid(grid, alpha=0.25)
    node = tuple(int(np.argmin(np.abs(grid.axes[name] - x))) for name, x in (("teff", 5250), ("logg", 3), ("mh", -1)))
    block = grid.blocks[0]
    before = decode(np.array(grid.codes(block)[node]))
    after = decode(np.array(moved.codes(block)[node]))
    flat = np.ravel_multi_index(node, grid.node_shape)
    response = responses_at_nodes(grid, ALPHA)[flat, : block.n_lines]
    np.testing.assert_allclose(after - before, (0.25 - alpha_law(-1.0)) * response, atol=1.1e-4)
    assert np.abs(after - before).max() > 1e-3


def test_a_point_and_the_nodes_agree(grid, stored):
    """The response at a point is the same number as at the nodes of the moved grid."""
    places = stored.line_places(grid.lines.key)
    theta = (5250.0, 3.0, -1.0, grid.axes["vmic"][3])
    at_point = stored.response(ALPHA, theta, np.full(len(places), grid.axes["dA"][2]), places)
    node = tuple(
        int(np.argmin(np.abs(grid.axes[name] - x))) for name, x in zip(("teff", "logg", "mh"), theta, strict=False)
    )
    flat = np.ravel_multi_index(node, grid.node_shape)
    np.testing.assert_allclose(at_point, responses_at_nodes(grid, ALPHA)[flat, :, 3, 2], atol=2e-4)
    outside = stored.response(ALPHA, theta, np.full(len(places), 2.0), places)
    assert np.isnan(outside).all()


def test_everything_that_works_on_a_grid_works_on_a_moved_one(grid):
    moved = perturbed_grid(grid, alpha=0.1)
    assert moved is perturbed_grid(grid, alpha=0.1)
    assert perturbed_grid(grid) is grid
    assert moved.identity != grid.identity
    assert moved.unperturbed is grid
    remake, arguments = moved.__reduce__()  # what another process gets
    again = remake(*arguments)
    assert again.identity == moved.identity
    lines = np.arange(0, 60, 3)
    theta = np.array([5100.0, 2.7, -0.8, 1.3])
    plain = Interpolator(moved, "lte", lines).widths(theta, 6.7)
    compiled = Interpolator(moved, "lte", lines, compiled=True).widths(theta, 6.7)
    np.testing.assert_allclose(plain, compiled, atol=1e-9)
    assert np.abs(plain - Interpolator(grid, "lte", lines).widths(theta, 6.7)).max() > 1e-3


def test_out_of_range_and_foreign_stores_are_refused(grid, stored, tmp_path):
    with pytest.raises(UsageError, match="alpha = 2 lies outside"):
        perturbed_grid(grid, alpha=2.0)
    header = {**stored.header, "lines": ["somebody else's line", *stored.header["lines"][1:]]}
    path = tmp_path / "perturbations.npz"
    write_perturbations(path, header, {name: values[:, :, :, :] * 1e-4 for name, values in stored.responses.items()})
    back = read_perturbations(path)
    np.testing.assert_array_equal(back.responses[ALPHA], stored.responses[ALPHA])
    assert back.line_places(grid.lines.key)[0] == -1
    (tmp_path / "bad.npz").write_bytes(b"not a store")
    with pytest.raises(StoreError, match="make it anew"):
        read_perturbations(tmp_path / "bad.npz")
    with pytest.raises(ValueError, match="not finite"):
        write_perturbations(path, header, {ALPHA: np.full((1, 1, 1, 1), np.nan)})
