"""Compiled twins of the interpolation and inversion in `interpolate` and `inversion`, for bulk work.

They read the shared table of Hermite numbers (`node_table`) and fill it where a node is asked for the first time.
Everything a line needs (its coefficients, its curve, its inversion) is done before the next line is begun.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from specsolve.grid.codes import CENTRE, FIRST_LOG_WIDTH, STEP
from specsolve.grid.inversion import CONVERGED, ITERATIONS
from specsolve.grid.inversion import MISSING as FLAG_MISSING
from specsolve.grid.inversion import OUTSIDE as FLAG_OUTSIDE
from specsolve.grid.node_table import EDGE, N_KINDS, WHOLE

FUSED = {"contract"}
SUMS = {"contract", "reassoc"}  # sums of products in an order of the compiler's choice, the same for every line
N_OUT = 5  # value and derivatives with respect to teff, logg, mh, vmic


@njit(cache=True, nogil=True, fastmath=FUSED)
def fill_number(table, node, line):
    """Make the Hermite numbers of one node and line."""
    n_vmic, n_dA = table.vmic.size, table.dA.size
    n_inner = n_vmic * n_dA
    row = np.empty(n_inner)
    rows = row.reshape(n_vmic, n_dA)
    half = np.empty((n_vmic, n_dA))
    out = table.numbers[node, line]
    low, high = np.uint8(0), np.uint8(n_dA)
    for kind in range(N_KINDS):
        row[:] = 0.0
        for entry in range(table.starts[N_KINDS * node + kind], table.starts[N_KINDS * node + kind + 1]):
            source = table.codes[table.columns[entry], line].reshape(n_inner)
            weight = table.weights[entry]
            for i in range(n_inner):
                row[i] += weight * (source[i] - CENTRE)
            low = max(low, table.own[table.columns[entry], line, 0])
            high = min(high, table.own[table.columns[entry], line, 1])
        for j in range(n_vmic):
            for a in range(n_dA):
                total = 0.0
                for b in range(n_dA):
                    total += table.dA_coefficients[a, b] * rows[j, b]
                half[j, a] = total
        for k in range(n_vmic):
            for a in range(n_dA):
                total = 0.0
                for j in range(n_vmic):
                    total += table.vmic_coefficients[k, j] * half[j, a]
                out[a, k, kind] = total
    table.span[node, line, 0] = low
    table.span[node, line, 1] = max(low, high)
    table.filled[node, line] = True


@njit(cache=True, nogil=True)
def interval_of(x, value):
    """Index of the lower node of the interval that holds `value`, as `stencil.cell_of`."""
    lower = 0
    for i in range(1, x.size - 1):
        if x[i] <= value:
            lower = i
    return lower


@njit(cache=True, nogil=True)
def locate(table, theta, cell):
    """Cell that holds theta, which lies inside the axes, into `cell` (4,); its bits.

    On a face the cell on the other side is taken if the first one has a missing corner and the other has none.
    """
    cell[0], cell[1] = interval_of(table.x0, theta[0]), interval_of(table.x1, theta[1])
    cell[2], cell[3] = interval_of(table.x2, theta[2]), interval_of(table.vmic, theta[3])
    bits = table.cells[cell[0], cell[1], cell[2]]
    if bits & WHOLE == 0:
        down0 = 1 if cell[0] > 0 and theta[0] == table.x0[cell[0]] else 0
        down1 = 1 if cell[1] > 0 and theta[1] == table.x1[cell[1]] else 0
        down2 = 1 if cell[2] > 0 and theta[2] == table.x2[cell[2]] else 0
        for a in range(down0 + 1):
            for b in range(down1 + 1):
                for c in range(down2 + 1):
                    other = table.cells[cell[0] - a, cell[1] - b, cell[2] - c]
                    if other & WHOLE:
                        cell[0] -= a
                        cell[1] -= b
                        cell[2] -= c
                        return vmic_bits(table, cell[3], other)
    return vmic_bits(table, cell[3], bits)


@njit(cache=True, nogil=True)
def vmic_bits(table, vmic_cell, bits):
    """Bits of a cell with the edge bit of its place along vmic."""
    n = table.vmic.size
    if n > 1 and (vmic_cell == n - 2 or (vmic_cell == 0 and table.vmic[0] != 0.0)):
        return bits | EDGE
    return bits


@njit(cache=True, nogil=True)
def axis_basis(x, lower, at, value, slope):
    """Basis values and slopes of one axis (`stencil.hermite_basis`) into arrays (4,); an axis of one node: 1 and 0."""
    value[:] = 0.0
    slope[:] = 0.0
    if x.size == 1:
        value[0] = 1.0
        return
    h = x[lower + 1] - x[lower]
    t = (at - x[lower]) / h
    value[0], value[1] = (1 + 2 * t) * (1 - t) ** 2, t * t * (3 - 2 * t)
    value[2], value[3] = h * t * (1 - t) ** 2, -h * t * t * (1 - t)
    slope[0], slope[1] = -6 * t * (1 - t) / h, 6 * t * (1 - t) / h
    slope[2], slope[3] = (1 - t) * (1 - 3 * t), t * (3 * t - 2)


@njit(cache=True, nogil=True)
def corner_nodes(table, cell, out):
    """Flat nodes of the corners of a cell into `out` (2, 2, 2); both ends of an axis of one node are that node."""
    n1, n2 = table.x1.size, table.x2.size
    for a in range(2):
        i = min(cell[0] + a, table.x0.size - 1)
        for b in range(2):
            j = min(cell[1] + b, n1 - 1)
            for c in range(2):
                k = min(cell[2] + c, n2 - 1)
                out[a, b, c] = (i * n1 + j) * n2 + k


class Place(NamedTuple):
    """Weights that belong to one theta.

    Attributes
    ----------
    corners : ndarray of int, shape (8,)
        Flat nodes of the corners of the cell.
    node : ndarray, shape (4, 8, 8)
        Value and derivatives along teff, logg, mh; corner; kind.
    vmic : ndarray, shape (2, vmic_width)
        Value and derivative.
    first_vmic : int
        First coefficient along vmic that counts.
    """

    corners: np.ndarray
    node: np.ndarray
    vmic: np.ndarray
    first_vmic: int


@njit(cache=True, nogil=True)
def place_of(table, theta, cell):
    """Weights of theta in its cell."""
    basis = np.empty((3, 2, 4))
    axis_basis(table.x0, cell[0], theta[0], basis[0, 0], basis[0, 1])
    axis_basis(table.x1, cell[1], theta[1], basis[1, 0], basis[1, 1])
    axis_basis(table.x2, cell[2], theta[2], basis[2, 0], basis[2, 1])
    nodes = np.empty((2, 2, 2), dtype=np.int64)
    corner_nodes(table, cell, nodes)
    node = np.empty((4, 8, 8))
    for q in range(8):
        a, b, c = q >> 2, (q >> 1) & 1, q & 1
        for k in range(8):
            i, j, m = a + 2 * (k >> 2), b + 2 * ((k >> 1) & 1), c + 2 * (k & 1)
            node[0, q, k] = basis[0, 0, i] * basis[1, 0, j] * basis[2, 0, m]
            node[1, q, k] = basis[0, 1, i] * basis[1, 0, j] * basis[2, 0, m]
            node[2, q, k] = basis[0, 0, i] * basis[1, 1, j] * basis[2, 0, m]
            node[3, q, k] = basis[0, 0, i] * basis[1, 0, j] * basis[2, 1, m]
    value, slope = np.empty(4), np.empty(4)
    axis_basis(table.vmic, cell[3], theta[3], value, slope)
    width, first = table.vmic_width, table.vmic_starts[cell[3]]
    vmic = np.zeros((2, width))
    upper = min(cell[3] + 1, table.vmic.size - 1)
    for k in range(width):
        rows = (table.vmic_basis[cell[3], first + k], table.vmic_basis[upper, first + k],
                table.vmic_slopes[cell[3], first + k], table.vmic_slopes[upper, first + k])  # fmt: skip
        for i in range(4):
            vmic[0, k] += value[i] * rows[i]
            vmic[1, k] += slope[i] * rows[i]
    return Place(nodes.reshape(8), node, vmic, first)


@njit(cache=True, nogil=True)
def enter_line(table, place, line):
    """Fill what the table lacks of a line in a cell; the range of dA that counts there."""
    low, high = 0, table.dA.size
    for q in range(8):
        node = place.corners[q]
        if not table.filled[node, line]:
            fill_number(table, node, line)
        low = max(low, int(table.span[node, line, 0]))
        high = min(high, int(table.span[node, line, 1]))
    return low, max(low, high)


@njit(cache=True, nogil=True, fastmath=SUMS)
def coefficient(table, place, line, a, at_value, at_slope, out):
    """Coefficient `a` of the curve of one line, and its derivatives, into `out` (N_OUT,).

    `at_value`, `at_slope` are scratch of shape (64,).
    """
    if table.vmic_width == 4:
        w0, w1, w2, w3 = place.vmic[0, 0], place.vmic[0, 1], place.vmic[0, 2], place.vmic[0, 3]
        d0, d1, d2, d3 = place.vmic[1, 0], place.vmic[1, 1], place.vmic[1, 2], place.vmic[1, 3]
        j = place.first_vmic
        for q in range(8):
            here = table.numbers[place.corners[q], line, a]
            x0, x1, x2, x3 = here[j], here[j + 1], here[j + 2], here[j + 3]
            for k in range(8):
                y0, y1, y2, y3 = np.float64(x0[k]), np.float64(x1[k]), np.float64(x2[k]), np.float64(x3[k])
                at_value[8 * q + k] = w0 * y0 + w1 * y1 + w2 * y2 + w3 * y3
                at_slope[8 * q + k] = d0 * y0 + d1 * y1 + d2 * y2 + d3 * y3
    else:
        at_value[:] = 0.0
        at_slope[:] = 0.0
        for q in range(8):
            here = table.numbers[place.corners[q], line, a]
            for m in range(table.vmic_width):
                for k in range(8):
                    at_value[8 * q + k] += place.vmic[0, m] * here[place.first_vmic + m, k]
                    at_slope[8 * q + k] += place.vmic[1, m] * here[place.first_vmic + m, k]
    weights = place.node.reshape(4, 64)
    s0, s1, s2, s3, s4 = 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(64):
        value = at_value[i]
        s0 += weights[0, i] * value
        s1 += weights[1, i] * value
        s2 += weights[2, i] * value
        s3 += weights[3, i] * value
        s4 += weights[0, i] * at_slope[i]
    out[0], out[1], out[2], out[3], out[4] = s0, s1, s2, s3, s4


@njit(cache=True, nogil=True)
def window(table, place, line, interval, known, coefficients, at_value, at_slope):
    """Make the coefficients that count above node `interval` where they are not known yet; the first of them."""
    first = table.dA_starts[interval]
    for a in range(first, first + table.dA_width):
        if not known[a]:
            coefficient(table, place, line, a, at_value, at_slope, coefficients[a])
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
    at_value, at_slope = np.empty(64), np.empty(64)
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
            begin = window(table, place, lines[i], lower, mine, made, at_value, at_slope)
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
    at_value, at_slope = np.empty(64), np.empty(64)
    for i in range(lines.size):
        first, end = span[i, 0], span[i, 1]
        at = offsets[i]
        out[i] = np.nan
        if end - first < 2 or not (table.dA[first] <= at <= table.dA[end - 1]):
            continue
        lower = min(interval_of(table.dA, at), end - 2)
        begin = window(table, place, lines[i], lower, known[i], coefficients[i], at_value, at_slope)
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
    at_value, at_slope = np.empty(64), np.empty(64)
    curves, derivatives = np.full((n, n_dA), np.nan), np.full((4, n, n_dA), np.nan)
    coefficients = np.empty((n_dA, N_OUT))
    for i in range(n):
        first, end = enter_line(table, place, lines[i])
        for a in range(n_dA):
            coefficient(table, place, lines[i], a, at_value, at_slope, coefficients[a])
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
