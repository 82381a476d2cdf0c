"""Covariances of the parameters, the star's own part and the list's part apart; sensitivities; influence of single
lines.
"""

from __future__ import annotations

import numpy as np

from specsolve.errors import OutOfGridError

from .newton import STEP_UNIT
from .problem import Problem, common_abundances
from .residuals import balance_operator, residual_vector
from .solution import PARAMETER_NAMES, Sensitivity
from .state import BalanceState

# Shifts of the sensitivity table, in the order of PARAMETER_NAMES: K, dex, dex, km/s.
SENSITIVITY_SHIFTS = {"teff": 100.0, "logg": 0.3, "feh": 0.2, "vmic": 0.2}
# A direction of parameter space whose curvature is below this share of the largest is undetermined.
SINGULAR_SHARE = 1e-12
# Variance of Huber's estimate over that of weighted least squares on the same normal errors, E[psi^2]/E[psi']^2 at
# k = 1.345,
# over the variance that frozen weights suggest, E[w^2]/E[w]^2 (both from the normal distribution).
HUBER_INEFFICIENCY = 1.04


def parameter_covariances(problem: Problem, state: BalanceState) -> tuple[np.ndarray, np.ndarray]:
    """Cov_star and Cov_list, shape (4, 4) each; rows of fixed parameters are zero; nan where undetermined.

    The estimate moves by ``d theta = -K d r``, ``K = H^-1 J^T C^-1``, ``H = J^T C^-1 J + Lambda`` with the
    precision Lambda of the
    Outside terms. So ``Cov_list = K C_list K^T`` and ``Cov_star = K C_star K^T + H^-1 Lambda H^-1``; where
    residuals and
    free parameters are equally many, K is the inverse Jacobian.
    """
    free = problem.free
    star, shared = np.zeros((4, 4)), np.zeros((4, 4))
    if free.size == 0:
        return star, shared
    rows = np.flatnonzero(problem.active & np.isfinite(state.residuals))
    unit = STEP_UNIT[free]
    jacobian = state.jacobian[np.ix_(rows, free)] * unit
    precision = np.linalg.inv(state.covariance[np.ix_(rows, rows)])
    _, outside = problem.outside_terms(state.theta)
    outside = outside[:, free] * unit
    lam = outside.T @ outside
    information = jacobian.T @ precision @ jacobian + lam
    values = np.linalg.eigvalsh(information)
    place = np.ix_(free, free)
    if not np.isfinite(values).all() or values[0] <= SINGULAR_SHARE * values[-1]:
        star[place] = np.nan
        shared[place] = np.nan
        return star, shared
    inverse = np.linalg.inv(information)
    gain = inverse @ jacobian.T @ precision
    loss = HUBER_INEFFICIENCY if problem.options.loss == "huber" else 1.0
    scale = np.outer(unit, unit)
    star_part = gain @ (loss * state.covariance_star[np.ix_(rows, rows)]) @ gain.T + inverse @ lam @ inverse
    star[place] = star_part * scale
    shared[place] = gain @ state.covariance_list[np.ix_(rows, rows)] @ gain.T * scale
    return 0.5 * (star + star.T), 0.5 * (shared + shared.T)


def parameter_gain(problem: Problem, state: BalanceState) -> np.ndarray:
    """d theta / d r, shape (4, 4): minus K of `parameter_covariances`, zero for fixed parameters and removed
    residuals.
    """
    free = problem.free
    rows = np.flatnonzero(problem.active & np.isfinite(state.residuals))
    gain = np.zeros((4, 4))
    if free.size == 0 or rows.size == 0:
        return gain
    unit = STEP_UNIT[free]
    jacobian = state.jacobian[np.ix_(rows, free)] * unit
    precision = np.linalg.inv(state.covariance[np.ix_(rows, rows)])
    _, outside = problem.outside_terms(state.theta)
    outside = outside[:, free] * unit
    information = jacobian.T @ precision @ jacobian + outside.T @ outside
    if not np.isfinite(information).all() or np.linalg.cond(information) > 1.0 / SINGULAR_SHARE:
        return np.full((4, 4), np.nan)
    gain[np.ix_(free, rows)] = -unit[:, None] * (np.linalg.inv(information) @ jacobian.T @ precision)
    return gain


def line_influence(problem: Problem, state: BalanceState) -> np.ndarray:
    """Change of the parameters when one line alone is left out, shape (n_lines, 4); nan for unused lines.

    First order: the residuals without the line, with the weights of the others kept, times d theta / d r.
    """
    inputs, weights = problem.inputs, state.weighting.weights
    gain = parameter_gain(problem, state)
    y = np.where(state.used, state.relative_abundance, 0.0)
    influence = np.full((weights.size, 4), np.nan)
    for line in np.flatnonzero(state.used):
        without = weights.copy()
        without[line] = 0.0
        operator = balance_operator(
            inputs.is_fe2,
            inputs.excitation_potential,
            state.weighting.strength,
            without,
            metallicity_from_fe1="logg" in problem.fixed,
        )
        change = residual_vector(operator, y, state.theta[2]) - state.residuals
        needed = problem.active & np.isfinite(state.residuals)
        if np.isfinite(change[needed]).all():
            influence[line] = gain @ np.where(needed, change, 0.0)
    return influence


def sensitivities(problem: Problem, state: BalanceState) -> tuple[Sensitivity, ...]:
    """Mean A(Fe I) and A(Fe II) at parameters shifted one by one, lines and weights kept.

    The metallicity shift changes the atmosphere alone.
    """
    weights = state.weighting.weights
    is_fe2 = problem.inputs.is_fe2
    both = np.array([weights[~is_fe2].sum() > 0.0, weights[is_fe2].sum() > 0.0])
    here = common_abundances(is_fe2, state.abundance, weights)
    table = []
    for place, name in enumerate(PARAMETER_NAMES):
        for sign in (1.0, -1.0):
            shift = sign * SENSITIVITY_SHIFTS[name]
            theta = state.theta.copy()
            theta[place] += shift
            difference = np.full(2, np.nan)
            try:
                abundance, *_ = problem.line_abundances(theta)
            except OutOfGridError:
                abundance = np.full(weights.shape, np.nan)
            if np.isfinite(abundance[weights > 0.0]).all() and both.any():
                difference = np.where(both, common_abundances(is_fe2, abundance, weights) - here, np.nan)
            table.append(
                Sensitivity(parameter=name, shift=shift, d_fe1=float(difference[0]), d_fe2=float(difference[1]))
            )
    return tuple(table)
