"""Systematic terms, each with its name, kept apart from both covariances.

All but the last are first order: a change d of every line abundance moves the residuals by ``(dr/dA) d`` and the
parameters by ``d theta = (d theta / d r) dr`` (`specsolve.balance.uncertainty.parameter_gain`). A term is the shift for
the stated step; the opposite step gives the opposite shift.

| name | step |
|---|---|
| continuum | all widths larger by 2 % |
| solar_iron | A(Fe) of the Sun larger by its error, 0.04 dex; absolute work only |
| alpha | [alpha/Fe] of the atmosphere larger by 0.2 dex |
| missing_opacity | multiplier of the blanketing with twice its logarithm; without it the opposite |
| hydrogen_collisions | collisions with hydrogen three times as frequent; treatment nlte only |
| fe2_scale | the other scale of Fe II log gf; a solve of its own |

Terms whose responses are not stored for the grid in use are left out, so that a missing term is seen to be missing.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.errors import SpecsolveError
from specsolve.grid.perturbations import ALPHA, MISSING_OPACITY, Perturbations

from .minima import FoundMinimum
from .problem import Problem
from .uncertainty import parameter_gain

SOLAR_IRON_ERROR_DEX = 0.04  # Asplund, Amarsi & Grevesse 2021, A&A 653, A141
CONTINUUM_WIDTH_SHARE = 0.02  # all widths larger by this share: a misplaced continuum (common practice, no source)
HYDROGEN_COLLISIONS = "hydrogen_collisions"
# Step of each stored response: dex of [alpha/Fe] (scatter of stars about the law, common practice, no source); power of
# the multiplier; log10 of the factor on the collisions (3, the range left by calibration).
PERTURBATION_STEPS = {ALPHA: 0.2, MISSING_OPACITY: 1.0, HYDROGEN_COLLISIONS: float(np.log10(3.0))}
BEYOND_LTE = (HYDROGEN_COLLISIONS,)


def systematic_shifts(
    problem: Problem, item: FoundMinimum, other_scale: np.ndarray | None
) -> tuple[dict[str, np.ndarray], dict[str, np.ndarray]]:
    """Shifts of (teff, logg, feh, vmic) by name, and parameters on other scales by name.

    Parameters
    ----------
    problem : Problem
    item : FoundMinimum
    other_scale : ndarray, shape (4,), or None
        Parameters with the other Fe II scale.

    Returns
    -------
    shifts : dict
        Names and steps as in the table of this module.
    alternatives : dict
        "fe2_alternative".
    """
    state = item.minimum.state
    gain = parameter_gain(problem, state)
    used = state.used
    response = gain @ np.where(np.isfinite(state.response), state.response, 0.0)
    slope = np.where(used, state.d_width, 0.0)
    shifts = {"continuum": response @ (slope * np.log10(1.0 + CONTINUUM_WIDTH_SHARE))}
    if not problem.zero_points.differential:
        shifts["solar_iron"] = response @ np.where(used, -SOLAR_IRON_ERROR_DEX, 0.0)
    stored = stored_responses(problem.grid)
    if stored is not None:
        for name, step in PERTURBATION_STEPS.items():
            if name not in stored.names or (name in BEYOND_LTE and problem.treatment == "lte"):
                continue
            # Widths that a perturbed atmosphere makes larger are met by a smaller abundance.
            shifts[name] = response @ (-slope * step * width_response(problem, item, stored, name))
    alternatives = {}
    if other_scale is not None:
        alternatives["fe2_alternative"] = other_scale
        shifts["fe2_scale"] = other_scale - item.minimum.theta
    return shifts, alternatives


def stored_responses(grid: Any) -> Perturbations | None:
    """First-order responses that belong to a grid; None where there are none."""
    try:
        return Perturbations.of_grid(getattr(grid, "unperturbed", grid))
    except (SpecsolveError, AttributeError):
        return None


def width_response(problem: Problem, item: FoundMinimum, stored: Perturbations, name: str) -> np.ndarray:
    """d log10(W/lambda) per unit of a perturbation at the minimum, shape (n_lines,) [dex]; zero for unused lines."""
    state, used = item.minimum.state, item.minimum.state.used
    offset = np.where(used, state.abundance + problem.log_gf_shift - SOLAR_IRON - state.theta[2], 0.0)
    places = stored.line_places(problem.keys)
    found = stored.response(name, state.theta, offset, np.maximum(places, 0))
    return np.where(used & np.isfinite(found), found, 0.0)
