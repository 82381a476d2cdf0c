"""Between `Problem` and the compiled Newton iteration: inputs as plain arrays, results as the usual objects."""

from __future__ import annotations

import numpy as np

from specsolve.grid.node_table import node_table

from .kernel import LOSS_CODES
from .newton import NO_ABUNDANCE, Minimum
from .newton_kernel import Inputs, State, nowhere, refine_kernel
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
    inputs = kernel_inputs(problem)
    n = inputs.lines.size
    table = node_table(problem.grid, problem.treatment)
    table.prepare(inputs.lines)
    if allowed is None:
        allowed = np.ones(n, dtype=bool)
    begin = nowhere(n, table.arrays.dA.size) if previous is None else _kernel_state(problem, previous)
    state, objective, converged, at_bound, iterations, blocked = refine_kernel(
        table.arrays, inputs, np.asarray(start, dtype=np.float64), allowed, begin, rough
    )
    if not state.known:
        theta = np.clip(np.asarray(start, float), *problem.bounds)
        theta = np.where(np.isfinite(inputs.fixed), inputs.fixed, theta)
        return Minimum(theta, None, np.inf, False, at_bound, 0, NO_ABUNDANCE)
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
