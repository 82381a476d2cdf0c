"""Our own solar zero: A_sun(Fe I) and A_sun(Fe II) from published solar widths on the star's own lines, grid and
treatment.
"""

from __future__ import annotations

import csv
from collections.abc import Mapping
from dataclasses import dataclass, field
from importlib import resources
from typing import Any

import numpy as np

from .minima import enough_lines, local_solve, preliminary_lines
from .options import Options
from .outside import Outside
from .problem import Problem
from .star import Star

SUN_NAME = "Sun"
# Nominal solar effective temperature and log10 of GM/R^2 (cgs): IAU 2015 Resolution B3, Prsa et al. 2016, AJ 152, 41.
SUN_TEFF_K = 5772.0
SUN_LOGG = 4.438
SUN_FEH = 0.0
SUN_PARAMETERS: Mapping[str, float] = {"teff": SUN_TEFF_K, "logg": SUN_LOGG, "feh": SUN_FEH}
SUN_PARAMETER_SOURCE = "IAU 2015 nominal Sun (Prsa et al. 2016, AJ 152, 41)"
SUN_VMIC_START = 1.0  # km/s, where the search for the Sun's vmic begins
WIDTHS_SOURCE = "Bedell et al. 2017, ApJ 839, 94, rows of the Sun"
# Fewest common lines for a mean of the Sun (common practice, no source).
MIN_COMMON_FE1, MIN_COMMON_FE2 = 5, 2


@dataclass(frozen=True, eq=False)
class SolarLines:
    """The Sun's line abundances on a grid.

    Attributes
    ----------
    abundance : mapping of line key to A(Fe) [dex]
        On the log gf of the grid's list.
    vmic : float
        [km/s]; nan if it could not be found.
    """

    abundance: Mapping[str, float] = field(default_factory=dict)
    vmic: float = float("nan")

    def means(
        self, keys, log_gf_shift: np.ndarray, is_fe2: np.ndarray, weights: np.ndarray
    ) -> tuple[tuple[float, int], ...]:
        """(A_sun, number of lines) of each ion, over the lines in common, with the star's weights and log gf.

        nan where fewer than 5 Fe I or 2 Fe II lines are in common.
        """
        values = np.array([self.abundance.get(str(key), np.nan) for key in keys], float) - log_gf_shift
        out = []
        for ion, least in ((~is_fe2, MIN_COMMON_FE1), (is_fe2, MIN_COMMON_FE2)):
            common = ion & np.isfinite(values) & (weights > 0.0)
            number = int(common.sum())
            mean = float(np.average(values[common], weights=weights[common])) if number >= least else float("nan")
            out.append((mean, number))
        return tuple(out)


def solar_star() -> Star:
    """The Sun as a `Star`, from the packaged widths.

    Examples
    --------
    >>> solar_star().name
    'Sun'
    """
    text = (resources.files("specsolve") / "data" / "sun" / "solar_widths.csv").read_text(encoding="utf-8")
    rows = list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))
    return Star.from_arrays(
        SUN_NAME,
        [float(row["wavelength_air"]) for row in rows],
        [row["ion"] for row in rows],
        [float(row["equivalent_width"]) for row in rows],
        excitation_potential=[float(row["excitation_potential"]) for row in rows],
        notes=(f"widths: {WIDTHS_SOURCE}",),
    )


def solar_lines(grid: Any, treatment: str, options: Options | None = None) -> SolarLines:
    """Line abundances of the Sun at its nominal parameters, vmic from the lines themselves; empty if the grid has
    too few.
    """
    options = options or Options()
    problem = Problem(
        star=solar_star(),
        grid=grid,
        treatment=treatment,
        outside=(Outside.fixed(SUN_PARAMETER_SOURCE, **SUN_PARAMETERS),),
        options=options,
    )
    low, high = problem.bounds
    nominal = np.array([SUN_TEFF_K, SUN_LOGG, SUN_FEH, SUN_VMIC_START])
    if not ((low <= nominal) & (nominal <= high)).all():
        return SolarLines()
    preliminary = preliminary_lines(problem)
    if not enough_lines(problem, preliminary):
        return SolarLines()
    minimum, _ = local_solve(problem, nominal, preliminary)
    if minimum.state is None or not minimum.converged or minimum.at_bound.any():
        return SolarLines()
    everything = problem.replace(options=Options.from_dict({**options.as_dict(), "worst_grade": 4}))
    abundance, *_ = everything.line_abundances(minimum.theta)
    values = abundance + everything.log_gf_shift
    return SolarLines(
        {str(key): float(value) for key, value in zip(everything.keys, values, strict=True) if np.isfinite(value)},
        float(minimum.theta[3]),
    )
