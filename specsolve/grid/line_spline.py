"""Cubic splines along the axes that need no atmosphere (vmic, dA), by coefficients with local support.

The spline through n node values (`stencil.spline_slopes`) is a sum of n basis functions of which at most four differ
from zero between two nodes (B-splines on the nodes without the second and the last but one; mirrored at vmic = 0, where
widths are even in vmic). So a curve at one place needs four coefficients a line axis, not all node values.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from specsolve.grid.codes import MISSING
from specsolve.grid.stencil import hermite_basis, spline_slopes

DEGREE = 3
SUPPORT = DEGREE + 1  # basis functions between two nodes
TINY = 1e-12  # values of a basis function below this are zero


@dataclass(frozen=True, eq=False)
class LineSpline:
    """The spline of one axis.

    Attributes
    ----------
    x : ndarray, shape (n,)
        Nodes.
    basis, slopes : ndarray, shape (n, n)
        Value and slope of each basis function (column) at each node (row).
    coefficients : ndarray, shape (n, n)
        Map from node values to coefficients; the inverse of `basis`.
    starts : ndarray of int, shape (max(n - 1, 1),)
        First of the `width` basis functions that count between a node and the next.
    width : int
        4; n for an axis of fewer than five nodes.
    """

    x: np.ndarray
    basis: np.ndarray
    slopes: np.ndarray
    coefficients: np.ndarray
    starts: np.ndarray
    width: int

    def weights(self, lower: int, at: float) -> tuple[np.ndarray, np.ndarray]:
        """Weights of all coefficients for the value and for the derivative at a place above node `lower`."""
        if self.x.size == 1:
            return np.ones(1), np.zeros(1)
        h = self.x[lower + 1] - self.x[lower]
        rows = np.stack([self.basis[lower], self.basis[lower + 1], self.slopes[lower], self.slopes[lower + 1]])
        value, slope = hermite_basis((at - self.x[lower]) / h, h)
        return value @ rows, slope @ rows


@lru_cache
def line_spline(nodes: tuple[float, ...], even: bool = False) -> LineSpline:
    """The spline on some nodes; `even` as in `stencil.spline_slopes`."""
    x = np.array(nodes, dtype=np.float64)
    n = x.size
    basis = np.eye(n)
    if n > SUPPORT:
        if even and x[0] == 0.0:
            whole = collocation(np.concatenate([-x[:0:-1], x]))[n - 1 :]
            basis = whole[:, n - 1 :].copy()
            basis[:, 1:] += whole[:, n - 2 :: -1]
        else:
            basis = collocation(x)
    slopes = spline_slopes(x, even) @ basis
    basis[np.abs(basis) < TINY] = 0.0
    slopes[np.abs(slopes) < TINY] = 0.0
    starts, width = np.zeros(max(n - 1, 1), dtype=np.int64), n
    if n > SUPPORT:
        width = SUPPORT
        for lower in range(n - 1):
            used = (basis[lower : lower + 2] != 0.0).any(axis=0) | (slopes[lower : lower + 2] != 0.0).any(axis=0)
            starts[lower] = min(int(np.argmax(used)), n - width)
    return LineSpline(x, basis, slopes, np.linalg.inv(basis), starts, width)


def collocation(x: np.ndarray) -> np.ndarray:
    """Values of the cubic B-splines at the nodes x, shape (n, n); knots are the nodes without the second and the last
    but one, the ends fourfold (recursion of Cox and de Boor).
    """
    n = x.size
    knots = np.concatenate([np.full(DEGREE, x[0]), x[:1], x[2 : n - 2], x[-1:], np.full(DEGREE, x[-1])])
    values = np.zeros((n, knots.size - 1))
    for row, at in enumerate(x):
        inside = np.flatnonzero((knots[:-1] <= at) & (at < knots[1:]))
        values[row, inside[0] if inside.size else n - 1] = 1.0  # the last node belongs to the last interval
    for degree in range(1, DEGREE + 1):
        for k in range(knots.size - 1 - degree):
            left, right = knots[k + degree] - knots[k], knots[k + degree + 1] - knots[k + 1]
            first = (x - knots[k]) / left * values[:, k] if left > 0.0 else 0.0
            second = (knots[k + degree + 1] - x) / right * values[:, k + 1] if right > 0.0 else 0.0
            values[:, k] = first + second
    return values[:, :n]


def continued(codes: np.ndarray, dA: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Codes with missing ones replaced, and the range of dA in which they are real.

    Where the abundance axis lacks codes at an end, the spline through the rest is continued by its last cubic, so that
    the spline through all nodes is that through the rest; a result never rests on the continuation.

    Parameters
    ----------
    codes : ndarray of uint16, shape (..., n_vmic, n_dA)
    dA : ndarray, shape (n_dA,)

    Returns
    -------
    filled : ndarray of float32, shape of `codes`
        Whole numbers.
    first, end : ndarray of int, shape (...)
        Half-open range of nodes at which no vmic lacks a code (the longest of each vmic); equal where there is none.
    """
    filled = codes.astype(np.float32)
    there = codes != MISSING
    low, high = longest_runs(there)
    rows = np.nonzero(~there.all(axis=-1))
    runs = np.stack([low[rows], high[rows]], axis=1)
    for run in np.unique(runs, axis=0):
        chosen = tuple(index[(runs == run).all(axis=1)] for index in rows)
        filled[chosen] = filled[chosen] @ _continuation(tuple(dA), int(run[0]), int(run[1])).T
        filled[chosen] = np.rint(filled[chosen])
    first, end = low.max(axis=-1), high.min(axis=-1)
    return filled, first, np.maximum(end, first)


def longest_runs(there: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Half-open ranges of the longest unbroken run of true along the last axis (the first of equally long ones)."""
    first = np.zeros(there.shape[:-1], dtype=np.int64)
    end, start = np.zeros_like(first), np.zeros_like(first)
    for node in range(there.shape[-1]):
        start = np.where(there[..., node], start, node + 1)
        longer = there[..., node] & (node + 1 - start > end - first)
        first, end = np.where(longer, start, first), np.where(longer, node + 1, end)
    return first, end


@lru_cache
def _continuation(dA: tuple[float, ...], first: int, end: int) -> np.ndarray:
    """Map from all values of a row to the same with those outside a run replaced by the run's end cubics.

    Zero where the run has fewer than two nodes.
    """
    x = np.array(dA)
    n = x.size
    matrix = np.zeros((n, n))
    if end - first < 2:
        return matrix
    inner = slice(first, end)
    matrix[inner, inner] = np.eye(end - first)
    slopes = np.zeros((n, n))
    slopes[inner, inner] = spline_slopes(x[inner])
    for nodes, lower in ((range(first), first), (range(end, n), end - 2)):
        h = x[lower + 1] - x[lower]
        for node in nodes:
            value, _ = hermite_basis((x[node] - x[lower]) / h, h)
            matrix[node] = value @ np.stack([matrix[lower], matrix[lower + 1], slopes[lower], slopes[lower + 1]])
    return matrix
