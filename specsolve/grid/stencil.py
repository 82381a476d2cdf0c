"""Slopes at nodes and the linear map from node values to the cubic of a cell.

In one dimension the interpolant between two nodes a distance h apart is the cubic with the given values and slopes at
both (Hermite form, t = (x - x_lo)/h):

    f = h00 f_lo + h01 f_hi + h (h10 m_lo + h11 m_hi)

and in several dimensions the tensor product of that, which asks at every corner of a cell for the value, the slope
along each axis and the mixed slopes. The slopes belong to the NODE: they depend on the nodes around it, never on the
cell that asks. So the interpolant and its first derivatives are continuous across every face between two cells.

A slope comes from the polynomial through the nearest `PURE_POINTS` nodes of the unbroken run of valid nodes around the
node along the axis (mixed slopes: `MIXED_POINTS` an axis): central inside, one-sided at the ends of the grid and beside
missing nodes. A missing node ends the run; nothing reaches across it.

Along the axes that need no atmosphere (vmic, dA) the slopes are those of a cubic spline through all nodes: widths vary
faster there, and no node is missing for lack of an atmosphere.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations, product

import numpy as np

PURE_POINTS = 5
"""Points of a slope along one axis: error of fourth order in the node spacing."""

MIXED_POINTS = 3
"""Points an axis of a mixed slope: they enter the interpolant multiplied by two spacings, so second order is enough."""


def hermite_basis(t, h):
    """Basis values and their derivatives with respect to x, each of shape (4, ...).

    The order is value lo, value hi, slope lo, slope hi.

    Parameters
    ----------
    t : float or ndarray
        (x - x_lo) / h, from 0 to 1.
    h : float or ndarray
        Distance of the two nodes.
    """
    value = np.stack([(1 + 2 * t) * (1 - t) ** 2, t * t * (3 - 2 * t), h * t * (1 - t) ** 2, -h * t * t * (1 - t)])
    slope = np.stack([-6 * t * (1 - t) / h, 6 * t * (1 - t) / h, (1 - t) * (1 - 3 * t), t * (3 * t - 2)])
    return value, slope


def derivative_weights(x: np.ndarray, at: float) -> np.ndarray:
    """Weights w such that sum(w f(x)) is the derivative, at a node `at` of x, of the polynomial through all points.

    Derivative of the Lagrange polynomials; for 2 to 5 points, unequally spaced.
    """
    n = x.size
    weights = np.zeros(n)
    here = int(np.argmin(np.abs(x - at)))
    for j in range(n):
        if j != here:
            others = [k for k in range(n) if k not in (j, here)]
            weights[j] = np.prod((at - x[others]) / (x[j] - x[others])) / (x[j] - at)
    weights[here] = -weights.sum()
    return weights


def slope_stencil(x: np.ndarray, usable: np.ndarray, node: int, n_points: int) -> tuple[np.ndarray, np.ndarray] | None:
    """Nodes and weights of the slope at a node.

    Parameters
    ----------
    x : ndarray, shape (n,)
        Node positions.
    usable : ndarray of bool, shape (n,)
    node : int
    n_points : int
        Points wanted; fewer if the run of usable nodes around `node` is shorter.

    Returns
    -------
    (indices, weights), or None if the node is not usable or stands alone.
    """
    if not usable[node]:
        return None
    first, last = node, node
    while first > 0 and usable[first - 1]:
        first -= 1
    while last + 1 < x.size and usable[last + 1]:
        last += 1
    count = min(n_points, last - first + 1)
    if count < 2:
        return None
    start = min(max(node - n_points // 2, first), last + 1 - count)
    indices = np.arange(start, start + count)
    return indices, derivative_weights(x[indices], x[node])


def spline_slopes(x: np.ndarray, even: bool = False) -> np.ndarray:
    """Matrix from node values to the node slopes of the cubic spline through them, shape (n, n).

    The spline has continuous second derivatives and one cubic each over the first two and the last two intervals; for
    three nodes it is the parabola, for two the line.

    Parameters
    ----------
    x : ndarray, shape (n,)
    even : bool
        The function is even in x and x starts at 0: nodes mirrored at 0 take part. So it is with vmic, which enters
        the Doppler width squared.
    """
    n = x.size
    if even and n > 1 and x[0] == 0.0:
        whole = spline_slopes(np.concatenate([-x[:0:-1], x]))[n - 1 :]
        matrix = whole[:, n - 1 :].copy()
        matrix[:, 1:] += whole[:, n - 2 :: -1]
        return matrix
    if n <= 3:
        return np.array([derivative_weights(x, at) for at in x]) if n > 1 else np.zeros((1, 1))
    h = np.diff(x)
    unit = np.eye(n)
    chord = np.diff(unit, axis=0) / h[:, None]  # slopes of the intervals, as rows over node values
    left, right = np.zeros((n, n)), np.zeros((n, n))  # left @ slopes = right @ values
    for i in range(1, n - 1):  # equal second derivatives at node i
        left[i, i - 1 : i + 2] = h[i], 2.0 * (h[i - 1] + h[i]), h[i - 1]
        right[i] = 3.0 * (h[i] * chord[i - 1] + h[i - 1] * chord[i])
    for row, i in ((0, 0), (n - 1, n - 3)):  # equal third derivatives in intervals i and i + 1
        left[row] = (unit[i] + unit[i + 1]) / h[i] ** 2 - (unit[i + 1] + unit[i + 2]) / h[i + 1] ** 2
        right[row] = 2.0 * chord[i] / h[i] ** 2 - 2.0 * chord[i + 1] / h[i + 1] ** 2
    return np.linalg.solve(left, right)


def cell_of(x: np.ndarray, value: float) -> int:
    """Index of the lower node of the cell that holds `value`, which lies inside the axis."""
    return int(min(max(np.searchsorted(x, value, side="right") - 1, 0), max(x.size - 2, 0)))


class NodeStencils:
    """Linear maps from node values to the Hermite numbers of cells, for one pattern of valid nodes.

    Parameters
    ----------
    positions : sequence of ndarray
        Node values of each node axis. An axis of one node is carried along without a slope.
    valid : ndarray of bool, one dimension an axis
    """

    def __init__(self, positions: Sequence[np.ndarray], valid: np.ndarray):
        self.positions = tuple(positions)
        self.valid = valid
        self.active = tuple(axis for axis, x in enumerate(self.positions) if x.size > 1)
        self._usable = {(): valid}
        for size in range(1, len(self.active) + 1):
            for axes in combinations(self.active, size):
                self._usable[axes] = has_neighbour(self._usable[axes[:-1]], axes[-1])
        self._nodes: dict[tuple[int, ...], tuple[np.ndarray, np.ndarray]] = {}
        self._stencils: dict[tuple[int, int, int, bytes], list[tuple[int, float]]] = {}

    @property
    def n_numbers(self) -> int:
        """Hermite numbers of a cell: 4 an axis that has a slope."""
        return 4 ** len(self.active)

    def corners(self, cell: tuple[int, ...]) -> list[tuple[int, ...]]:
        """Nodes at the corners of a cell."""
        steps = [(0, 1) if x.size > 1 else (0,) for x in self.positions]
        return [tuple(c + s for c, s in zip(cell, step, strict=True)) for step in product(*steps)]

    def cell_valid(self, cell: tuple[int, ...]) -> bool:
        """True if no corner is missing."""
        return all(self.valid[corner] for corner in self.corners(cell))

    def at_edge(self, cell: tuple[int, ...]) -> bool:
        """True if the cell touches an end of an axis: a slope there is one-sided."""
        return any(cell[axis] in (0, self.positions[axis].size - 2) for axis in self.active)

    def beside_missing(self, cell: tuple[int, ...]) -> bool:
        """True if a node next to a corner of the cell is missing."""
        window = tuple(
            slice(max(cell[axis] - 1, 0), cell[axis] + 3) if axis in self.active else slice(None)
            for axis in range(len(self.positions))
        )
        return not bool(self.valid[window].all())

    def node_map(self, node: tuple[int, ...]) -> tuple[np.ndarray, np.ndarray]:
        """Nodes and matrix that give the Hermite numbers of one node: its value, slopes and mixed slopes.

        Returns
        -------
        nodes : ndarray of int, shape (n_nodes, n_axes)
        matrix : ndarray, shape (2 ** n_active, n_nodes)
            Numbers ordered as the outer product over the axes that have a slope of (value, slope).
        """
        if node not in self._nodes:
            rows = [self.node_weights(node, axes) for axes in self.kinds]
            nodes = sorted({source for row in rows for source in row})
            place = {source: i for i, source in enumerate(nodes)}
            matrix = np.zeros((len(rows), len(nodes)))
            for i, row in enumerate(rows):
                for source, weight in row.items():
                    matrix[i, place[source]] = weight
            self._nodes[node] = np.array(nodes), matrix
        return self._nodes[node]

    @property
    def kinds(self) -> list[tuple[int, ...]]:
        """Axes along which each number of a node is a slope, in the order of `node_map`."""
        return [
            tuple(axis for axis, slope in zip(self.active, choice, strict=True) if slope)
            for choice in product((0, 1), repeat=len(self.active))
        ]

    def node_weights(self, node: tuple[int, ...], axes: tuple[int, ...]) -> dict[tuple[int, ...], float]:
        """Weights of the node values in the (mixed) slope of a node along some axes; its value for no axes."""
        return self._weights(node, axes, PURE_POINTS if len(axes) == 1 else MIXED_POINTS)

    def in_whole_cell(self) -> np.ndarray:
        """True at nodes that are a corner of at least one cell without a missing corner; bool, shape of the nodes."""
        cells = self.whole_cells()
        found = np.zeros(self.valid.shape, dtype=bool)
        for corner in self.corners((0,) * len(self.positions)):
            found[tuple(slice(c, c + n) for c, n in zip(corner, cells.shape, strict=True))] |= cells
        return found

    def whole_cells(self) -> np.ndarray:
        """True for cells without a missing corner; bool, a cell an interval (one for an axis of one node)."""
        shape = tuple(max(x.size - 1, 1) for x in self.positions)
        cells = np.ones(shape, dtype=bool)
        for corner in self.corners((0,) * len(self.positions)):
            cells &= self.valid[tuple(slice(c, c + n) for c, n in zip(corner, shape, strict=True))]
        return cells

    def _weights(self, node: tuple[int, ...], axes: tuple[int, ...], n_points: int) -> dict[tuple[int, ...], float]:
        if not axes:
            return {node: 1.0}
        *inner, axis = axes
        line = (*node[:axis], slice(None), *node[axis + 1 :])
        usable = self._usable[tuple(inner)][line]
        key = (axis, node[axis], n_points, usable.tobytes())
        if key not in self._stencils:
            indices, weights = slope_stencil(self.positions[axis], usable, node[axis], n_points)
            self._stencils[key] = [(int(i), float(w)) for i, w in zip(indices, weights, strict=True) if w != 0.0]
        total: dict[tuple[int, ...], float] = {}
        for index, weight in self._stencils[key]:
            beside = (*node[:axis], index, *node[axis + 1 :])
            for source, part in self._weights(beside, tuple(inner), n_points).items():
                total[source] = total.get(source, 0.0) + weight * part
        return total


def has_neighbour(usable: np.ndarray, axis: int) -> np.ndarray:
    """True at usable nodes that have at least one usable neighbour along the axis."""
    moved = np.moveaxis(usable, axis, 0)
    beside = np.zeros_like(moved)
    beside[1:] |= moved[:-1]
    beside[:-1] |= moved[1:]
    return np.moveaxis(moved & beside, 0, axis)
