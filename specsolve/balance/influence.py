"""What each line does to the parameters: `specsolve.balance.uncertainty.line_influence` for all lines at once.

Leaving line i out of a weighted least-squares fit moves its coefficients by ``-S^-1 x_i w_i e_i / (1 - h_i)`` with the
deviation e_i, the leverage ``h_i = w_i x_i^T S^-1 x_i`` and ``S = X^T W X`` (for example Cook & Weisberg 1982, Residuals
and Influence in Regression, section 2.2), and a weighted mean by ``-w_i (y_i - mean) / (W - w_i)``.
"""

from __future__ import annotations

import numpy as np

from .problem import Problem
from .residuals import (
    EXCITATION,
    IONIZATION,
    METALLICITY,
    MIN_EXCITATION_SPREAD_EV,
    MIN_STRENGTH_SPREAD_DEX,
    STRENGTH,
)
from .state import BalanceState
from .uncertainty import line_influence, parameter_gain

# The closed form is used where leaving one line out cannot change which residuals can be formed.
SPREAD_MARGIN = 2.0
LEAST_FREEDOM = 1e-3  # of 1 - h
LEAST_FE1_LINES, LEAST_FE2_LINES = 6, 2


def leave_one_out(problem: Problem, state: BalanceState) -> np.ndarray:
    """Change of (teff, logg, feh, vmic) when one line alone is left out, shape (n_lines, 4); nan for unused lines."""
    changes = residual_changes(problem, state)
    if changes is None:
        return line_influence(problem, state)
    needed = problem.active & np.isfinite(state.residuals)
    influence = changes[:, needed] @ parameter_gain(problem, state)[:, needed].T
    return np.where(state.used[:, None], influence, np.nan)


def residual_changes(problem: Problem, state: BalanceState) -> np.ndarray | None:
    """Change of the four residuals when one line is left out, shape (n_lines, 4); None where the closed form does not
    hold.
    """
    inputs, w = problem.inputs, state.weighting.weights
    used = state.used & (w > 0.0)
    first, second = used & ~inputs.is_fe2, used & inputs.is_fe2
    if first.sum() < LEAST_FE1_LINES or (second.any() and second.sum() < LEAST_FE2_LINES):
        return None
    y = np.where(used, state.relative_abundance, 0.0)
    w = np.where(used, w, 0.0)
    changes = np.zeros((used.size, 4))
    place = np.flatnonzero(first)
    share = w[place] / w[place].sum()
    axes = np.stack([inputs.excitation_potential[place], state.weighting.strength[place]], axis=1)
    centred = axes - share @ axes
    spread = np.sqrt(share @ centred**2)
    if not (spread > SPREAD_MARGIN * np.array([MIN_EXCITATION_SPREAD_EV, MIN_STRENGTH_SPREAD_DEX])).all():
        return None
    columns = np.column_stack([np.ones(place.size), centred / spread])
    normal = (columns.T * share) @ columns
    if np.linalg.det(normal) < LEAST_FREEDOM:
        return None
    solved = np.linalg.solve(normal, columns.T)
    deviation = y[place] - columns @ (solved * share @ y[place])
    freedom = 1.0 - share * np.einsum("ij,ji->i", columns, solved)
    if not (freedom > LEAST_FREEDOM).all():
        return None
    slopes = -(solved[1:] * (share * deviation / freedom)).T / spread
    changes[place, EXCITATION], changes[place, STRENGTH] = slopes[:, 0], slopes[:, 1]
    first_mean = _mean_changes(y, w, first)
    changes[:, IONIZATION] = first_mean - _mean_changes(y, w, second)
    changes[:, METALLICITY] = first_mean if "logg" in problem.fixed else _mean_changes(y, w, used)
    return changes


def _mean_changes(y: np.ndarray, weights: np.ndarray, members: np.ndarray) -> np.ndarray:
    """Change of the weighted mean of the members when each is left out; zero for the others."""
    changes = np.zeros(y.size)
    if members.any():
        total = weights[members].sum()
        mean = weights[members] @ y[members] / total
        changes[members] = -weights[members] * (y[members] - mean) / (total - weights[members])
    return changes
