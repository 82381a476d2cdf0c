"""A small response grid with a known truth, and stars made from it."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.balance.star import Star
from specsolve.constants import SOLAR_IRON
from specsolve.grid.interpolate import Interpolator
from specsolve.grid.store import ResponseGrid
from tests.grid.synthetic import synthetic_grid, synthetic_lines


@pytest.fixture(scope="session")
def grid(tmp_path_factory) -> ResponseGrid:
    """Invented responses of 60 Fe I and 14 Fe II lines over the default axes."""
    return synthetic_grid(tmp_path_factory.mktemp("balance"), synthetic_lines(60, 14, seed=3))


@pytest.fixture(scope="session")
def interpolator(grid) -> Interpolator:
    return Interpolator(grid, "lte")


def make_star(
    interpolator: Interpolator,
    theta,
    name: str = "invented",
    *,
    abundance_error=0.0,
    width_error: float = 0.0,
    stated_error: float = 0.02,
    rng: np.random.Generator | None = None,
    ion_offset: float = 0.0,
    feh: float | None = None,
) -> Star:
    """A star of the grid: widths at theta, with relative width noise and line-by-line abundance noise [dex].

    `ion_offset` [dex] is added to A(Fe I); `feh` is the lines' own metallicity where it differs from the
    atmosphere's.
    """
    lines = interpolator.grid.lines
    n = len(lines)
    noise = np.zeros(n) if rng is None else rng.normal(size=n)
    abundance = SOLAR_IRON + (theta[2] if feh is None else feh) + abundance_error * noise
    abundance = abundance + np.where(lines.ion == "Fe I", ion_offset, 0.0)
    log_w = interpolator.widths(theta, abundance)
    width = 10.0**log_w * lines.wavelength_air * 1e3
    error = np.maximum(width_error, stated_error) * width
    if rng is not None and width_error > 0.0:
        width = width * (1.0 + width_error * rng.normal(size=n))
    known = np.isfinite(width)
    return Star.from_arrays(
        name,
        lines.wavelength_air[known],
        lines.ion[known],
        width[known],
        error[known],
        excitation_potential=lines.excitation_potential[known],
    )
