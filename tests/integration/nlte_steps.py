"""Steps from LTE to NLTE of simulated stars: widths of the grid in LTE, solved in NLTE."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from specsolve.balance.solution import Solution
from specsolve.balance.solve import solve
from specsolve.balance.star import Star
from specsolve.constants import SOLAR_IRON
from specsolve.grid.interpolate import Interpolator
from specsolve.grid.store import ResponseGrid

USABLE = (-6.3, -4.7)  # log10(W / lambda) of the lines that are given to the solver; its own cuts come on top
RELATIVE_ERROR = 0.02


def lte_star(grid: ResponseGrid, theta, name: str = "simulated") -> Star:
    """Noiseless LTE widths at teff, logg, feh, vmic."""
    lines = grid.lines
    theta = np.asarray(theta, dtype=float)
    log_w = Interpolator(grid, "lte").widths(theta, np.full(len(lines), SOLAR_IRON + theta[2]))
    used = (log_w > USABLE[0]) & (log_w < USABLE[1])
    width = 10.0 ** log_w[used] * lines.wavelength_air[used] * 1e3
    return Star.from_arrays(
        name, lines.wavelength_air[used], lines.ion[used], width, RELATIVE_ERROR * width,
        excitation_potential=lines.excitation_potential[used],
    )  # fmt: skip


def nlte_solution(grid: ResponseGrid, theta, fix: Mapping[str, float] | None = None) -> Solution:
    """The NLTE solution of LTE widths; with the LTE microturbulence held where the lines do not fix it."""
    star = lte_star(grid, theta)
    solution = solve(star, grid, treatment="nlte", fix=fix)
    if solution.status == "outside_grid" and "vmic" in solution.reason:
        solution = solve(star, grid, treatment="nlte", fix={**(fix or {}), "vmic": float(theta[3])})
    return solution


def nlte_step(grid: ResponseGrid, theta, fix: Mapping[str, float] | None = None) -> np.ndarray:
    """NLTE minus LTE parameters (teff, logg, feh, vmic); nan if the NLTE solve has no solution."""
    solution = nlte_solution(grid, theta, fix)
    if solution.status not in ("solved", "tied"):
        return np.full(4, np.nan)
    return solution.parameters - np.asarray(theta, dtype=float)
