"""An invented grid in two line formations, and one invented cluster solved on it."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.balance.solve import solve
from specsolve.report.tables import write_solutions
from tests.uses.invented import observed, two_treatments, widths_of

CLUSTER_FEH = -0.23
CLUSTER = {
    "hot dwarf": (6010.0, 4.31, CLUSTER_FEH, 1.15),
    "dwarf": (5640.0, 4.46, CLUSTER_FEH, 1.02),
    "subgiant": (5480.0, 3.71, CLUSTER_FEH, 1.18),
    "giant": (4870.0, 2.64, CLUSTER_FEH, 1.47),
    "stranger": (5120.0, 3.12, -0.92, 1.36),
}


@pytest.fixture(scope="session")
def grid(tmp_path_factory):
    return two_treatments(tmp_path_factory.mktemp("uses"))


@pytest.fixture(scope="session")
def stars(grid):
    rng = np.random.default_rng(11)
    gf_error = rng.normal(0.0, 0.04, len(grid.lines))
    return [
        observed(grid, name, widths_of(grid, "lte", np.array(theta), gf_error), rng, 0.02)
        for name, theta in CLUSTER.items()
    ]


@pytest.fixture(scope="session")
def solutions(grid, stars):
    return solve(stars, grid, treatment="lte")


@pytest.fixture(scope="session")
def result_file(solutions, tmp_path_factory):
    """X.ecsv of the cluster, with its sister tables."""
    path = tmp_path_factory.mktemp("results") / "members.ecsv"
    write_solutions(solutions, path)
    return path
