"""From a starting point to a minimum of r^T C^-1 r plus the Outside terms, inside the box of the grid."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.errors import OutOfGridError

from .problem import Problem
from .state import BalanceState
from .steps import (
    LEVENBERG_START,
    MAX_HALVINGS,
    MAX_STEP,
    NEAR_ZERO_VMIC,
    ON_FACE,
    RANK_TOLERANCE,
    ROOT_OBJECTIVE,
    ROUGH_TOLERANCE,
    STALLED_STEP,
    STEP_TOLERANCE,
    STEP_UNIT,
    VMIC,
)

NO_ABUNDANCE = "no line has an abundance here (beside missing nodes, or outside the tables)"


@dataclass(frozen=True, eq=False)
class Minimum:
    """Where a refinement ended.

    Attributes
    ----------
    theta : ndarray, shape (4,)
    state : BalanceState or None
        None if not even the starting point could be evaluated.
    objective : float
        r^T C^-1 r plus Outside terms.
    converged : bool
    at_bound : ndarray of bool, shape (4,)
        Parameters that the box of the grid stops.
    iterations : int
    failure : str
        Why there is no state; empty otherwise.
    blocked : bool
        The way on leads into a cell with missing nodes: the minimum lies beyond, not here.
    """

    theta: np.ndarray
    state: BalanceState | None
    objective: float
    converged: bool
    at_bound: np.ndarray
    iterations: int
    failure: str = ""
    blocked: bool = False


def whitened_system(problem: Problem, state: BalanceState) -> tuple[np.ndarray, np.ndarray]:
    """Whitened residuals z and dz/dtheta over active residuals and Outside terms; z^T z is the objective.

    Residuals that these lines cannot form (nan) are left out.
    """
    active = problem.active & np.isfinite(state.residuals)
    rows = np.flatnonzero(active)
    covariance = state.covariance[np.ix_(rows, rows)]
    lower = np.linalg.cholesky(covariance) if rows.size else np.zeros((0, 0))
    both = np.linalg.solve(lower, np.column_stack([state.residuals[rows], state.jacobian[rows]]))
    if not problem.outside:
        return both[:, 0], both[:, 1:]
    outside, outside_jacobian = problem.outside_terms(state.theta)
    return np.concatenate([both[:, 0], outside]), np.vstack([both[:, 1:], outside_jacobian])


def refine(
    problem: Problem,
    start: np.ndarray,
    allowed: np.ndarray | None = None,
    rough: bool = False,
    previous: BalanceState | None = None,
) -> Minimum:
    """Damped Gauss-Newton from one starting point.

    Each step refreshes weights, line-to-line term and strength axis, so that the end is their common fixed point. A
    step is accepted if
    the objective, with the covariance of the point it starts from, does not grow; otherwise it is shortened and
    turned
    towards the gradient (Levenberg). Parameters that leave the box of the grid stay on its face.

    Parameters
    ----------
    problem : Problem
    start : ndarray, shape (4,)
    allowed : ndarray of bool, shape (n_lines,), optional
    rough : bool
        End at a step of 12 K and the like, with predicted widths to first order.
    previous : BalanceState, optional
        Near the start: where the weights begin; changes the speed alone.
    """
    if problem.compiled and problem.linear_outside:
        from .bulk import refine_compiled

        return refine_compiled(problem, start, allowed, rough, previous)
    low, high = problem.bounds
    theta = np.clip(np.asarray(start, float), low, high)
    for name, value in problem.fixed.items():
        place = ("teff", "logg", "feh", "vmic").index(name)
        theta[place] = value
    state, failure = _evaluate(problem, theta, allowed, previous, rough)
    if state is not None and not rough:  # predicted widths follow the weights: the first step is judged with these too
        state, failure = _evaluate(problem, theta, allowed, state, rough)
    nowhere = np.zeros(4, dtype=bool)
    if state is None:
        return Minimum(theta, None, np.inf, False, nowhere, 0, failure)
    free, damping, converged = problem.free, 0.0, False
    iteration, at_bound, blocked = 0, nowhere, False
    for step_number in range(1, problem.options.max_iterations + 1):
        iteration = step_number
        z, jacobian = whitened_system(problem, state)
        scaled = jacobian * STEP_UNIT
        gradient = scaled.T @ z
        at_bound = np.zeros(4, dtype=bool)
        at_bound[free] = ((theta <= low) & (gradient > 0.0))[free] | ((theta >= high) & (gradient < 0.0))[free]
        moving = free[~at_bound[free]]
        if moving.size == 0:
            converged = True
            break
        accepted, hit_missing = False, False
        for _ in range(MAX_HALVINGS):
            step = _step(scaled[:, moving], z, damping)
            size = float(np.max(np.abs(step)))
            step *= min(1.0, MAX_STEP / size) if size > 0.0 else 1.0
            trial = theta.copy()
            trial[moving] = np.clip(theta[moving] + step * STEP_UNIT[moving], low[moving], high[moving])
            new_state, failure = _evaluate(problem, trial, allowed, state, rough)
            if new_state is not None and _not_worse(problem, state, new_state):
                accepted = True
                break
            hit_missing |= new_state is None
            damping = max(10.0 * damping, LEVENBERG_START)
        moved = float(np.max(np.abs(trial - theta) / STEP_UNIT))
        small = moved < (ROUGH_TOLERANCE if rough else STEP_TOLERANCE)
        if not accepted or (small and damping > 0.0):
            # A damped step may be small because it had to be: the end is where the full step is small too.
            met = float(z @ z) <= ROOT_OBJECTIVE
            converged = met or float(np.max(np.abs(_step(scaled[:, moving], z, 0.0)))) < STALLED_STEP
            blocked = hit_missing and not converged
            break
        theta, state = trial, new_state
        damping = 0.0 if damping <= LEVENBERG_START else 0.1 * damping
        if small:
            converged = True
            break
    z, _ = whitened_system(problem, state)
    objective = float(z @ z)
    on_face = (theta <= low + ON_FACE * STEP_UNIT) | (theta >= high - ON_FACE * STEP_UNIT)
    stopped = np.zeros(4, dtype=bool)
    # A root that happens to lie on a face is not stopped by it. At vmic = 0 the widths are even in vmic: every
    # slope vanishes.
    stopped[free] = on_face[free] & (objective > ROOT_OBJECTIVE)
    if VMIC in free and low[VMIC] == 0.0 and theta[VMIC] < NEAR_ZERO_VMIC and not converged:
        stopped[VMIC] = True
    return Minimum(theta, state, objective, converged, stopped, iteration, blocked=blocked)


def _step(jacobian: np.ndarray, z: np.ndarray, damping: float) -> np.ndarray:
    """Levenberg-Marquardt step; the damping is relative to the largest curvature."""
    normal = jacobian.T @ jacobian
    scale = float(np.trace(normal)) / max(normal.shape[0], 1)
    normal = normal + (damping + RANK_TOLERANCE * RANK_TOLERANCE) * scale * np.eye(normal.shape[0])
    if damping == 0.0:
        return -np.linalg.lstsq(jacobian, z, rcond=RANK_TOLERANCE)[0]
    return -np.linalg.solve(normal, jacobian.T @ z)


def _not_worse(problem: Problem, old: BalanceState, new: BalanceState) -> bool:
    """Compare both states in the metric of the old one, so that a growing covariance is no progress."""
    rows = np.flatnonzero(problem.active & np.isfinite(old.residuals))
    if not np.isfinite(new.residuals[rows]).all():
        return False
    both = np.column_stack([old.residuals[rows], new.residuals[rows]])
    values = np.einsum("ij,ij->j", both, np.linalg.solve(old.covariance[np.ix_(rows, rows)], both))
    if problem.outside:
        terms = [problem.outside_terms(state.theta)[0] for state in (old, new)]
        values = values + [t @ t for t in terms]
    value_before, value_after = (float(v) for v in values)
    # Lines may leave the table on the way; the small allowance keeps rounding from stopping a converged point.
    return value_after <= value_before * (1.0 + 1e-6) + 1e-9


def _evaluate(problem: Problem, theta: np.ndarray, allowed, previous, rough: bool) -> tuple[BalanceState | None, str]:
    try:
        state = problem.balance(theta, allowed, previous, rough)
    except OutOfGridError as error:
        return None, str(error)
    if not state.used.any():
        return None, NO_ABUNDANCE
    return state, ""
