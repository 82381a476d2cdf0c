"""Hermite numbers of all nodes of a grid in one table, filled as they are asked for and shared by all stars of a run.

A cell of the interpolant needs the value, the slopes and the mixed slopes of its corners. They belong to the node, so
eight neighbouring cells and all stars with the same lines share them. The compiled path makes them once for each node
and line (single precision, in units of a code) and evaluates curves of growth straight from the table.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from specsolve.grid.codes import CODE_TYPE
from specsolve.grid.inversion import dA_slope_matrices
from specsolve.grid.stencil import spline_slopes

EDGE, BESIDE, WHOLE = 1, 2, 128
"""Bits of `TableArrays.cells`: touches an end of an axis, beside a missing node, no missing corner."""
LIMIT_BYTES = 1 << 30
"""Numbers beyond this are thrown away and made again when needed."""


class TableArrays(NamedTuple):
    """What the kernels read and fill.

    Attributes
    ----------
    codes : ndarray of uint16, shape (n_nodes, n_lines, n_vmic, n_dA)
    numbers : ndarray of float32, shape (n_nodes, n_lines, 8, n_vmic, n_dA)
        Kinds: outer product over teff, logg, mh of (value, slope); memory is taken only where they are filled.
    filled : ndarray of bool, shape (n_nodes, n_lines)
    starts, columns, weights : ndarray
        Rows of the sparse map from nodes to numbers, 8 a node.
    x0, x1, x2, vmic, dA : ndarray
        Node values of teff, logg, mh, vmic, dA.
    cells : ndarray of uint8, shape (n_teff - 1, n_logg - 1, n_mh - 1)
        Bits of each cell; an axis of one node has one cell.
    vmic_slopes : ndarray, shape (n_vmic, n_vmic)
    dA_slopes : ndarray, shape (n_dA, n_dA + 1, n_dA, n_dA)
    """

    codes: np.ndarray
    numbers: np.ndarray
    filled: np.ndarray
    starts: np.ndarray
    columns: np.ndarray
    weights: np.ndarray
    x0: np.ndarray
    x1: np.ndarray
    x2: np.ndarray
    vmic: np.ndarray
    dA: np.ndarray
    cells: np.ndarray
    vmic_slopes: np.ndarray
    dA_slopes: np.ndarray


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
        self._shape = (n_nodes, n_lines, 8, vmic.size, dA.size)
        self._copied = np.zeros(n_lines, dtype=bool)
        starts, columns, weights = _sparse_rows(stencils)
        self.arrays = TableArrays(
            codes=np.empty((n_nodes, n_lines, vmic.size, dA.size), dtype=CODE_TYPE),
            numbers=np.empty(self._shape, dtype=np.float32),
            filled=np.zeros((n_nodes, n_lines), dtype=bool),
            starts=starts,
            columns=columns,
            weights=weights,
            x0=stencils.positions[0],
            x1=stencils.positions[1],
            x2=stencils.positions[2],
            vmic=vmic,
            dA=dA,
            cells=_cell_bits(stencils),
            vmic_slopes=spline_slopes(vmic, even=True) if vmic.size > 1 else np.zeros((1, 1)),
            dA_slopes=dA_slope_matrices(dA),
        )

    def prepare(self, line_indices: np.ndarray) -> None:
        """Copy the codes of lines that are not in the table yet, and keep the memory in bounds."""
        new = np.unique(line_indices[~self._copied[line_indices]])
        if new.size:
            for codes, inside, place in self.grid.flat_blocks(self.treatment, new):
                self.arrays.codes[:, new[place]] = codes[:, inside]
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
    kinds = [tuple(a for a in range(3) if choice >> (2 - a) & 1) for choice in range(8)]
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
