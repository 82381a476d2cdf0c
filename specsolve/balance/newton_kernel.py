"""Compiled twin of `newton.refine` and of `Problem.balance`: the whole way from a start to a minimum without Python.

The steps, tolerances and the order of decisions are those of `newton.py`, the reference that this is tested against.
Outside terms must be linear in theta here (means that are numbers); others take the path through Python.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from specsolve.constants import SOLAR_IRON
from specsolve.grid.kernels import N_OUT, lines_in_cell, locate, place_of, widths_in_cell
from specsolve.grid.node_table import BESIDE, EDGE, WHOLE

from .kernel import project, settle_kernel
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

MISSING_WIDTHS = 8  # flag of the interpolation


class Inputs(NamedTuple):
    """Constant inputs of one problem; arrays of shape (n_lines,) unless stated.

    Attributes
    ----------
    lines : places in the grid's list
    is_fe2, gf_unknown : bool
    chi, width, sigma_logw, sigma_gf, zero, zero_variance, shift : see `LineInputs`; `shift` is the log gf shift
    zero_covariance : (n_lines, n_lines), or (0, 0) for exact zero points
    free : ndarray of int
        Free parameters.
    active : ndarray of bool, shape (4,)
    fixed : ndarray, shape (4,)
        Fixed values, nan for free parameters.
    low, high : ndarray, shape (4,)
    outside, outside_jacobian : ndarray, shape (n_terms,), (n_terms, 4)
        Whitened terms at theta = 0 and their Jacobian.
    loss : int
    from_fe1 : bool
    max_iterations : int
    """

    lines: np.ndarray
    is_fe2: np.ndarray
    gf_unknown: np.ndarray
    chi: np.ndarray
    width: np.ndarray
    sigma_logw: np.ndarray
    sigma_gf: np.ndarray
    zero: np.ndarray
    zero_variance: np.ndarray
    shift: np.ndarray
    zero_covariance: np.ndarray
    free: np.ndarray
    active: np.ndarray
    fixed: np.ndarray
    low: np.ndarray
    high: np.ndarray
    outside: np.ndarray
    outside_jacobian: np.ndarray
    loss: int
    from_fe1: bool
    max_iterations: int


class State(NamedTuple):
    """The balance at one theta, as `state.BalanceState`; `known` is false where no line has an abundance.

    `guess`, `made`, `coefficients`, `span`: what `grid.kernels.lines_in_cell` made of the curves of growth.
    """

    known: bool
    theta: np.ndarray
    guess: np.ndarray
    made: np.ndarray
    coefficients: np.ndarray
    span: np.ndarray
    abundance: np.ndarray
    d_theta: np.ndarray
    d_width: np.ndarray
    predicted: np.ndarray
    flags: np.ndarray
    used: np.ndarray
    robust: np.ndarray
    scatter: np.ndarray
    width_variance: np.ndarray
    gf_variance: np.ndarray
    strength: np.ndarray
    deviation: np.ndarray
    settled: bool
    operator: np.ndarray
    response: np.ndarray
    residuals: np.ndarray
    jacobian: np.ndarray
    star: np.ndarray
    shared: np.ndarray


@njit(cache=True, nogil=True)
def nowhere(n, n_dA):
    """A state that is not known."""
    one, two, both = np.zeros(n), np.zeros((4, n)), np.zeros((4, 4))
    return State(
        False, np.zeros(4), np.full(n, n_dA // 2), np.zeros((n, n_dA), dtype=np.bool_), np.zeros((n, n_dA, N_OUT)),
        np.zeros((n, 2), dtype=np.int64), one, np.zeros((n, 4)), one, one, np.zeros(n, dtype=np.uint8),
        np.zeros(n, dtype=np.bool_), one, np.zeros(2), one, one, one, one, False, two, two, np.zeros(4), both, both, both,
    )  # fmt: skip


@njit(cache=True, nogil=True)
def line_abundances(table, inputs, theta, cell, bits, guess, made, coefficients, span):
    """Line abundances at theta in its cell, and their derivatives; what the curves needed is filled in."""
    n = inputs.lines.size
    abundance, d_theta, d_width = np.full(n, np.nan), np.full((n, 4), np.nan), np.full(n, np.nan)
    flags = np.full(n, MISSING_WIDTHS, dtype=np.uint8)
    if bits & WHOLE:
        place = place_of(table, theta, cell)
        lines_in_cell(
            table, place, inputs.lines, inputs.width, guess, made, coefficients, span, abundance, d_theta, d_width,
            flags,
        )  # fmt: skip
    flag = np.uint8((1 if bits & EDGE else 0) | (2 if bits & BESIDE else 0))
    for i in range(n):
        abundance[i] += SOLAR_IRON + theta[2] - inputs.shift[i]
        flags[i] |= flag
        if table.x0.size == 1:
            d_theta[i, 0] = np.nan
        if table.x1.size == 1:
            d_theta[i, 1] = np.nan
        d_theta[i, 2] = d_theta[i, 2] + 1.0 if table.x2.size > 1 else np.nan
        if table.vmic.size == 1:
            d_theta[i, 3] = np.nan
    return abundance, d_theta, d_width, flags


@njit(cache=True, nogil=True)
def evaluate(table, inputs, theta, allowed, old, rough):
    """`Problem.balance` at theta, which lies inside the box; `old` is where weights begin, if it is known."""
    n = inputs.lines.size
    n_dA = table.dA.size
    cell = np.empty(4, dtype=np.int64)
    bits = locate(table, theta, cell)
    if old.known and np.all(old.theta == theta):
        guess, made, coefficients, span = old.guess, old.made, old.coefficients, old.span
        abundance, d_theta, d_width, flags = old.abundance, old.d_theta, old.d_width, old.flags
    else:
        guess, made = old.guess.copy(), np.zeros((n, n_dA), dtype=np.bool_)
        coefficients, span = np.empty((n, n_dA, N_OUT)), np.zeros((n, 2), dtype=np.int64)
        abundance, d_theta, d_width, flags = line_abundances(
            table, inputs, theta, cell, bits, guess, made, coefficients, span
        )
    used = np.zeros(n, dtype=np.bool_)
    y, slope = np.zeros(n), np.ones(n)
    total, mean = np.zeros(2), np.zeros(2)
    count = 0
    for i in range(n):
        if allowed[i] and np.isfinite(abundance[i]) and np.isfinite(d_width[i]) and np.isfinite(inputs.zero[i]):
            used[i] = True
            count += 1
            y[i] = abundance[i] - inputs.zero[i]
            slope[i] = d_width[i]
            weight = 1.0
            place = 1 if inputs.is_fe2[i] else 0
            if old.known:
                s = old.scatter[place]
                weight = old.robust[i] / (old.width_variance[i] + old.gf_variance[i] + s * s)
            total[place] += weight
            mean[place] += weight * y[i]
    if count == 0:
        return nowhere(n, n_dA)
    for place in range(2):
        mean[place] = mean[place] / total[place] if total[place] > 0.0 else np.nan
    if not np.isfinite(mean[0]):
        mean[0] = mean[1] if np.isfinite(mean[1]) else 0.0
    if not np.isfinite(mean[1]):
        mean[1] = mean[0]
    predicted = np.empty(n)
    if rough:
        for i in range(n):
            away = abundance[i] - inputs.zero[i] - mean[1 if inputs.is_fe2[i] else 0]
            predicted[i] = inputs.width[i] - away / d_width[i]
    else:
        offsets = np.empty(n)
        for i in range(n):
            common = mean[1 if inputs.is_fe2[i] else 0] + inputs.zero[i] + inputs.shift[i]
            offsets[i] = common - SOLAR_IRON - theta[2]
        widths_in_cell(table, place_of(table, theta, cell), inputs.lines, offsets, made, coefficients, span, predicted)
    robust, scatter = np.zeros(n), np.zeros(2)
    x = np.empty(n)
    for i in range(n):
        if used[i]:
            robust[i] = old.robust[i] if old.known and old.robust[i] > 0.0 else 1.0
        x[i] = predicted[i] if used[i] and np.isfinite(predicted[i]) else inputs.width[i]
    if old.known:
        scatter[:] = old.scatter
    robust, scatter, width_variance, gf_variance, strength, deviation, settled, operator, response = settle_kernel(
        inputs.is_fe2, inputs.chi, inputs.width, inputs.sigma_logw, inputs.sigma_gf, inputs.gf_unknown,
        inputs.zero_variance, y, slope, x, used, robust, scatter, inputs.loss, inputs.from_fe1,
    )  # fmt: skip
    star, shared = np.empty(n), np.empty(n)
    for i in range(n):
        s = scatter[1 if inputs.is_fe2[i] else 0]
        star[i] = width_variance[i] + s * s
        shared[i] = gf_variance[i] - inputs.zero_variance[i]
    residuals, jacobian, c_star, c_shared = project(operator, response, star, shared, y, d_theta, theta[2])
    if inputs.zero_covariance.shape[0] > 0:
        add_full(operator, inputs.zero_covariance, c_shared)
    return State(
        True, theta.copy(), guess, made, coefficients, span, abundance, d_theta, d_width, predicted, flags, used,
        robust, scatter,
        width_variance, gf_variance, strength, deviation, settled, operator, response, residuals, jacobian, c_star,
        c_shared,
    )  # fmt: skip


@njit(cache=True, nogil=True)
def add_full(operator, covariance, total):
    """Adds G V G^T for a full V."""
    n = operator.shape[1]
    for k in range(4):
        half = np.zeros(n)
        for i in range(n):
            if operator[k, i] != 0.0:
                for j in range(n):
                    half[j] += operator[k, i] * covariance[i, j]
        for m in range(4):
            part = 0.0
            for j in range(n):
                if operator[m, j] != 0.0:
                    part += half[j] * operator[m, j]
            total[k, m] += part


@njit(cache=True, nogil=True)
def whitened(inputs, state, formed):
    """z and dz/dtheta of active residuals and Outside terms, and the Cholesky factor; nan if it does not exist.

    `formed` (4,) is filled with the residuals that take part.
    """
    rows = np.zeros(4, dtype=np.int64)
    n = 0
    for k in range(4):
        formed[k] = inputs.active[k] and np.isfinite(state.residuals[k])
        if formed[k]:
            rows[n] = k
            n += 1
    lower = np.zeros((n, n))
    for i in range(n):
        for j in range(i + 1):
            value = state.star[rows[i], rows[j]] + state.shared[rows[i], rows[j]]
            for k in range(j):
                value -= lower[i, k] * lower[j, k]
            lower[i, j] = (np.sqrt(value) if value > 0.0 else np.nan) if i == j else value / lower[j, j]
    n_terms = inputs.outside.size
    z, jacobian = np.zeros(n + n_terms), np.zeros((n + n_terms, 4))
    for i in range(n):
        z[i] = state.residuals[rows[i]]
        jacobian[i] = state.jacobian[rows[i]]
        for k in range(i):
            z[i] -= lower[i, k] * z[k]
            jacobian[i] -= lower[i, k] * jacobian[k]
        z[i] /= lower[i, i]
        jacobian[i] /= lower[i, i]
    for t in range(n_terms):
        z[n + t] = inputs.outside[t]
        for k in range(4):
            z[n + t] += inputs.outside_jacobian[t, k] * state.theta[k]
            jacobian[n + t, k] = inputs.outside_jacobian[t, k]
    return z, jacobian, lower


@njit(cache=True, nogil=True)
def not_worse(inputs, z, lower, formed, new):
    """`newton._not_worse`: the new residuals in the metric of the old ones, whose whitened system is `z`."""
    before, after = 0.0, 0.0
    for value in z:
        before += value * value
    n = lower.shape[0]
    r = np.empty(n)
    place = 0
    for k in range(4):
        if formed[k]:
            if not np.isfinite(new.residuals[k]):
                return False
            r[place] = new.residuals[k]
            for m in range(place):
                r[place] -= lower[place, m] * r[m]
            r[place] /= lower[place, place]
            after += r[place] * r[place]
            place += 1
    for t in range(inputs.outside.size):
        term = inputs.outside[t]
        for k in range(4):
            term += inputs.outside_jacobian[t, k] * new.theta[k]
        after += term * term
    return after <= before * (1.0 + 1e-6) + 1e-9


@njit(cache=True, nogil=True)
def step_of(jacobian, z, damping):
    """`newton._step`."""
    n = jacobian.shape[1]
    if damping == 0.0:
        return -np.linalg.lstsq(jacobian, z, RANK_TOLERANCE)[0]
    normal = jacobian.T @ jacobian
    scale = np.trace(normal) / max(n, 1)
    for k in range(n):
        normal[k, k] += (damping + RANK_TOLERANCE * RANK_TOLERANCE) * scale
    return -np.linalg.solve(normal, jacobian.T @ z)


@njit(cache=True, nogil=True)
def largest(step):
    """Largest absolute element."""
    size = 0.0
    for value in step:
        size = max(size, abs(value))
    return size


@njit(cache=True, nogil=True)
def refine_kernel(table, inputs, start, allowed, previous, rough):
    """`newton.refine`.

    Returns
    -------
    state, objective, converged, at_bound, iterations, blocked
        `state.known` is false if not even the start could be evaluated; objective nan if C is singular.
    """
    low, high, free = inputs.low, inputs.high, inputs.free
    theta = np.minimum(np.maximum(start, low), high)
    for k in range(4):
        if np.isfinite(inputs.fixed[k]):
            theta[k] = inputs.fixed[k]
    at_bound = np.zeros(4, dtype=np.bool_)
    state = evaluate(table, inputs, theta, allowed, previous, rough)
    if state.known and not rough:
        state = evaluate(table, inputs, theta, allowed, state, rough)
    if not state.known:
        return state, np.inf, False, at_bound, 0, False
    damping, converged, blocked, iteration = 0.0, False, False, 0
    formed = np.zeros(4, dtype=np.bool_)
    tolerance = ROUGH_TOLERANCE if rough else STEP_TOLERANCE
    for number in range(1, inputs.max_iterations + 1):
        iteration = number
        z, jacobian, lower = whitened(inputs, state, formed)
        if not (np.all(np.isfinite(z)) and np.all(np.isfinite(jacobian))):
            return state, np.nan, False, at_bound, iteration, False
        scaled = jacobian * STEP_UNIT
        gradient = scaled.T @ z
        at_bound[:] = False
        moving = np.empty(free.size, dtype=np.int64)
        n_moving = 0
        for k in free:
            at_bound[k] = (theta[k] <= low[k] and gradient[k] > 0.0) or (theta[k] >= high[k] and gradient[k] < 0.0)
            if not at_bound[k]:
                moving[n_moving] = k
                n_moving += 1
        if n_moving == 0:
            converged = True
            break
        part = np.empty((z.size, n_moving))
        for m in range(n_moving):
            part[:, m] = scaled[:, moving[m]]
        accepted, hit_missing = False, False
        new, trial = state, theta
        for _ in range(MAX_HALVINGS):
            step = step_of(part, z, damping)
            size = largest(step)
            if size > 0.0:
                step = step * min(1.0, MAX_STEP / size)
            trial = theta.copy()
            for m in range(n_moving):
                k = moving[m]
                trial[k] = min(max(theta[k] + step[m] * STEP_UNIT[k], low[k]), high[k])
            new = evaluate(table, inputs, trial, allowed, state, rough)
            if new.known and not_worse(inputs, z, lower, formed, new):
                accepted = True
                break
            hit_missing |= not new.known
            damping = max(10.0 * damping, LEVENBERG_START)
        moved = 0.0
        for k in range(4):
            moved = max(moved, abs(trial[k] - theta[k]) / STEP_UNIT[k])
        small = moved < tolerance
        if not accepted or (small and damping > 0.0):
            square = 0.0
            for value in z:
                square += value * value
            converged = square <= ROOT_OBJECTIVE or largest(step_of(part, z, 0.0)) < STALLED_STEP
            blocked = hit_missing and not converged
            break
        theta, state = trial, new
        damping = 0.0 if damping <= LEVENBERG_START else 0.1 * damping
        if small:
            converged = True
            break
    z, _, _ = whitened(inputs, state, formed)
    objective = 0.0
    for value in z:
        objective += value * value
    stopped = np.zeros(4, dtype=np.bool_)
    for k in free:
        on_face = theta[k] <= low[k] + ON_FACE * STEP_UNIT[k] or theta[k] >= high[k] - ON_FACE * STEP_UNIT[k]
        stopped[k] = on_face and objective > ROOT_OBJECTIVE
        if k == VMIC and low[k] == 0.0 and theta[k] < NEAR_ZERO_VMIC and not converged:
            stopped[k] = True
    return state, objective, converged, stopped, iteration, blocked
