"""One counterfactual: a changed problem solved from where the unchanged one ended, and by a full search if need be."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from specsolve.balance.minima import (
    enough_lines,
    local_solve,
    minimum_flags,
    predicted_lines,
    preliminary_lines,
    search,
)
from specsolve.balance.newton import Minimum
from specsolve.balance.outside import Outside
from specsolve.balance.problem import Problem
from specsolve.balance.solution import OUTSIDE_GRID, PARAMETER_NAMES, SOLVED, UNSOLVED
from specsolve.balance.state import BalanceState
from specsolve.balance.tiebreak import rank, set_aside_reason
from specsolve.balance.uncertainty import parameter_covariances, parameter_gain
from specsolve.errors import NotEnoughLinesError


@dataclass(frozen=True, eq=False)
class Point:
    """A solved problem without its report.

    Attributes
    ----------
    theta : ndarray, shape (4,)
        nan if unsolved.
    cov_star, cov_list : ndarray, shape (4, 4)
    state : BalanceState or None
    status, reason : str
    n_candidates : int
    flags : tuple of str
    """

    theta: np.ndarray
    cov_star: np.ndarray
    cov_list: np.ndarray
    state: BalanceState | None
    status: str
    reason: str = ""
    n_candidates: int = 1
    flags: tuple[str, ...] = ()

    @property
    def known(self) -> bool:
        """Whether there are parameters."""
        return bool(np.isfinite(self.theta).all())


def no_point(reason: str, status: str = UNSOLVED) -> Point:
    """A problem without a solution."""
    return Point(np.full(4, np.nan), np.full((4, 4), np.nan), np.full((4, 4), np.nan), None, status, reason, 0)


def point_at(problem: Problem, theta: np.ndarray, allowed: np.ndarray | None = None) -> Point:
    """The problem evaluated at a theta that is its solution, for covariances and line responses."""
    state = problem.balance(np.asarray(theta, float), allowed)
    star, shared = parameter_covariances(problem, state)
    return Point(np.asarray(theta, float), star, shared, state, SOLVED)


def candidate_at(problem: Problem, theta: np.ndarray) -> Point:
    """A candidate of the solve at its own parameters, with the lines that the cut on predicted strength keeps there."""
    theta = np.asarray(theta, float)
    preliminary = preliminary_lines(problem)
    state = problem.balance(theta, preliminary)
    there = Minimum(theta, state, 0.0, True, np.zeros(4, bool), 0)
    allowed = predicted_lines(problem, there, preliminary)
    return point_at(problem, theta, allowed if enough_lines(problem, allowed) else preliminary)


def solve_near(problem: Problem, start: np.ndarray) -> Point:
    """Solve a changed problem from a nearby start; a full search where that leads nowhere.

    Parameters
    ----------
    problem : Problem
    start : ndarray, shape (4,)
        Fixed parameters are put to their values.
    """
    start = np.array(start, float)
    for name, value in problem.fixed.items():
        start[PARAMETER_NAMES.index(name)] = value
    low, high = problem.bounds
    if np.any(start < low) or np.any(start > high):
        return no_point("outside the grid", OUTSIDE_GRID)
    preliminary = preliminary_lines(problem)
    if not enough_lines(problem, preliminary):
        return no_point("too few usable lines")
    minimum, _ = local_solve(problem, start, preliminary)
    if minimum.state is not None:
        flags = minimum_flags(problem, minimum, preliminary)
        if not set_aside_reason(flags, others=False):
            star, shared = parameter_covariances(problem, minimum.state)
            return Point(minimum.theta, star, shared, minimum.state, SOLVED, flags=flags)
    return solve_blind(problem)


def solve_blind(problem: Problem) -> Point:
    """A full search and the rule, without the report: status and parameters as `solve_problem` finds them."""
    try:
        found = search(problem)
    except NotEnoughLinesError as error:
        return no_point(str(error))
    if not found.found:
        return no_point(found.failures[0] if found.failures else "no starting point in the whole grid")
    ranking = rank(problem, found)
    item, candidate = ranking.found[0], ranking.candidates[0]
    star, shared = parameter_covariances(problem, item.minimum.state)
    status = ranking.status
    if candidate.set_aside:
        outside = {"outside_grid", "stopped_by_missing_node"} & set(item.flags)
        status = OUTSIDE_GRID if outside else UNSOLVED
    return Point(
        item.minimum.theta,
        star,
        shared,
        item.minimum.state,
        status,
        candidate.set_aside,
        len(ranking.candidates),
        item.flags,
    )


def with_fixed(problem: Problem, source: str, **values: float) -> Problem:
    """The problem with parameters held at given values, whatever was known of them before."""
    kept = tuple(item for item in problem.outside if not set(item.names) & set(values))
    return problem.replace(outside=(*kept, Outside.fixed(source, **values)))


def with_log_gf_shift(problem: Problem, shift: Mapping[str, float]) -> Problem:
    """The problem with all log gf of an ion moved by the same step [dex]; its lines stay."""
    rows = problem.rows
    log_gf, error = problem.star.log_gf.copy(), problem.star.log_gf_error.copy()
    use = np.zeros(len(problem.star), bool)
    use[rows] = True
    step = np.array([shift.get(ion, 0.0) for ion in problem.star.ion[rows].tolist()])
    log_gf[rows], error[rows] = problem.log_gf + step, problem.log_gf_error
    star = dataclasses.replace(problem.star, log_gf=log_gf, log_gf_error=error, use=use)
    return problem.replace(star=star)


def line_responses(problem: Problem, state: BalanceState) -> np.ndarray:
    """d theta / d A_i at fixed weights, shape (4, n_lines): what an error of a line abundance does to the result."""
    gain = parameter_gain(problem, state)
    rows = problem.active & np.isfinite(state.residuals)
    operator = np.where(rows[:, None], np.where(np.isfinite(state.operator), state.operator, 0.0), 0.0)
    return gain @ operator
