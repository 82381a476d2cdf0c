"""Systematic terms that can be had from one solve, kept apart from both covariances.

Terms that need other stores (blanketing multiplier, [alpha/Fe], treatment) are differences of two solves and are
not made here.
"""

from __future__ import annotations

import numpy as np

from .minima import FoundMinimum
from .problem import Problem
from .uncertainty import parameter_gain

SOLAR_IRON_ERROR_DEX = 0.04  # Asplund, Amarsi & Grevesse 2021, A&A 653, A141
CONTINUUM_WIDTH_SHARE = 0.02  # all widths larger by this share: a misplaced continuum (common practice, no source)


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
        "continuum" (all widths 2 % larger), "solar_iron" (7.46 larger by its error; absolute work only), "fe2_scale".
    alternatives : dict
        "fe2_alternative".
    """
    state = item.minimum.state
    gain = parameter_gain(problem, state)
    used = state.used
    d_abundance = np.where(used, state.d_width, 0.0) * np.log10(1.0 + CONTINUUM_WIDTH_SHARE)
    response = np.where(np.isfinite(state.response), state.response, 0.0)
    shifts = {"continuum": gain @ (response @ d_abundance)}
    if not problem.zero_points.differential:
        shifts["solar_iron"] = gain @ (response @ np.where(used, -SOLAR_IRON_ERROR_DEX, 0.0))
    alternatives = {}
    if other_scale is not None:
        alternatives["fe2_alternative"] = other_scale
        shifts["fe2_scale"] = other_scale - item.minimum.theta
    return shifts, alternatives
