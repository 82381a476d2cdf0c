"""Abundances at the nodes of a grid from widths, coarse and fast: for looking at the whole grid, not for results.

The curve of growth is taken as straight lines along dA, inverted at fixed levels of the width 0.1 dex apart, and the
offset at a width between two levels is interpolated linearly. The offsets at a level belong to the grid alone, so that
in bulk work they are made once and serve all stars (`CoarseInverse`).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from specsolve.grid.codes import MISSING, STEP, encode

LEVEL_CODES = 1000  # distance of two levels in units of a code: 0.1 dex
MIN_SLOPE = 0.08  # least dlogW/dA with which a curve is continued beyond its table
N_LEVELS = MISSING // LEVEL_CODES + 2
LIMIT_BYTES = 1 << 30
"""Offsets beyond this are thrown away and made again when needed."""


def levels_of(log_reduced_widths: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Lower level of each width, and the share of the upper one.

    Examples
    --------
    >>> levels_of(np.array([-5.03]))
    (array([39]), array([0.7]))
    """
    codes = encode(log_reduced_widths).astype(np.int64)
    lower = codes // LEVEL_CODES
    return lower, (codes - LEVEL_CODES * lower) / LEVEL_CODES


def invert_linear(codes: np.ndarray, target: np.ndarray, spacing: np.ndarray) -> np.ndarray:
    """Offset dA at which straight lines between nodes reach a width; continued beyond both ends of what is there.

    Parameters
    ----------
    codes : ndarray of uint16, shape (n_nodes, n_lines, n_vmic, n_dA)
    target : ndarray of int, shape (n_lines,)
        Widths as codes.
    spacing : ndarray, shape (n_dA,)
        Node values of dA.

    Returns
    -------
    ndarray of float32, shape (n_nodes, n_lines, n_vmic)
        nan where fewer than two nodes are there, or one is missing amid them.
    """
    there = codes != MISSING
    count = there.sum(axis=-1)
    first = np.argmax(there, axis=-1)
    below = ((codes <= target[None, :, None, None]) & there).sum(axis=-1)
    upper = np.maximum(np.minimum(np.maximum(first + below, first + 1), first + count - 1), 1)
    low = np.take_along_axis(codes, (upper - 1)[..., None], axis=-1)[..., 0].astype(float)
    high = np.take_along_axis(codes, upper[..., None], axis=-1)[..., 0].astype(float)
    slope = np.maximum((high - low) / (spacing[upper] - spacing[upper - 1]), MIN_SLOPE / STEP)
    offset = spacing[upper - 1] + (target[None, :, None] - low) / slope
    return np.where((count < 2) | (low == MISSING) | (high == MISSING), np.nan, offset).astype(np.float32)


def coarse_offsets(codes: np.ndarray, log_reduced_widths: np.ndarray, spacing: np.ndarray) -> np.ndarray:
    """Offsets dA of widths, shape (n_nodes, n_lines, n_vmic); arguments as of `invert_linear`."""
    lower, share = levels_of(log_reduced_widths)
    first = invert_linear(codes, LEVEL_CODES * lower, spacing)
    second = invert_linear(codes, LEVEL_CODES * (lower + 1), spacing)
    share = share[None, :, None]
    return first * (1.0 - share) + second * share


class CoarseInverse:
    """Offsets of the lines of a grid at the levels, made once in a process; compiled.

    Parameters
    ----------
    grid : ResponseGrid
    treatment : str
    """

    def __init__(self, grid: Any, treatment: str):
        self._grid, self._treatment = grid, treatment
        self._n_nodes, self._n_lines = int(np.prod(grid.node_shape)), len(grid.lines)
        self._valid = np.nonzero(grid.node_valid(treatment))
        self._n_vmic = len(grid.line_axes[0])
        self._clear()

    def _clear(self) -> None:
        shape = (self._n_lines, N_LEVELS, self._n_nodes * self._n_vmic)
        self._offsets = np.empty(shape, dtype=np.float32)  # memory is taken where it is filled
        self._filled = np.zeros(shape[:2], dtype=bool)

    def combine(self, lines: np.ndarray, log_reduced_widths: np.ndarray, operator: np.ndarray) -> np.ndarray:
        """Sums over lines of operator times offset, shape (n_rows, n_nodes, n_vmic); nan at missing nodes.

        Parameters
        ----------
        lines : ndarray of int, shape (n_lines,)
        log_reduced_widths : ndarray, shape (n_lines,)
        operator : ndarray, shape (n_rows, n_lines)
        """
        from specsolve.grid.coarse_kernel import combine, fill

        lower, share = levels_of(log_reduced_widths)
        if np.count_nonzero(self._filled) * self._offsets[0, 0].nbytes > LIMIT_BYTES:
            self._clear()
        absent = ~(self._filled[lines, lower] & self._filled[lines, lower + 1])
        if absent.any():
            grid = self._grid
            codes = grid.gather(self._treatment, self._valid, lines[absent])
            flat = np.ravel_multi_index(self._valid, grid.node_shape)
            fill(codes, flat, lines[absent], lower[absent], LEVEL_CODES, grid.axes["dA"], MIN_SLOPE / STEP,
                 self._offsets, self._filled)  # fmt: skip
        total = combine(self._offsets, lines, lower, share, operator)
        return total.reshape(len(operator), self._n_nodes, self._n_vmic)


def coarse_inverse(grid: Any, treatment: str) -> CoarseInverse:
    """The one table of a grid and treatment in this process."""
    key = f"{treatment} coarse inverse"
    if key not in grid.node_tables:
        grid.node_tables[key] = CoarseInverse(grid, treatment)
    return grid.node_tables[key]
