"""One made-up grid for all command-line tests."""

from __future__ import annotations

import pytest

from tests.cli.made_up_stars import write_stars
from tests.grid.synthetic import synthetic_grid


@pytest.fixture(scope="session")
def made_up_grid(tmp_path_factory):
    return synthetic_grid(tmp_path_factory.mktemp("made_up"))


@pytest.fixture
def grid_option(made_up_grid):
    return ["--grid", str(made_up_grid.directory)]


@pytest.fixture
def stars_file(tmp_path, made_up_grid, rng):
    return write_stars(tmp_path / "stars.ecsv", made_up_grid.lines, rng)
