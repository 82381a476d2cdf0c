"""Compiled twin of `Problem.balance`: line abundances, weights that have settled, residuals and their covariances."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from specsolve.constants import SOLAR_IRON
from specsolve.grid.cell_kernels import N_OUT, locate, place_of
from specsolve.grid.kernels import lines_in_cell, widths_in_cell
from specsolve.grid.node_table import BESIDE, EDGE, WHOLE

from .kernel import project, settle_kernel
from .steps import CONTINUED, STEP_UNIT

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
    cell: np.ndarray
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
    place, guess, none = np.zeros(4, dtype=np.int64), np.full(n, n_dA // 2), np.zeros(n, dtype=np.bool_)
    made, coefficients = np.zeros((n, n_dA), dtype=np.bool_), np.zeros((n, n_dA, N_OUT))
    span, slopes, flags = np.zeros((n, 2), dtype=np.int64), np.zeros((n, 4)), np.zeros(n, dtype=np.uint8)
    return State(
        False, np.zeros(4), place, guess, made, coefficients, span, one, slopes, one, one, flags, none, one, np.zeros(2),
        one, one, one, one, False, two, two, np.zeros(4), both, both, both,
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
def moved_little(old, theta, cell):
    """Whether theta lies so near to that of a known state, in its cell, that its abundances can be continued."""
    if not old.known:
        return False
    near = True
    for k in range(4):
        near &= cell[k] == old.cell[k] and abs(theta[k] - old.theta[k]) <= CONTINUED * STEP_UNIT[k]
    return near


@njit(cache=True, nogil=True)
def continued(old, theta):
    """Coefficients and abundances of a known state at a theta very near, to first order."""
    coefficients, abundance = old.coefficients.copy(), old.abundance.copy()
    for k in range(4):
        change = theta[k] - old.theta[k]
        if change != 0.0:
            for i in range(abundance.size):
                abundance[i] += old.d_theta[i, k] * change
                for a in range(coefficients.shape[1]):
                    if old.made[i, a]:
                        coefficients[i, a, 0] += old.coefficients[i, a, k + 1] * change
    return coefficients, abundance


@njit(cache=True, nogil=True)
def common_of(inputs, used, y, old):
    """Weighted mean of each ion, shape (2,), as `problem.common_abundances`; plain means where `old` is not known."""
    total, mean = np.zeros(2), np.zeros(2)
    for i in range(y.size):
        if used[i]:
            weight = 1.0
            place = 1 if inputs.is_fe2[i] else 0
            if old.known:
                s = old.scatter[place]
                weight = old.robust[i] / (old.width_variance[i] + old.gf_variance[i] + s * s)
            total[place] += weight
            mean[place] += weight * y[i]
    for place in range(2):
        mean[place] = mean[place] / total[place] if total[place] > 0.0 else np.nan
    if not np.isfinite(mean[0]):
        mean[0] = mean[1] if np.isfinite(mean[1]) else 0.0
    if not np.isfinite(mean[1]):
        mean[1] = mean[0]
    return mean


@njit(cache=True, nogil=True)
def predict(table, inputs, theta, cell, mean, made, coefficients, span):
    """Predicted log10(W/lambda) at common abundances of both ions, as `Problem.predicted_widths`."""
    n = inputs.lines.size
    offsets, predicted = np.empty(n), np.empty(n)
    for i in range(n):
        common = mean[1 if inputs.is_fe2[i] else 0] + inputs.zero[i] + inputs.shift[i]
        offsets[i] = common - SOLAR_IRON - theta[2]
    widths_in_cell(table, place_of(table, theta, cell), inputs.lines, offsets, made, coefficients, span, predicted)
    return predicted


@njit(cache=True, nogil=True)
def evaluate(table, inputs, theta, allowed, old, rough):
    """`Problem.balance` at theta, which lies inside the box; `old` is where weights begin, if it is known."""
    n = inputs.lines.size
    n_dA = table.dA.size
    cell = np.empty(4, dtype=np.int64)
    bits = locate(table, theta, cell)
    if moved_little(old, theta, cell):
        guess, made, span = old.guess, old.made.copy(), old.span
        d_theta, d_width, flags = old.d_theta, old.d_width, old.flags
        coefficients, abundance = continued(old, theta)
    else:
        guess, made = old.guess.copy(), np.zeros((n, n_dA), dtype=np.bool_)
        coefficients, span = np.empty((n, n_dA, N_OUT)), np.zeros((n, 2), dtype=np.int64)
        abundance, d_theta, d_width, flags = line_abundances(
            table, inputs, theta, cell, bits, guess, made, coefficients, span
        )
    used = np.zeros(n, dtype=np.bool_)
    y, slope = np.zeros(n), np.ones(n)
    count = 0
    for i in range(n):
        if allowed[i] and np.isfinite(abundance[i]) and np.isfinite(d_width[i]) and np.isfinite(inputs.zero[i]):
            used[i] = True
            count += 1
            y[i] = abundance[i] - inputs.zero[i]
            slope[i] = d_width[i]
    if count == 0:
        return nowhere(n, n_dA)
    mean = common_of(inputs, used, y, old)
    predicted = np.empty(n)
    if rough:
        for i in range(n):
            away = abundance[i] - inputs.zero[i] - mean[1 if inputs.is_fe2[i] else 0]
            predicted[i] = inputs.width[i] - away / d_width[i]
    else:
        predicted = predict(table, inputs, theta, cell, mean, made, coefficients, span)
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
        True, theta.copy(), cell, guess, made, coefficients, span, abundance, d_theta, d_width, predicted, flags, used,
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
