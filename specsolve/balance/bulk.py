"""Between `Problem` and the compiled Newton iteration: inputs as plain arrays, results as the usual objects."""

from __future__ import annotations

import numpy as np

from specsolve.grid.node_table import node_table

from .balance_kernel import Inputs, State, nowhere
from .kernel import LOSS_CODES
from .newton import NO_ABUNDANCE, Minimum
from .newton_kernel import finish_kernel, local_kernel, refine_kernel
from .problem import Problem
from .solution import PARAMETER_NAMES
from .state import BalanceState, Weighting
from .strength import LineVariances


def kernel_inputs(problem: Problem) -> Inputs:
    """The constant inputs of a problem, made once."""
    known = problem.__dict__.get("_kernel_inputs")
    if known is not None:
        return known
    lines = problem.inputs
    covariance = lines.zero_point_covariance
    low, high = problem.bounds
    terms, jacobian = problem.outside_terms(np.zeros(4))
    made = Inputs(
        lines=problem.line_indices.astype(np.int64),
        is_fe2=lines.is_fe2,
        gf_unknown=lines.gf_unknown,
        chi=lines.excitation_potential,
        width=lines.log_reduced_width,
        sigma_logw=lines.sigma_logw,
        sigma_gf=lines.known_sigma_gf,
        zero=lines.zero_point,
        zero_variance=np.ascontiguousarray(lines.zero_point_variance),
        shift=problem.log_gf_shift,
        zero_covariance=np.zeros((0, 0)) if covariance is None else np.ascontiguousarray(covariance),
        free=problem.free,
        active=problem.active,
        fixed=np.array([problem.fixed.get(name, np.nan) for name in PARAMETER_NAMES]),
        low=low,
        high=high,
        outside=terms,
        outside_jacobian=np.ascontiguousarray(jacobian),
        loss=LOSS_CODES[problem.options.loss],
        from_fe1="logg" in problem.fixed,
        max_iterations=problem.options.max_iterations,
    )
    problem.__dict__["_kernel_inputs"] = made
    return made


def _begin(problem: Problem) -> tuple:
    """The table, filled with the codes of the problem's lines, and the problem's inputs."""
    inputs = kernel_inputs(problem)
    table = node_table(problem.grid, problem.treatment)
    table.prepare(inputs.lines)
    return table.arrays, inputs


def refine_compiled(
    problem: Problem,
    start: np.ndarray,
    allowed: np.ndarray | None,
    rough: bool,
    previous: BalanceState | None,
) -> Minimum:
    """`newton.refine` by the compiled kernel.

    Raises
    ------
    numpy.linalg.LinAlgError
        The covariance of the residuals is singular.
    """
    table, inputs = _begin(problem)
    n = inputs.lines.size
    if allowed is None:
        allowed = np.ones(n, dtype=bool)
    before = nowhere(n, table.dA.size) if previous is None else _kernel_state(problem, previous)
    begin = np.asarray(start, dtype=np.float64)
    return _minimum(problem, begin, refine_kernel(table, inputs, begin, allowed, before, rough))


def local_compiled(
    problem: Problem, start: np.ndarray, preliminary: np.ndarray, least: tuple[int, int]
) -> tuple[Minimum, np.ndarray]:
    """`minima.local_solve` by the compiled kernel; `least` are the lines of each ion that the cut must leave."""
    table, inputs = _begin(problem)
    begin = np.asarray(start, dtype=np.float64)
    low, high = problem.options.reduced_width_range
    allowed, ended = local_kernel(table, inputs, begin, preliminary, low, high, *least)
    return _minimum(problem, begin, ended), allowed


def finish_compiled(
    problem: Problem, rough: Minimum, preliminary: np.ndarray, least: tuple[int, int]
) -> tuple[Minimum, np.ndarray]:
    """`minima.finish` by the compiled kernel, from an end of `refine_compiled`."""
    table, inputs = _begin(problem)
    low, high = problem.options.reduced_width_range
    state = rough.state.__dict__["_kernel_state"]
    allowed, ended = finish_kernel(table, inputs, state, preliminary, low, high, *least)
    if not ended[0].known:
        return rough, preliminary
    return _minimum(problem, rough.theta, ended), allowed


def _minimum(problem: Problem, start: np.ndarray, ended: tuple) -> Minimum:
    state, objective, converged, at_bound, iterations, blocked = ended
    if not state.known:
        theta = np.clip(start, *problem.bounds)
        fixed = kernel_inputs(problem).fixed
        return Minimum(np.where(np.isfinite(fixed), fixed, theta), None, np.inf, False, at_bound, 0, NO_ABUNDANCE)
    if np.isnan(objective):
        raise np.linalg.LinAlgError("the covariance of the residuals is singular")
    return Minimum(
        state.theta, _balance_state(problem, state), float(objective), bool(converged), at_bound, int(iterations),
        blocked=bool(blocked),
    )  # fmt: skip


def _balance_state(problem: Problem, state: State) -> BalanceState:
    inputs = problem.inputs
    scatter = state.scatter
    variances = LineVariances(width=state.width_variance, gf=state.gf_variance, scatter=scatter[inputs.place] ** 2)
    weighting = Weighting(
        robust=state.robust,
        scatter=scatter,
        variances=variances,
        strength=state.strength,
        deviation=np.where(state.used, state.deviation, np.nan),
        settled=bool(state.settled),
    )
    made = BalanceState(
        theta=state.theta,
        abundance=state.abundance,
        relative_abundance=state.abundance - inputs.zero_point,
        d_theta=state.d_theta,
        d_width=state.d_width,
        predicted=state.predicted,
        flags=state.flags,
        used=state.used,
        weighting=weighting,
        operator=state.operator,
        response=state.response,
        residuals=state.residuals,
        jacobian=state.jacobian,
        covariance_star=state.star,
        covariance_list=state.shared,
    )
    made.__dict__["_kernel_state"] = state
    return made


def _kernel_state(problem: Problem, state: BalanceState) -> State:
    """The kernel's own state where the balance comes from it."""
    known = state.__dict__.get("_kernel_state")
    if known is not None:
        return known
    n = state.abundance.size
    blank = nowhere(n, problem.interpolator.dA.size)
    weighting = state.weighting
    return blank._replace(
        known=True,
        theta=np.full(4, np.nan),  # never taken for the theta of a trial
        robust=weighting.robust,
        scatter=weighting.scatter,
        width_variance=weighting.variances.width,
        gf_variance=weighting.variances.gf,
    )
