"""Compiled twins of the interpolation and inversion in `interpolate` and `inversion`, for bulk work.

They read the shared table of Hermite numbers (`node_table`) and fill it where a node is asked for the first time.
nan stands for missing and must be able to pass: of the fast-math switches only the fusing of a product with a sum is
on.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from specsolve.grid.codes import FIRST_LOG_WIDTH, MISSING, STEP
from specsolve.grid.inversion import CONVERGED, ITERATIONS
from specsolve.grid.inversion import MISSING as FLAG_MISSING
from specsolve.grid.inversion import OUTSIDE as FLAG_OUTSIDE
from specsolve.grid.node_table import EDGE, WHOLE

FUSED = {"contract"}


@njit(cache=True, nogil=True, fastmath=FUSED)
def fill_number(table, node, line):
    """Make the Hermite numbers of one node and line."""
    n_vmic, n_dA = table.vmic.size, table.dA.size
    n_inner = n_vmic * n_dA
    row = np.empty(n_inner)
    for kind in range(8):
        out = table.numbers[node, line, kind].reshape(n_inner)
        first, last = table.starts[8 * node + kind], table.starts[8 * node + kind + 1]
        row[:] = 0.0
        for entry in range(first, last):
            source = table.codes[table.columns[entry], line].reshape(n_inner)
            weight = table.weights[entry]
            for i in range(n_inner):
                row[i] += weight * source[i]
        for i in range(n_inner):
            out[i] = row[i]
        for entry in range(first, last):
            source = table.codes[table.columns[entry], line].reshape(n_inner)
            n_missing = 0
            for i in range(n_inner):
                n_missing += source[i] == MISSING
            if n_missing > 0:  # apart, so that the common case has no branch
                for i in range(n_inner):
                    if source[i] == MISSING:
                        out[i] = np.nan
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
def line_basis(table, lower, at, value, slope):
    """Weights of the vmic nodes, for the value and for the derivative, into arrays (n_vmic,)."""
    b, d = np.empty(4), np.empty(4)
    axis_basis(table.vmic, lower, at, b, d)
    value[:] = 0.0
    slope[:] = 0.0
    value[lower] = b[0]
    slope[lower] = d[0]
    if table.vmic.size > 1:
        value[lower + 1] += b[1]
        slope[lower + 1] += d[1]
        for k in range(table.vmic.size):
            value[k] += b[2] * table.vmic_slopes[lower, k] + b[3] * table.vmic_slopes[lower + 1, k]
            slope[k] += d[2] * table.vmic_slopes[lower, k] + d[3] * table.vmic_slopes[lower + 1, k]


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


@njit(cache=True, nogil=True, fastmath=FUSED)
def contract_line(table, corners, line, basis, vmic_value, vmic_slope, work, curve, derivatives):
    """Curve of growth of one line and its derivatives, axis by axis.

    Parameters
    ----------
    corners : ndarray of int, shape (2, 2, 2)
    basis : ndarray, shape (3, 2, 4)
        Axis; value or slope; Hermite number.
    vmic_value, vmic_slope : ndarray, shape (n_vmic,)
    work : ndarray, shape (24, 2, n_vmic * n_dA)
        Scratch.
    curve : ndarray, shape (n_dA,)
        Filled; log10(W/lambda).
    derivatives : ndarray, shape (4, n_dA)
        Filled.
    """
    n_vmic, n_dA = table.vmic.size, table.dA.size
    n_inner = n_vmic * n_dA
    for a in range(2):
        for b in range(2):
            for c in range(2):
                if not table.filled[corners[a, b, c], line]:
                    fill_number(table, corners[a, b, c], line)
    # teff: from the corners into (logg corner, mh corner, kinds of logg and mh), value and slope
    first = work[:16].reshape(2, 2, 2, 4 * n_inner)  # (value or slope, logg corner, mh corner)
    b0, b1, b2, b3 = basis[0, 0]
    d0, d1, d2, d3 = basis[0, 1]
    for b in range(2):
        for c in range(2):
            low = table.numbers[corners[0, b, c], line].reshape(2, 4 * n_inner)
            high = table.numbers[corners[1, b, c], line].reshape(2, 4 * n_inner)
            x0, x1, x2, x3 = low[0], high[0], low[1], high[1]
            value, slope = first[0, b, c], first[1, b, c]
            for i in range(4 * n_inner):
                y0, y1, y2, y3 = np.float64(x0[i]), np.float64(x1[i]), np.float64(x2[i]), np.float64(x3[i])
                value[i] = b0 * y0 + b1 * y1 + b2 * y2 + b3 * y3
                slope[i] = d0 * y0 + d1 * y1 + d2 * y2 + d3 * y3
    # logg: value, d/dlogg of the value, value of d/dteff
    second = work[16:22].reshape(3, 2, 2 * n_inner)
    b0, b1, b2, b3 = basis[1, 0]
    d0, d1, d2, d3 = basis[1, 1]
    for c in range(2):
        x0, x1 = first[0, 0, c, : 2 * n_inner], first[0, 1, c, : 2 * n_inner]
        x2, x3 = first[0, 0, c, 2 * n_inner :], first[0, 1, c, 2 * n_inner :]
        value, slope, other = second[0, c], second[1, c], second[2, c]
        for i in range(2 * n_inner):
            value[i] = b0 * x0[i] + b1 * x1[i] + b2 * x2[i] + b3 * x3[i]
            slope[i] = d0 * x0[i] + d1 * x1[i] + d2 * x2[i] + d3 * x3[i]
        x0, x1 = first[1, 0, c, : 2 * n_inner], first[1, 1, c, : 2 * n_inner]
        x2, x3 = first[1, 0, c, 2 * n_inner :], first[1, 1, c, 2 * n_inner :]
        for i in range(2 * n_inner):
            other[i] = b0 * x0[i] + b1 * x1[i] + b2 * x2[i] + b3 * x3[i]
    # mh: value and the three derivatives, (n_vmic, n_dA) each
    third = work[22:24].reshape(4, n_inner)
    b0, b1, b2, b3 = basis[2, 0]
    d0, d1, d2, d3 = basis[2, 1]
    for which in range(3):
        x0, x1 = second[which, 0, :n_inner], second[which, 1, :n_inner]
        x2, x3 = second[which, 0, n_inner:], second[which, 1, n_inner:]
        out = third[0 if which == 0 else (2 if which == 1 else 1)]
        for i in range(n_inner):
            out[i] = b0 * x0[i] + b1 * x1[i] + b2 * x2[i] + b3 * x3[i]
        if which == 0:
            slope = third[3]
            for i in range(n_inner):
                slope[i] = d0 * x0[i] + d1 * x1[i] + d2 * x2[i] + d3 * x3[i]
    for a in range(n_dA):
        curve[a] = 0.0
        for k in range(4):
            derivatives[k, a] = 0.0
    for j in range(n_vmic):
        w, d = vmic_value[j], vmic_slope[j]
        for a in range(n_dA):
            i = j * n_dA + a
            curve[a] += w * third[0, i]
            derivatives[3, a] += d * third[0, i]
            derivatives[0, a] += w * third[1, i]
            derivatives[1, a] += w * third[2, i]
            derivatives[2, a] += w * third[3, i]
    for a in range(n_dA):
        curve[a] = curve[a] * STEP + FIRST_LOG_WIDTH
        for k in range(4):
            derivatives[k, a] *= STEP


@njit(cache=True, nogil=True)
def curves_in_cell(table, theta, cell, lines, out, derivatives):
    """Curves (n_lines, n_dA) and derivatives (n_lines, 4, n_dA) of lines at theta into given arrays."""
    basis = np.empty((3, 2, 4))
    axis_basis(table.x0, cell[0], theta[0], basis[0, 0], basis[0, 1])
    axis_basis(table.x1, cell[1], theta[1], basis[1, 0], basis[1, 1])
    axis_basis(table.x2, cell[2], theta[2], basis[2, 0], basis[2, 1])
    vmic_value, vmic_slope = np.empty(table.vmic.size), np.empty(table.vmic.size)
    line_basis(table, cell[3], theta[3], vmic_value, vmic_slope)
    corners = np.empty((2, 2, 2), dtype=np.int64)
    corner_nodes(table, cell, corners)
    work = np.empty((24, 2, table.vmic.size * table.dA.size))
    for i in range(lines.size):
        contract_line(table, corners, lines[i], basis, vmic_value, vmic_slope, work, out[i], derivatives[i])


@njit(cache=True, nogil=True)
def curves_at(table, theta, cell, lines):
    """Curves (n_lines, n_dA) and derivatives (4, n_lines, n_dA), as `Interpolator.curves`."""
    out = np.empty((lines.size, table.dA.size))
    derivatives = np.empty((lines.size, 4, table.dA.size))
    curves_in_cell(table, theta, cell, lines, out, derivatives)
    return out, derivatives.transpose(1, 0, 2)


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
def node_slope(matrix, curve, first, end, node):
    """Slope of a curve at a node of its range."""
    total = 0.0
    for k in range(first, end):
        total += matrix[node, k] * curve[k]
    return total


@njit(cache=True, nogil=True)
def invert(all_curves, derivatives, dA, matrices, widths):
    """Twin of `inversion.invert_curves`, on what `curves_at` returns."""
    n_lines, n_dA = all_curves.shape
    n_theta = derivatives.shape[0]
    offset = np.full(n_lines, np.nan)
    d_theta = np.full((n_lines, n_theta), np.nan)
    d_width = np.full(n_lines, np.nan)
    flags = np.zeros(n_lines, dtype=np.uint8)
    for line in range(n_lines):
        curve = all_curves[line]
        first = 0
        end = 0
        start = 0
        for node in range(n_dA):
            if not np.isfinite(curve[node]):
                start = node + 1
            elif node + 1 - start > end - first:
                first = start
                end = node + 1
        width = widths[line]
        if end - first < 2 or not np.isfinite(width):
            flags[line] = FLAG_MISSING
            continue
        if not (curve[first] <= width <= curve[end - 1]):
            flags[line] = FLAG_OUTSIDE
            continue
        lower = first
        for node in range(first, end - 1):
            if curve[node] <= width:
                lower = node
        gap = dA[lower + 1] - dA[lower]
        v0, v1 = curve[lower], curve[lower + 1]
        matrix = matrices[first, end]
        m0 = node_slope(matrix, curve, first, end, lower)
        m1 = node_slope(matrix, curve, first, end, lower + 1)
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
        _, rise = cubic_value(u, gap, v0, v1, m0, m1)
        offset[line] = dA[lower] + u * gap
        d_width[line] = gap / rise
        for k in range(n_theta):
            y = derivatives[k, line]
            s0 = node_slope(matrix, y, first, end, lower)
            s1 = node_slope(matrix, y, first, end, lower + 1)
            change, _ = cubic_value(u, gap, y[lower], y[lower + 1], s0, s1)
            d_theta[line, k] = -change * d_width[line]
    return offset, d_theta, d_width, flags
