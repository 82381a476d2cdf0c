"""Compiled twin of `newton.refine` and `minima.local_solve`: from a start to a minimum without Python.

The steps, tolerances and the order of decisions are those of `newton.py`, the reference that this is tested against.
Outside terms must be linear in theta here (means that are numbers); others take the path through Python.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from .balance_kernel import common_of, evaluate, nowhere, predict
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


@njit(cache=True, nogil=True)
def finish_kernel(table, inputs, rough, preliminary, low, high, least_first, least_second):
    """`minima.finish` from a known state: freeze the cut on predicted strength there, and refine.

    Returns
    -------
    allowed : ndarray of bool, shape (n_lines,)
    ended : tuple
        As of `refine_kernel`.
    """
    n = inputs.lines.size
    y = np.zeros(n)
    for i in range(n):
        if rough.used[i]:
            y[i] = rough.abundance[i] - inputs.zero[i]
    mean = common_of(inputs, rough.used, y, rough)
    made, coefficients = rough.made.copy(), rough.coefficients.copy()
    predicted = predict(table, inputs, rough.theta, rough.cell, mean, made, coefficients, rough.span)
    allowed = np.zeros(n, dtype=np.bool_)
    first, second = 0, 0
    for i in range(n):
        allowed[i] = preliminary[i] and low <= predicted[i] <= high  # false for nan
        if allowed[i] and inputs.is_fe2[i]:
            second += 1
        elif allowed[i]:
            first += 1
    if first < least_first or second < least_second:
        allowed[:] = preliminary
    return allowed, refine_kernel(table, inputs, rough.theta, allowed, rough, False)


@njit(cache=True, nogil=True)
def local_kernel(table, inputs, start, preliminary, low, high, least_first, least_second):
    """`minima.local_solve` without Python; returns allowed and `refine_kernel`'s tuple."""
    nothing = nowhere(inputs.lines.size, table.dA.size)
    ended = refine_kernel(table, inputs, start, preliminary, nothing, True)
    if not ended[0].known or np.isnan(ended[1]):
        return preliminary, ended
    allowed, finished = finish_kernel(table, inputs, ended[0], preliminary, low, high, least_first, least_second)
    if not finished[0].known:
        return preliminary, ended
    return allowed, finished
