"""How often the stated errors hold: stars with known truth measured many times, solved, and compared with the truth.

The truths are atmospheres converged at the point itself with widths of the full engine (`tests.integration.full_engine`).
Errors of log gf are drawn in two ways: once for the list, so that all stars share them, and anew for each star. In the
first, Cov_star alone must hold the scatter about what the same list gives without noise; in the second,
Cov_star + Cov_list must hold the truth.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from specsolve.balance.minima import local_solve, preliminary_lines
from specsolve.balance.problem import Problem
from specsolve.balance.uncertainty import parameter_covariances
from specsolve.grid.store import ResponseGrid
from tests.integration.full_engine import engines
from tests.integration.simulated import Regime, measured

INTERVAL = 0.6827
JOINT_LIMIT = float(chi2.ppf(INTERVAL, 4))
BOX = {"teff": (0.0, 0.0), "logg": (0.0, 0.0), "feh": (0.0, 0.0)}  # the truths come from the atmospheres
MANY = Regime(name="many lines", **BOX, noise=(0.02, 0.06), floor_ma=1.0, scatter=0.03)
FEW_FE2 = Regime(name="few Fe II", **BOX, n_fe2=(2, 6), noise=(0.03, 0.08), floor_ma=1.5, scatter=0.04)
FEW = Regime(name="few lines", **BOX, n_fe1=(20, 35), n_fe2=(3, 6), noise=(0.03, 0.08), floor_ma=1.5, scatter=0.04)
REGIMES = (MANY, FEW_FE2, FEW)


@dataclass(frozen=True)
class Pull:
    """One star: class, regime, differences to what is asked in units of the error, squared joint distance."""

    kind: str
    regime: str
    z: np.ndarray
    joint: float


def kind_of(theta: np.ndarray) -> str:
    """Class of star."""
    if theta[2] <= -1.0:
        return "metal-poor"
    return "dwarf" if theta[1] >= 3.5 else "giant"


def pulls(n_draws: int, shared_gf: bool, seed: int, every: int = 1) -> tuple[list[Pull], int]:
    """Pulls of all atmospheres, and how many stars led nowhere.

    Parameters
    ----------
    n_draws : int
        Measurements of each atmosphere.
    shared_gf : bool
        log gf errors once for the list; else anew for each star.
    seed : int
    every : int
        Take every n-th atmosphere.
    """
    grid = ResponseGrid.packaged()
    lines = grid.lines
    rng = np.random.default_rng(seed)
    list_errors = lines.log_gf_error * rng.normal(size=len(lines)) if shared_gf else None
    found, lost = [], 0
    for place, item in enumerate(engines()[::every]):
        for draw in range(n_draws):
            regime = REGIMES[(place + draw) % len(REGIMES)]
            stream = np.random.default_rng([seed, place, draw])
            made = measured(item.widths, lines, item.theta, regime, stream, f"{place}.{draw}", gf_errors=list_errors)
            solution = made and _solved(Problem(star=made.star, grid=grid, compiled=True), item.theta)
            if not solution:
                lost += 1
                continue
            theta, star, shared = solution
            asked, covariance = item.theta, star + shared
            if shared_gf:
                quiet = _quiet(item, made, lines, list_errors)
                reference = _solved(Problem(star=quiet, grid=grid, compiled=True), item.theta)
                if not reference:
                    lost += 1
                    continue
                asked, covariance = reference[0], star
            away = theta - asked
            joint = float(away @ np.linalg.solve(covariance, away))
            found.append(Pull(kind_of(item.theta), regime.name, away / np.sqrt(np.diag(covariance)), joint))
    return found, lost


def _solved(problem: Problem, start: np.ndarray):
    """The minimum that the truth belongs to, with both covariances; None where there is none inside the grid."""
    minimum, _ = local_solve(problem, start, preliminary_lines(problem))
    if minimum.state is None or not minimum.converged or minimum.at_bound.any():
        return None
    star, shared = parameter_covariances(problem, minimum.state)
    return (minimum.theta, star, shared) if np.isfinite(star).all() else None


def _quiet(item, made, lines, list_errors):
    """The same star with its lines measured without noise or scatter of its own."""
    from dataclasses import replace

    from specsolve.constants import SOLAR_IRON

    log_rw = item.widths(SOLAR_IRON + item.theta[2] + list_errors)
    place = {
        (round(float(w), 4), ion): i for i, (w, ion) in enumerate(zip(lines.wavelength_air, lines.ion, strict=True))
    }
    star = made.star
    at = [place[(round(float(w), 4), ion)] for w, ion in zip(star.wavelength_air, star.ion, strict=True)]
    return replace(star, equivalent_width=star.wavelength_air * 1e3 * 10.0 ** log_rw[at])


def shares(found: list[Pull]) -> tuple[np.ndarray, float]:
    """Share of the stars whose truth lies in the interval of each parameter, shape (4,), and in the joint ellipsoid."""
    z = np.array([one.z for one in found])
    joint = np.array([one.joint for one in found])
    return (np.abs(z) < 1.0).mean(axis=0), float((joint < JOINT_LIMIT).mean())
