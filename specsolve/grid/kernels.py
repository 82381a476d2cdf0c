"""Compiled twins of the gathering, contraction and inversion in `interpolate` and `inversion`, for bulk work.

Numbers of a cell are laid out (line, node number, vmic number, dA) here: the share of one line stays in the fast cache.
nan stands for missing and must be able to pass: no fastmath.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from specsolve.grid.codes import FIRST_LOG_WIDTH, MISSING, STEP
from specsolve.grid.inversion import CONVERGED, ITERATIONS
from specsolve.grid.inversion import MISSING as FLAG_MISSING
from specsolve.grid.inversion import OUTSIDE as FLAG_OUTSIDE


@njit(cache=True, nogil=True)
def gather_cell(codes, inside, place, nodes, starts, columns, weights, vmic_map, out):
    """Hermite numbers of a cell from the codes of its nodes, for the lines of one block.

    Parameters
    ----------
    codes : ndarray of uint16, shape (n_all_nodes, n_block_lines, n_vmic, n_dA)
    inside, place : ndarray of int, shape (n_lines,)
        Positions of the lines in the block and in `out`.
    nodes, starts, columns, weights : ndarray
        Sparse map from nodes to numbers, see `stencil.NodeStencils.sparse_map`.
    vmic_map : ndarray, shape (n_vmic_numbers, n_vmic)
    out : ndarray, shape (n_all_lines, n_numbers, n_vmic_numbers, n_dA)
        Filled at `place`.
    """
    n_vmic, n_dA = codes.shape[2:]
    n_numbers = starts.size - 1
    n_vmic_numbers = vmic_map.shape[0]
    n_inner = n_vmic_numbers * n_dA
    at_node = np.empty((nodes.size, n_inner))
    widths = np.empty((n_vmic, n_dA))
    for line in range(inside.size):
        for k in range(nodes.size):
            here = codes[nodes[k], inside[line]]
            n_missing = 0
            for j in range(n_vmic):
                for a in range(n_dA):
                    widths[j, a] = here[j, a] * STEP + FIRST_LOG_WIDTH
                    n_missing += here[j, a] == MISSING
            if n_missing > 0:  # apart, so that the common case has no branch
                for j in range(n_vmic):
                    for a in range(n_dA):
                        if here[j, a] == MISSING:
                            widths[j, a] = np.nan
            target = at_node[k].reshape(n_vmic_numbers, n_dA)
            target[:] = 0.0
            for q in range(n_vmic_numbers):
                for j in range(n_vmic):
                    weight = vmic_map[q, j]
                    if weight != 0.0:
                        for a in range(n_dA):
                            target[q, a] += weight * widths[j, a]
        numbers = out[place[line]].reshape(n_numbers, n_inner)
        numbers[:] = 0.0
        for row in range(n_numbers):
            for entry in range(starts[row], starts[row + 1]):
                weight = weights[entry]
                source = at_node[columns[entry]]
                for i in range(n_inner):
                    numbers[row, i] += weight * source[i]


@njit(cache=True, nogil=True)
def contract_line(numbers, value, slopes, vmic_value, vmic_slope, curve, derivatives):
    """Curve of growth of one line, and its derivatives, into given arrays.

    Parameters
    ----------
    numbers : ndarray, shape (n_numbers, n_vmic_numbers, n_dA)
    value : ndarray, shape (n_numbers,)
    slopes : ndarray, shape (n_node_axes, n_numbers)
    vmic_value, vmic_slope : ndarray, shape (n_vmic_numbers,)
    curve : ndarray, shape (n_dA,)
        Filled.
    derivatives : ndarray, shape (n_node_axes + 1, n_dA)
        Filled; vmic last.
    """
    n_numbers, n_vmic_numbers, n_dA = numbers.shape
    n_axes = slopes.shape[0]
    n_inner = n_vmic_numbers * n_dA
    flat = numbers.reshape(n_numbers, n_inner)
    total = np.zeros((n_axes + 1, n_inner))  # value, then the derivatives along the node axes
    for k in range(n_numbers):
        for i in range(n_inner):
            total[0, i] += value[k] * flat[k, i]
        for axis in range(n_axes):
            weight = slopes[axis, k]
            for i in range(n_inner):
                total[axis + 1, i] += weight * flat[k, i]
    curve[:] = 0.0
    derivatives[:] = 0.0
    for j in range(n_vmic_numbers):
        for a in range(n_dA):
            i = j * n_dA + a
            curve[a] += vmic_value[j] * total[0, i]
            derivatives[n_axes, a] += vmic_slope[j] * total[0, i]
            for axis in range(n_axes):
                derivatives[axis, a] += vmic_value[j] * total[axis + 1, i]


@njit(cache=True, nogil=True)
def axis_basis(t, h):
    """Basis values and slopes of one axis (`stencil.hermite_basis`); 1 and 0 if h is 0, an axis of one node."""
    if h == 0.0:
        return np.ones(1), np.zeros(1)
    value = np.array([(1 + 2 * t) * (1 - t) ** 2, t * t * (3 - 2 * t), h * t * (1 - t) ** 2, -h * t * t * (1 - t)])
    slope = np.array([-6 * t * (1 - t) / h, 6 * t * (1 - t) / h, (1 - t) * (1 - 3 * t), t * (3 * t - 2)])
    return value, slope


@njit(cache=True, nogil=True)
def cell_basis(t, h, n_numbers):
    """Weights of the node numbers and of the vmic numbers of a cell.

    Parameters
    ----------
    t, h : ndarray, shape (n_theta,)
        Place in the cell along each axis (0 to 1) and width of the cell; vmic last.

    Returns
    -------
    value : ndarray, shape (n_numbers,)
    slopes : ndarray, shape (n_theta - 1, n_numbers)
    vmic_value, vmic_slope : ndarray, shape (n_vmic_numbers,)
    """
    n_axes = t.size - 1
    products = np.empty((n_axes + 1, n_numbers))
    products[:, 0] = 1.0
    count = 1
    for axis in range(n_axes):
        value, slope = axis_basis(t[axis], h[axis])
        for row in range(n_axes + 1):
            factor = slope if row == axis + 1 else value
            for i in range(count - 1, -1, -1):
                whole = products[row, i]
                for q in range(factor.size):
                    products[row, i * factor.size + q] = whole * factor[q]
        count *= value.size
    vmic_value, vmic_slope = axis_basis(t[n_axes], h[n_axes])
    return products[0], products[1:], vmic_value, vmic_slope


@njit(cache=True, nogil=True)
def curves(numbers, t, h):
    """Curves (n_lines, n_dA) and derivatives (n_theta, n_lines, n_dA); see `cell_basis`, `contract_line`."""
    value, slopes, vmic_value, vmic_slope = cell_basis(t, h, numbers.shape[1])
    n_lines, n_dA = numbers.shape[0], numbers.shape[3]
    out = np.empty((n_lines, n_dA))
    derivatives = np.empty((slopes.shape[0] + 1, n_lines, n_dA))
    for line in range(n_lines):
        contract_line(numbers[line], value, slopes, vmic_value, vmic_slope, out[line], derivatives[:, line])
    return out, derivatives


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
    """Twin of `inversion.invert_curves`, on what `curves` returns."""
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
