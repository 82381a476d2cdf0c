"""Covariances of the parameters, the star's own part and the list's part apart; sensitivities; influence of single
lines.
"""

from __future__ import annotations

import numpy as np

from specsolve.errors import OutOfGridError

from .newton import STEP_UNIT
from .problem import Problem, common_abundances
from .residuals import balance_operator, residual_vector
from .robust import FEW_FE2_LINES
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


def scatter_freedom(problem: Problem, state: BalanceState) -> np.ndarray:
    """Degrees of freedom of the line-to-line term of each ion, shape (2,).

    As it was estimated: pooled over the ions where either has few lines (`robust.line_to_line_terms`), else one by one.
    """
    n_first = int((state.used & ~problem.inputs.is_fe2).sum())
    n_second = int((state.used & problem.inputs.is_fe2).sum())
    n_plane = 3 if n_first > 3 else 1
    if n_second >= FEW_FE2_LINES and n_first >= FEW_FE2_LINES:
        return np.array([n_first - n_plane, n_second - 1], float)
    pooled = (n_first - n_plane if n_first else 0) + (n_second - 1 if n_second else 0)
    return np.full(2, float(pooled))


def student_factors(problem: Problem, state: BalanceState, line_gain: np.ndarray, variances: np.ndarray) -> np.ndarray:
    """Half-width of the 68 % interval over the standard error for each free parameter, shape (n_free,), at least 1.

    Only the part of the variance that the line-to-line term makes is estimated; its share q gives the effective degrees of
    freedom ``1 / sum(q_ion^2 / nu_ion)`` (Welch 1947, Biometrika 34, 28; Satterthwaite 1946, Biometrics Bulletin 2, 110).

    Parameters
    ----------
    problem : Problem
    state : BalanceState
    line_gain : ndarray, shape (n_free, n_lines)
        d theta / dA of each line, up to a unit of each row.
    variances : ndarray, shape (n_free,)
        Diagonal of Cov_star without the factors, in the same units.
    """
    place, scatter = problem.inputs.place, state.weighting.variances.scatter
    gain = np.where(state.used, np.nan_to_num(line_gain), 0.0)
    freedom = np.maximum(scatter_freedom(problem, state), 1.0)
    factors = np.ones(gain.shape[0])
    if not (variances > 0.0).all():
        return factors
    parts = np.stack([(gain**2) @ np.where(state.used & (place == ion), scatter, 0.0) for ion in (0, 1)])
    shares = np.minimum(parts / variances, 1.0)
    if freedom[0] == freedom[1]:  # one pooled term
        inverse = shares.sum(axis=0) ** 2 / freedom[0]
    else:
        inverse = (shares**2 / freedom[:, None]).sum(axis=0)
    return student_half_width(inverse)


def student_half_width(inverse_freedom: np.ndarray) -> np.ndarray:
    """Half-width of the central 68.27 % of Student's t with 1/inverse_freedom degrees of freedom.

    By the expansion in 1/nu of its quantile about the normal one (Abramowitz & Stegun 1964, 26.7.5), at the quantile 1;
    within 1 % for three degrees of freedom or more.

    Examples
    --------
    >>> student_half_width(np.array([0.0, 0.1, 0.2])).round(3).tolist()
    [1.0, 1.053, 1.111]
    """
    r = np.asarray(inverse_freedom, float)
    # The four polynomials of 26.7.5 at x = 1.
    return 1.0 + r * (2.0 / 4.0 + r * (24.0 / 96.0 + r * (24.0 / 384.0 + r * (-528.0 / 92160.0))))


def parameter_covariances(problem: Problem, state: BalanceState) -> tuple[np.ndarray, np.ndarray]:
    """Cov_star and Cov_list, shape (4, 4) each; rows of fixed parameters are zero; nan where undetermined.

    The estimate moves by ``d theta = -K d r``, ``K = H^-1 J^T C^-1``, ``H = J^T C^-1 J + Lambda`` with the
    precision Lambda of the
    Outside terms. So ``Cov_list = K C_list K^T`` and ``Cov_star = K C_star K^T + H^-1 Lambda H^-1``; where
    residuals and
    free parameters are equally many, K is the inverse Jacobian.

    The line-to-line term s is estimated from few lines, so Cov_star is widened by Student's factor f of each parameter,
    ``Cov_ij f_i f_j``: its diagonal roots are half-widths of 68 % intervals (`student_factors`).
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
    factors = student_factors(problem, state, gain @ state.operator[rows], np.diag(star_part))
    star[place] = star_part * scale * np.outer(factors, factors)
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
