"""Hermite numbers of all nodes of a grid in one table, filled as they are asked for and shared by all stars of a run.

A cell of the interpolant needs the value, the slopes and the mixed slopes of its corners. They belong to the node, so
eight neighbouring cells and all stars with the same lines share them. The compiled path makes them once for each node
and line and evaluates curves of growth straight from the table. They are coefficients of the splines along vmic and dA
(`line_spline`), in units of a code from its centre, in single precision: a curve at one place reads 16 of them a kind.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from specsolve.grid.line_spline import continued, line_spline

EDGE, BESIDE, WHOLE = 1, 2, 128
"""Bits of `TableArrays.cells`: touches an end of an axis, beside a missing node, no missing corner."""
N_KINDS = 8  # value and slopes of a node: two to the number of node axes
LIMIT_BYTES = 1 << 30
"""Numbers beyond this are thrown away and made again when needed."""


class TableArrays(NamedTuple):
    """What the kernels read and fill.

    Attributes
    ----------
    codes : ndarray of float32, shape (n_nodes, n_lines, n_vmic, n_dA)
        Whole numbers, see `line_spline.continued`; memory is taken only where an array is filled.
    own : ndarray of uint8, shape (n_nodes, n_lines, 2)
        Range of dA in which they are real.
    numbers : ndarray of float32, shape (n_nodes, n_lines, n_dA, n_vmic, 8)
        Kinds: outer product over teff, logg, mh of (value, slope).
    span : ndarray of uint8, shape (n_nodes, n_lines, 2)
        Range of dA in which the numbers count.
    filled : ndarray of bool, shape (n_nodes, n_lines)
    starts, columns, weights : ndarray
        Rows of the sparse map from nodes to numbers, 8 a node.
    x0, x1, x2 : ndarray
        Node values of teff, logg, mh.
    cells : ndarray of uint8, shape (n_teff - 1, n_logg - 1, n_mh - 1)
        Bits of each cell; an axis of one node has one cell.
    vmic, vmic_basis, vmic_slopes, vmic_coefficients, vmic_starts : ndarray
        The spline of the axis, see `line_spline.LineSpline`.
    dA, dA_basis, dA_slopes, dA_coefficients, dA_starts : ndarray
    vmic_width, dA_width : int
    """

    codes: np.ndarray
    own: np.ndarray
    numbers: np.ndarray
    span: np.ndarray
    filled: np.ndarray
    starts: np.ndarray
    columns: np.ndarray
    weights: np.ndarray
    x0: np.ndarray
    x1: np.ndarray
    x2: np.ndarray
    cells: np.ndarray
    vmic: np.ndarray
    vmic_basis: np.ndarray
    vmic_slopes: np.ndarray
    vmic_coefficients: np.ndarray
    vmic_starts: np.ndarray
    vmic_width: int
    dA: np.ndarray
    dA_basis: np.ndarray
    dA_slopes: np.ndarray
    dA_coefficients: np.ndarray
    dA_starts: np.ndarray
    dA_width: int


class NodeTable:
    """The table of one grid and treatment; call `prepare` for the lines in use before a kernel runs.

    Parameters
    ----------
    grid : ResponseGrid
        With three node axes.
    treatment : str
    """

    def __init__(self, grid: Any, treatment: str):
        self.grid, self.treatment = grid, treatment
        stencils = grid.stencils(treatment)
        n_nodes, n_lines = int(np.prod(grid.node_shape)), len(grid.lines)
        vmic, dA = (axis.values for axis in grid.line_axes)
        of_vmic, of_dA = line_spline(tuple(vmic), even=True), line_spline(tuple(dA))
        self._shape = (n_nodes, n_lines, dA.size, vmic.size, N_KINDS)
        self._copied = np.zeros(n_lines, dtype=bool)
        self._valid = grid.node_valid(treatment).ravel()
        starts, columns, weights = _sparse_rows(stencils)
        self.arrays = TableArrays(
            codes=np.empty((n_nodes, n_lines, vmic.size, dA.size), dtype=np.float32),
            own=np.zeros((n_nodes, n_lines, 2), dtype=np.uint8),
            numbers=np.empty(self._shape, dtype=np.float32),
            span=np.zeros((n_nodes, n_lines, 2), dtype=np.uint8),
            filled=np.zeros((n_nodes, n_lines), dtype=bool),
            starts=starts,
            columns=columns,
            weights=weights,
            x0=stencils.positions[0],
            x1=stencils.positions[1],
            x2=stencils.positions[2],
            cells=_cell_bits(stencils),
            vmic=of_vmic.x,
            vmic_basis=of_vmic.basis,
            vmic_slopes=of_vmic.slopes,
            vmic_coefficients=of_vmic.coefficients,
            vmic_starts=of_vmic.starts,
            vmic_width=of_vmic.width,
            dA=of_dA.x,
            dA_basis=of_dA.basis,
            dA_slopes=of_dA.slopes,
            dA_coefficients=of_dA.coefficients,
            dA_starts=of_dA.starts,
            dA_width=of_dA.width,
        )

    def prepare(self, line_indices: np.ndarray) -> None:
        """Copy the codes of lines that are not in the table yet, and keep the memory in bounds."""
        new = np.unique(line_indices[~self._copied[line_indices]])
        if new.size:
            for codes, inside, place in self.grid.flat_blocks(self.treatment, new):
                lines = new[place]
                filled, first, end = continued(codes[self._valid][:, inside], self.arrays.dA)
                rows = np.ix_(self._valid, lines)
                self.arrays.codes[rows] = filled
                self.arrays.own[rows] = np.stack([first, end], axis=-1)
            self._copied[new] = True
        a_number = int(np.prod(self._shape[2:])) * self.arrays.numbers.itemsize
        if np.count_nonzero(self.arrays.filled) * a_number > LIMIT_BYTES:
            self.arrays = self.arrays._replace(
                numbers=np.empty(self._shape, dtype=np.float32), filled=np.zeros_like(self.arrays.filled)
            )


def node_table(grid: Any, treatment: str) -> NodeTable:
    """The one table of a grid and treatment in this process."""
    tables = grid.node_tables
    if treatment not in tables:
        tables[treatment] = NodeTable(grid, treatment)
    return tables[treatment]


def _sparse_rows(stencils: Any) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Row starts, flat source nodes and weights of the 8 numbers of every node that a whole cell uses."""
    shape = stencils.valid.shape
    kinds = [tuple(a for a in range(3) if choice >> (2 - a) & 1) for choice in range(N_KINDS)]
    wanted = stencils.in_whole_cell()
    starts, columns, weights = [0], [], []
    for node in np.ndindex(shape):
        for axes in kinds:
            if wanted[node] and set(axes) <= set(stencils.active):
                row = stencils.node_weights(node, axes)
                for source in sorted(row):
                    if row[source] != 0.0:
                        columns.append(int(np.ravel_multi_index(source, shape)))
                        weights.append(row[source])
            starts.append(len(columns))
    return np.array(starts), np.array(columns, dtype=np.int64), np.array(weights, dtype=np.float64)


def _cell_bits(stencils: Any) -> np.ndarray:
    cells = np.where(stencils.whole_cells(), WHOLE, 0).astype(np.uint8)
    for cell in np.ndindex(cells.shape):
        cells[cell] |= EDGE * stencils.at_edge(cell) | BESIDE * stencils.beside_missing(cell)
    return cells
