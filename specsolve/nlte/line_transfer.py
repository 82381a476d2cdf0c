"""Transfer in lines of the model atom, with the diagonal of the lambda operator.

Second-order equation of Feautrier on each ray, as in `specsolve.radiation.transfer`, eliminated from both ends in the
form of Rybicki & Hummer (1991, A&A 245, 171, appendices A and B), which gives the diagonal of the inverse at no extra
order. All frequencies and angles of a line advance together through the depths, so that the compiler vectorises them.
"""

from __future__ import annotations

import numpy as np
from numba import njit

#: Least net absorption, relative to that without stimulated emission: holds off masers among merged levels.
LEAST_NET = 1e-3


def line_field_reference(opacity, source, column_mass, cosines, weights):
    """Mean intensity and diagonal of the lambda operator of one frequency by dense matrices: the test oracle.

    Parameters
    ----------
    opacity, source : ndarray, shape (n,)
        Total opacity [cm2/g], total source function.
    column_mass : ndarray, shape (n,)
    cosines, weights : ndarray, shape (n_mu,)

    Returns
    -------
    mean, diagonal : ndarray, shape (n,)
    """
    n = source.size
    mean, diagonal = np.zeros(n), np.zeros(n)
    for mu, weight in zip(cosines, weights, strict=True):
        step = 0.5 * (opacity[1:] + opacity[:-1]) * np.diff(column_mass) / mu
        shade = -np.expm1(-0.5 * opacity[0] * column_mass[0] / mu)
        matrix, right = np.zeros((n, n)), np.zeros((n, n))
        for d in range(n):
            width = 0.5 * ((step[d - 1] if d else 0.0) + (step[d] if d < n - 1 else 0.0))
            matrix[d, d] += width
            right[d, d] += width
            for side, s in ((d - 1, step[d - 1] if d else None), (d + 1, step[d] if d < n - 1 else None)):
                if s is not None:
                    matrix[d, d] += 1.0 / s
                    matrix[d, side] -= 1.0 / s
        matrix[0, 0] += 1.0
        right[0, 0] += shade
        matrix[-1, -1] += 1.0
        right[-1, -1] += 1.0
        inverse = np.linalg.solve(matrix, right)
        gradient = np.zeros(n)
        gradient[-1] = (source[-1] - source[-2]) / step[-1]
        mean += weight * (inverse @ source + np.linalg.solve(matrix, gradient))
        diagonal += weight * np.diag(inverse)
    return mean, diagonal


@njit(cache=True, nogil=True, error_model="numpy")
def line_fields(
    low, up, log_b, strength, boltzmann, emission, background, background_source,
    profile, quadrature, column_mass, cosines, weights, effective, diagonal,
):  # fmt: skip
    """Profile-averaged mean intensities, less the local part, and the local operator.

    Parameters
    ----------
    low, up : ndarray of int, shape (m,)
    log_b : ndarray, shape (n_levels, n)
        ln of the departure coefficients.
    strength, boltzmann : ndarray, shape (m, n)
        pi e^2/mc f n_low* / rho [cm2 Hz / g] of one component in LTE without stimulated emission; exp(-h nu / kT).
    emission : ndarray, shape (m,)
        2 h nu^3 / c^2.
    background, background_source : ndarray, shape (m, n)
        Opacity [cm2/g] and source function of everything else.
    profile, quadrature : ndarray, shape (m, n, q)
        See `LineGrid`.
    column_mass : ndarray, shape (n,)
    cosines, weights : ndarray, shape (n_mu,)
    effective, diagonal : ndarray, shape (m, n)
        Returned: J - L S, and L = integral of phi Lambda* (line share).
    """
    n, q = profile.shape[1:]
    n_mu = cosines.shape[0]
    width = q * n_mu
    chi = np.empty((n, q))
    source = np.empty((n, q))
    share = np.empty((n, q))
    line_source = np.empty(n)
    step_inverse = np.empty((n, width))
    extra = np.empty((n, width))
    right = np.empty((n, width))
    carried = np.empty((n, width))
    pivot = np.empty((n, width))
    below = np.empty((n, width))
    rest = np.empty(width)
    factor = np.empty((n, width))
    u = np.empty((n, width))
    inverse_mu = 1.0 / cosines
    for k in range(low.size):
        i, j = low[k], up[k]
        for d in range(n):
            b_low = np.exp(log_b[i, d])
            b_up = np.exp(log_b[j, d]) * boltzmann[k, d]
            net = max(b_low - b_up, LEAST_NET * b_low)
            line_source[d] = emission[k] * b_up / net
            line = strength[k, d] * net
            for f in range(q):
                of_line = line * profile[k, d, f]
                total = of_line + background[k, d]
                chi[d, f] = total
                share[d, f] = of_line / total
                source[d, f] = (of_line * line_source[d] + background[k, d] * background_source[k, d]) / total
        # steps along the ray, widths and right-hand sides
        for d in range(n - 1):
            half = 0.5 * (column_mass[d + 1] - column_mass[d])
            for a in range(n_mu):
                for f in range(q):
                    step_inverse[d, a * q + f] = half * (chi[d, f] + chi[d + 1, f]) * inverse_mu[a]
        for a in range(n_mu):
            for f in range(q):
                p = a * q + f
                shade = -np.expm1(-0.5 * chi[0, f] * column_mass[0] * inverse_mu[a])
                half = 0.5 * step_inverse[0, p]
                extra[0, p] = half + 1.0
                right[0, p] = (half + shade) * source[0, f]
                factor[0, p] = half + shade
                half = 0.5 * step_inverse[n - 2, p]
                extra[n - 1, p] = half + 1.0
                gradient = (source[n - 1, f] - source[n - 2, f]) / step_inverse[n - 2, p]
                right[n - 1, p] = (half + 1.0) * source[n - 1, f] + gradient
                factor[n - 1, p] = half + 1.0
        for d in range(1, n - 1):
            for a in range(n_mu):
                for f in range(q):
                    p = a * q + f
                    half = 0.5 * (step_inverse[d - 1, p] + step_inverse[d, p])
                    extra[d, p] = half
                    factor[d, p] = half
                    right[d, p] = half * source[d, f]
        for d in range(n - 1):
            for p in range(width):
                step_inverse[d, p] = 1.0 / step_inverse[d, p]
        step_inverse[n - 1] = 0.0
        # downwards; loops are kept short so that each is vectorised
        for p in range(width):
            carried[0, p] = extra[0, p]
            pivot[0, p] = 1.0 / (extra[0, p] + step_inverse[0, p])
            u[0, p] = right[0, p] * pivot[0, p]
        for d in range(1, n):
            for p in range(width):
                carried[d, p] = extra[d, p] + step_inverse[d - 1, p] * (carried[d - 1, p] * pivot[d - 1, p])
            for p in range(width):
                pivot[d, p] = 1.0 / (carried[d, p] + step_inverse[d, p])
            for p in range(width):
                u[d, p] = (right[d, p] + step_inverse[d - 1, p] * u[d - 1, p]) * pivot[d, p]
        # upwards: solution, and the elimination from below for the diagonal
        for p in range(width):
            below[n - 1, p] = 0.0
            rest[p] = extra[n - 1, p]
        for d in range(n - 2, -1, -1):
            for p in range(width):
                u[d, p] += u[d + 1, p] * step_inverse[d, p] * pivot[d, p]
            for p in range(width):
                below[d, p] = step_inverse[d, p] * rest[p] / (rest[p] + step_inverse[d, p])
            for p in range(width):
                rest[p] = extra[d, p] + below[d, p]
        for d in range(n):
            for p in range(width):
                extra[d, p] = factor[d, p] / (carried[d, p] + below[d, p])
        for d in range(n):
            mean = 0.0
            local = 0.0
            for f in range(q):
                j_nu = 0.0
                l_nu = 0.0
                for a in range(n_mu):
                    p = a * q + f
                    j_nu += weights[a] * u[d, p]
                    l_nu += weights[a] * extra[d, p]
                mean += quadrature[k, d, f] * j_nu
                local += quadrature[k, d, f] * l_nu * share[d, f]
            effective[k, d] = mean - local * line_source[d]
            diagonal[k, d] = local
