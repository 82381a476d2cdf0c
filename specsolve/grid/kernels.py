"""Compiled twins of the interpolation and inversion in `interpolate` and `inversion`, for bulk work.

They read the shared table of Hermite numbers (`node_table`) and fill it where a node is asked for the first time.
Everything a line needs (its coefficients, its curve, its inversion) is done before the next line is begun.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from specsolve.grid.cell_kernels import N_OUT, enter_line, interval_of, place_of
from specsolve.grid.codes import CENTRE, FIRST_LOG_WIDTH, STEP
from specsolve.grid.inversion import CONVERGED, ITERATIONS
from specsolve.grid.inversion import MISSING as FLAG_MISSING
from specsolve.grid.inversion import OUTSIDE as FLAG_OUTSIDE

SUMS = {"contract", "reassoc"}  # sums of products in an order of the compiler's choice, the same for every line


@njit(cache=True, nogil=True, fastmath=SUMS)
def coefficient(table, place, line, a, out):
    """Coefficient `a` of the curve of one line, and its derivatives, into `out` (N_OUT,)."""
    start = 8 * place.first_vmic
    u = place.weights
    s0, s1, s2, s3, s4 = 0.0, 0.0, 0.0, 0.0, 0.0
    if table.vmic_width == 4:  # numbers the compiler knows make it four times faster
        for q in range(8):
            x = table.numbers[place.corners[q], line, a].reshape(8 * table.vmic.size)[start : start + 32]
            for i in range(32):
                value = np.float64(x[i])
                k = 32 * q + i
                s0 += u[0, k] * value
                s1 += u[1, k] * value
                s2 += u[2, k] * value
                s3 += u[3, k] * value
                s4 += u[4, k] * value
    else:
        size = 8 * table.vmic_width
        for q in range(8):
            x = table.numbers[place.corners[q], line, a].reshape(8 * table.vmic.size)[start : start + size]
            for i in range(size):
                value = np.float64(x[i])
                k = size * q + i
                s0 += u[0, k] * value
                s1 += u[1, k] * value
                s2 += u[2, k] * value
                s3 += u[3, k] * value
                s4 += u[4, k] * value
    out[0], out[1], out[2], out[3], out[4] = s0, s1, s2, s3, s4


@njit(cache=True, nogil=True)
def window(table, place, line, interval, known, coefficients):
    """Make the coefficients that count above node `interval` where they are not known yet; the first of them."""
    first = table.dA_starts[interval]
    for a in range(first, first + table.dA_width):
        if not known[a]:
            coefficient(table, place, line, a, coefficients[a])
            known[a] = True
    return first


@njit(cache=True, nogil=True)
def node_value(table, coefficients, first, node):
    """log10(W/lambda) of a curve at a node of dA from the coefficients of a window."""
    total = 0.0
    for k in range(first, first + table.dA_width):
        total += table.dA_basis[node, k] * coefficients[k, 0]
    return (total + CENTRE) * STEP + FIRST_LOG_WIDTH


@njit(cache=True, nogil=True)
def node_slope(table, coefficients, first, node):
    """Slope of a curve at a node of dA."""
    total = 0.0
    for k in range(first, first + table.dA_width):
        total += table.dA_slopes[node, k] * coefficients[k, 0]
    return total * STEP


@njit(cache=True, nogil=True)
def lines_in_cell(table, place, lines, widths, guess, known, coefficients, span, offset, d_theta, d_width, flags):
    """Offsets dA at which lines reach widths, with derivatives.

    Parameters
    ----------
    lines, widths : ndarray, shape (n_lines,)
    guess : ndarray of int, shape (n_lines,)
        Interval of dA where the search begins; changes the speed alone. Filled with where it ended.
    known : ndarray of bool, shape (n_lines, n_dA)
        Filled: coefficients that were made.
    coefficients : ndarray, shape (n_lines, n_dA, N_OUT)
        Filled, in units of a code.
    span : ndarray of int, shape (n_lines, 2)
        Filled: range of dA that counts.
    offset, d_theta, d_width, flags : ndarray, shape (n_lines,), (n_lines, 4), (n_lines,), (n_lines,)
        Filled.
    """
    for i in range(lines.size):
        offset[i] = np.nan
        d_width[i] = np.nan
        d_theta[i] = np.nan
        flags[i] = 0
        known[i] = False
        first, end = enter_line(table, place, lines[i])
        span[i, 0], span[i, 1] = first, end
        width = widths[i]
        if end - first < 2 or not np.isfinite(width):
            flags[i] = FLAG_MISSING
            continue
        made, mine = coefficients[i], known[i]
        lower = min(max(guess[i], first), end - 2)
        v0, v1 = 0.0, 0.0
        begin, came = 0, 0
        while True:
            begin = window(table, place, lines[i], lower, mine, made)
            v0 = node_value(table, made, begin, lower)
            v1 = node_value(table, made, begin, lower + 1)
            if width < v0 and lower > first and came <= 0:
                lower -= 1
                came = -1
            elif width >= v1 and lower < end - 2 and came >= 0:
                lower += 1
                came = 1
            else:
                break
        guess[i] = lower
        if not (v0 <= width <= v1):
            flags[i] = FLAG_OUTSIDE
            continue
        gap = table.dA[lower + 1] - table.dA[lower]
        m0 = node_slope(table, made, begin, lower)
        m1 = node_slope(table, made, begin, lower + 1)
        u = solve_cubic(width, gap, v0, v1, m0, m1)
        _, rise = cubic_value(u, gap, v0, v1, m0, m1)
        offset[i] = table.dA[lower] + u * gap
        d_width[i] = gap / rise
        b0, b1 = (1 + 2 * u) * (1 - u) ** 2, u * u * (3 - 2 * u)
        b2, b3 = gap * u * (1 - u) ** 2, -gap * u * u * (1 - u)
        for k in range(4):
            d_theta[i, k] = 0.0
        for c in range(begin, begin + table.dA_width):
            weight = (
                b0 * table.dA_basis[lower, c]
                + b1 * table.dA_basis[lower + 1, c]
                + b2 * table.dA_slopes[lower, c]
                + b3 * table.dA_slopes[lower + 1, c]
            )
            for k in range(4):
                d_theta[i, k] -= weight * made[c, k + 1]
        for k in range(4):
            d_theta[i, k] *= STEP * d_width[i]


@njit(cache=True, nogil=True)
def widths_in_cell(table, place, lines, offsets, known, coefficients, span, out):
    """log10(W/lambda) of lines at offsets dA, nan outside the range that counts; the rest as in `lines_in_cell`."""
    for i in range(lines.size):
        first, end = span[i, 0], span[i, 1]
        at = offsets[i]
        out[i] = np.nan
        if end - first < 2 or not (table.dA[first] <= at <= table.dA[end - 1]):
            continue
        lower = min(interval_of(table.dA, at), end - 2)
        begin = window(table, place, lines[i], lower, known[i], coefficients[i])
        gap = table.dA[lower + 1] - table.dA[lower]
        v0 = node_value(table, coefficients[i], begin, lower)
        v1 = node_value(table, coefficients[i], begin, lower + 1)
        m0 = node_slope(table, coefficients[i], begin, lower)
        m1 = node_slope(table, coefficients[i], begin, lower + 1)
        out[i], _ = cubic_value((at - table.dA[lower]) / gap, gap, v0, v1, m0, m1)


@njit(cache=True, nogil=True)
def offsets_at(table, theta, cell, lines, widths):
    """As `inversion.invert_curves` for the curves at theta: offset, d_theta, d_width, flags."""
    n, n_dA = lines.size, table.dA.size
    place = place_of(table, theta, cell)
    offset, d_theta, d_width = np.empty(n), np.empty((n, 4)), np.empty(n)
    flags = np.empty(n, dtype=np.uint8)
    guess, span = np.full(n, n_dA // 2), np.empty((n, 2), dtype=np.int64)
    known, coefficients = np.zeros((n, n_dA), dtype=np.bool_), np.empty((n, n_dA, N_OUT))
    lines_in_cell(table, place, lines, widths, guess, known, coefficients, span, offset, d_theta, d_width, flags)
    return offset, d_theta, d_width, flags


@njit(cache=True, nogil=True)
def widths_at(table, theta, cell, lines, offsets):
    """As `inversion.values_on_curves` for the curves at theta."""
    n, n_dA = lines.size, table.dA.size
    place = place_of(table, theta, cell)
    known, coefficients = np.zeros((n, n_dA), dtype=np.bool_), np.empty((n, n_dA, N_OUT))
    span, out = np.empty((n, 2), dtype=np.int64), np.empty(n)
    for i in range(n):
        span[i, 0], span[i, 1] = enter_line(table, place, lines[i])
    widths_in_cell(table, place, lines, offsets, known, coefficients, span, out)
    return out


@njit(cache=True, nogil=True)
def curves_at(table, theta, cell, lines):
    """Curves (n_lines, n_dA) and derivatives (4, n_lines, n_dA) at the nodes of dA, as `Interpolator.curves`."""
    n, n_dA = lines.size, table.dA.size
    place = place_of(table, theta, cell)
    curves, derivatives = np.full((n, n_dA), np.nan), np.full((4, n, n_dA), np.nan)
    coefficients = np.empty((n_dA, N_OUT))
    for i in range(n):
        first, end = enter_line(table, place, lines[i])
        for a in range(n_dA):
            coefficient(table, place, lines[i], a, coefficients[a])
        for node in range(first, end):
            total = np.zeros(N_OUT)
            for a in range(n_dA):
                for k in range(N_OUT):
                    total[k] += table.dA_basis[node, a] * coefficients[a, k]
            curves[i, node] = (total[0] + CENTRE) * STEP + FIRST_LOG_WIDTH
            for k in range(4):
                derivatives[k, i, node] = total[k + 1] * STEP
    return curves, derivatives


@njit(cache=True, nogil=True)
def cubic_value(t, h, v0, v1, m0, m1):
    """Hermite cubic and its derivative with respect to t."""
    value = (
        (1 + 2 * t) * (1 - t) ** 2 * v0
        + t * t * (3 - 2 * t) * v1
        + h * t * (1 - t) ** 2 * m0
        - h * t * t * (1 - t) * m1
    )
    slope = -6 * t * (1 - t) * v0 + 6 * t * (1 - t) * v1 + h * (1 - t) * (1 - 3 * t) * m0 + h * t * (3 * t - 2) * m1
    return value, slope


@njit(cache=True, nogil=True)
def solve_cubic(width, gap, v0, v1, m0, m1):
    """u in 0..1 at which the cubic reaches a width that lies between its ends, as `inversion.solve_cubic`."""
    u = min(max((width - v0) / (v1 - v0 if v1 > v0 else 1.0), 0.0), 1.0)
    low, high = 0.0, 1.0
    for _ in range(ITERATIONS):
        reached, rise = cubic_value(u, gap, v0, v1, m0, m1)
        error = reached - width
        if error <= 0:
            low = u
        else:
            high = u
        trial = u - error / rise if rise > 0 else -1.0
        if not (low <= trial <= high):
            trial = 0.5 * (low + high)
        moved = abs(trial - u)
        u = trial
        if moved < CONVERGED:
            break
    return u
