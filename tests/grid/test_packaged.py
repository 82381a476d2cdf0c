"""The packaged grid: what it covers, and that today's program reproduces it."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.grid import ResponseGrid
from specsolve.grid.codes import MISSING, decode
from specsolve.grid.plan import plan_build
from specsolve.grid.store import PACKAGED
from specsolve.lines import default_line_list

MEGABYTE = 1e6


@pytest.fixture(scope="module")
def grid():
    return ResponseGrid.packaged()


@pytest.fixture(scope="module")
def store():
    return AtmosphereStore.packaged()


def test_it_covers_the_axes_of_the_design(grid):
    assert np.array_equal(grid.axes["teff"], np.arange(4000.0, 7001.0, 250.0))
    assert np.array_equal(grid.axes["logg"], np.arange(0.0, 5.01, 0.5))
    assert np.array_equal(grid.axes["mh"], np.arange(-3.0, 0.51, 0.5))
    assert np.array_equal(grid.axes["vmic"], np.arange(0.0, 3.51, 0.5))
    assert np.allclose(grid.axes["dA"], np.arange(-1.4, 1.41, 0.4))


def test_it_holds_the_default_lines_on_the_packaged_atmospheres(grid, store):
    lines = default_line_list()
    assert grid.atmospheres_identity == store.identity
    assert grid.lines.key.tolist() == lines.sorted().key.tolist()
    assert np.array_equal(grid.lines.log_gf, lines.sorted().log_gf)


def test_it_has_both_treatments(grid):
    assert grid.treatments == ("lte", "nlte")
    assert grid.default_treatment == "nlte"


@pytest.mark.parametrize("treatment", ["lte", "nlte"])
def test_its_missing_nodes_are_those_of_the_atmospheres(grid, store, treatment):
    for node, valid in np.ndenumerate(grid.node_valid(treatment)):
        assert valid == store.has(*(axis.values[i] for axis, i in zip(grid.node_axes, node, strict=True)))


@pytest.mark.parametrize("treatment", ["lte", "nlte"])
def test_no_width_of_measurable_strength_is_missing(grid, treatment):
    valid_nodes = tuple(np.argwhere(grid.node_valid(treatment)).T)
    codes = grid.gather(treatment, valid_nodes, np.arange(len(grid.lines)))
    missing = codes == MISSING
    # a missing width is one below 1e-9, at the weak end of a curve: nothing beyond it is missing
    assert not (missing[..., 1:] & ~missing[..., :-1]).any()
    # at the strong end only departures may bring a line that weak, and only one that is weaker than 1e-8 in LTE already
    nodes, lines, *_ = np.nonzero(missing[..., -1])
    lte = decode(grid.gather("lte", tuple(found[nodes] for found in valid_nodes), np.arange(len(grid.lines))))
    assert treatment == "nlte" or nodes.size == 0
    assert np.nanmax(lte[np.arange(nodes.size), lines, :, -1], initial=-9.0) < -8.0


def test_files_fit_the_package(grid):
    sizes = [path.stat().st_size for path in PACKAGED.iterdir()]
    assert max(sizes) < 18 * MEGABYTE
    assert sum(sizes) < 65 * MEGABYTE


@pytest.mark.slow
@pytest.mark.parametrize("treatment", ["lte", "nlte"])
def test_today_s_program_reproduces_it(grid, store, treatment):
    """Three nodes chosen by a hash are computed again: every line is the same to the rounding of the codes."""
    plan = plan_build(default_line_list(), "/nowhere", store, {}, treatment, [grid])
    assert plan.computed.size == 0
