"""Compiled: the cell that holds a place, the weights of its corners, and the filling of the shared table."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from specsolve.grid.codes import CENTRE
from specsolve.grid.node_table import EDGE, N_KINDS, WHOLE

FUSED = {"contract"}
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
    weights : ndarray, shape (N_OUT, 8 * vmic_width * 8)
        Weights of the numbers in value and derivatives: corner, coefficient along vmic, kind.
    first_vmic : int
        First coefficient along vmic that counts.
    """

    corners: np.ndarray
    weights: np.ndarray
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
    weights = np.empty((N_OUT, 8, width, 8))
    for q in range(8):
        a, b, c = q >> 2, (q >> 1) & 1, q & 1
        for k in range(8):
            i, j, m = a + 2 * (k >> 2), b + 2 * ((k >> 1) & 1), c + 2 * (k & 1)
            whole = basis[0, 0, i] * basis[1, 0, j] * basis[2, 0, m]
            along0 = basis[0, 1, i] * basis[1, 0, j] * basis[2, 0, m]
            along1 = basis[0, 0, i] * basis[1, 1, j] * basis[2, 0, m]
            along2 = basis[0, 0, i] * basis[1, 0, j] * basis[2, 1, m]
            for v in range(width):
                weights[0, q, v, k] = whole * vmic[0, v]
                weights[1, q, v, k] = along0 * vmic[0, v]
                weights[2, q, v, k] = along1 * vmic[0, v]
                weights[3, q, v, k] = along2 * vmic[0, v]
                weights[4, q, v, k] = whole * vmic[1, v]
    return Place(nodes.reshape(8), weights.reshape(N_OUT, 64 * width), first)


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
