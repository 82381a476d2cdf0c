"""Stars for timing: widths that the packaged grid predicts, with noise."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from specsolve.balance.star import Star
from specsolve.constants import SOLAR_IRON
from specsolve.grid import Interpolator, ResponseGrid

TRUTH = np.array([5390.0, 4.22, -0.29, 1.22])
"""teff, logg, mh, vmic of an invented star."""
NOISE = 0.02  # of every width
GF_NOISE = 0.05  # dex
STRENGTH = (-5.95, -4.85)


def invented_star(grid: ResponseGrid, n_lines: int, rng: np.random.Generator, theta=TRUTH, name="invented") -> Star:
    """A star with so many lines of moderate strength, the share of Fe II as in the list."""
    widths = Interpolator(grid, "lte").widths(theta, SOLAR_IRON + theta[2] + rng.normal(0.0, GF_NOISE, len(grid.lines)))
    good = np.flatnonzero((widths > STRENGTH[0]) & (widths < STRENGTH[1]))
    chosen = good[np.linspace(0, good.size - 1, min(n_lines, good.size)).astype(int)]
    width = grid.lines.wavelength_air[chosen] * 1e3 * 10.0 ** widths[chosen]
    width *= 1.0 + NOISE * rng.normal(size=chosen.size)
    return Star.from_arrays(
        name,
        grid.lines.wavelength_air[chosen],
        grid.lines.ion[chosen],
        width,
        NOISE * width,
        excitation_potential=grid.lines.excitation_potential[chosen],
    )


def write_table(star: Star, path: Path) -> Path:
    """The star as an ECSV table."""
    from astropy.table import Table

    table = Table()
    table["wavelength_air"], table["ion"] = star.wavelength_air, star.ion
    table["excitation_potential"] = star.excitation_potential
    table["equivalent_width"], table["equivalent_width_error"] = star.equivalent_width, star.equivalent_width_error
    units = {"wavelength_air": "Angstrom", "excitation_potential": "eV"}
    for name in table.colnames:
        if name != "ion":
            table[name].unit = units.get(name, "mAngstrom")
    table.write(path, format="ascii.ecsv", overwrite=True)
    return path


def write_stars(stars: list[Star], path: Path) -> Path:
    """Many stars as one ECSV table with a column `star`."""
    from astropy.table import Table, vstack

    parts = []
    for star in stars:
        part = Table.read(write_table(star, path), format="ascii.ecsv")
        part["star"] = star.name
        parts.append(part)
    vstack(parts).write(path, format="ascii.ecsv", overwrite=True)
    return path
