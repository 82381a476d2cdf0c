"""Made-up stars on the made-up grid of `tests.grid.synthetic`: tables of widths whose truth is known."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from astropy.table import Table, vstack

from tests.grid.synthetic import synthetic_log_widths

TRUTHS = {
    "dwarf": (5780.0, 4.41, -0.07, 1.05),
    "subgiant": (5560.0, 3.72, -0.32, 1.21),
    "giant": (4830.0, 2.53, -0.21, 1.44),
}
NOISE = 0.02


def star_table(lines, name: str, theta, rng: np.random.Generator) -> Table:
    """A table of one star with 2 % noise, lines between -6.0 and -4.8 in reduced width."""
    log_rw = synthetic_log_widths(lines, *theta, 0.0)
    keep = (log_rw > -5.95) & (log_rw < -4.85)
    width = lines.wavelength_air[keep] * 1e3 * 10 ** log_rw[keep] * (1 + NOISE * rng.standard_normal(keep.sum()))
    table = Table()
    table["star"] = np.full(keep.sum(), name)
    table["wavelength_air"] = lines.wavelength_air[keep]
    table["wavelength_air"].unit = "Angstrom"
    table["ion"] = lines.ion[keep]
    table["excitation_potential"] = lines.excitation_potential[keep]
    table["excitation_potential"].unit = "eV"
    table["equivalent_width"] = width
    table["equivalent_width"].unit = "mAngstrom"
    table["equivalent_width_error"] = NOISE * width
    table["equivalent_width_error"].unit = "mAngstrom"
    return table


def write_stars(path: Path, lines, rng: np.random.Generator, names=tuple(TRUTHS)) -> Path:
    """Several stars in one ECSV."""
    vstack([star_table(lines, name, TRUTHS[name], rng) for name in names]).write(path, format="ascii.ecsv")
    return path
