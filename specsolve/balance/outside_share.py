"""How much of each parameter comes from the lines and how much from outside knowledge."""

from __future__ import annotations

import numpy as np

from .newton import STEP_UNIT
from .problem import Problem
from .solution import PARAMETER_NAMES
from .state import BalanceState


def outside_share(problem: Problem, state: BalanceState) -> np.ndarray:
    """Share of outside knowledge in each parameter, shape (4,): 0 lines alone, 1 fixed.

    The estimate follows a change d of all expected outside values by ``H^-1 Lambda d`` (the notation of
    `specsolve.balance.uncertainty.parameter_covariances`); the share of a parameter is its diagonal element. nan where
    the parameters are undetermined.
    """
    share = np.zeros(4)
    share[[place for place, name in enumerate(PARAMETER_NAMES) if name in problem.fixed]] = 1.0
    free = problem.free
    if free.size == 0 or not any(item.terms for item in problem.outside):
        return share
    rows = np.flatnonzero(problem.active & np.isfinite(state.residuals))
    unit = STEP_UNIT[free]
    jacobian = state.jacobian[np.ix_(rows, free)] * unit
    _, outside = problem.outside_terms(state.theta)
    outside = outside[:, free] * unit
    lam = outside.T @ outside
    try:
        precision = np.linalg.inv(state.covariance[np.ix_(rows, rows)])
        share[free] = np.diag(np.linalg.solve(jacobian.T @ precision @ jacobian + lam, lam))
    except np.linalg.LinAlgError:
        share[free] = np.nan
    return share
