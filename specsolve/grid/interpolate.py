"""Line abundances, curves of growth and widths between the nodes of a grid.

Along every axis (teff, logg, mh, vmic, dA) the interpolant of log10(W/lambda) is a piecewise cubic with continuous
first derivatives (`specsolve.grid.stencil`). The value and the slopes of a node, its Hermite numbers, serve all cells
around it. Along vmic and dA they are kept as coefficients of the spline (`specsolve.grid.line_spline`), in single
precision (1e-7 dex), here as in the shared table of the compiled path (`specsolve.grid.node_table`): both agree to 1e-9.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import product

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.errors import InputError, OutOfGridError
from specsolve.grid.codes import CENTRE, FIRST_LOG_WIDTH, STEP
from specsolve.grid.inversion import invert_curves, values_on_curves
from specsolve.grid.line_spline import continued, line_spline
from specsolve.grid.stencil import cell_of, hermite_basis, spline_slopes
from specsolve.grid.store import ResponseGrid

AT_EDGE = 1
"""Flag: the cell touches an end of an axis, a slope is one-sided there."""
BESIDE_MISSING = 2
"""Flag: a node next to the cell is missing, a slope may be one-sided there."""
OUTSIDE_TABLE = 4
"""Flag: the abundance leaves the dA axis; nan."""
MISSING_WIDTHS = 8
"""Flag: the cell, or the line in it, has missing nodes; nan."""

FLAG_WORDS = {
    AT_EDGE: "at_grid_edge",
    BESIDE_MISSING: "beside_missing_node",
    OUTSIDE_TABLE: "abundance_outside_table",
    MISSING_WIDTHS: "missing_node",
}

TABLE_AXES = 3  # node axes of the compiled table; a grid with others takes the plain path


@dataclass(frozen=True, kw_only=True, eq=False)
class LineAbundances:
    """Abundances that reproduce given widths.

    Attributes
    ----------
    abundance : ndarray, shape (n_lines,)
        A(Fe) = log10(N_Fe/N_H) + 12; nan where flagged 4 or 8.
    d_theta : ndarray, shape (n_lines, n_theta)
        Derivatives at fixed width with respect to teff [K], logg, mh, vmic [km/s]; nan along an axis of one node.
    d_width : ndarray, shape (n_lines,)
        dA / d log10(W/lambda) at fixed theta.
    flags : ndarray of uint8, shape (n_lines,)
    """

    abundance: np.ndarray
    d_theta: np.ndarray
    d_width: np.ndarray
    flags: np.ndarray


class Interpolator:
    """Responses of some lines of a grid, for one treatment.

    Parameters
    ----------
    grid : ResponseGrid
    treatment : str
    line_indices : array-like of int, optional
        Positions in ``grid.lines``; all lines by default.
    compiled : bool
        Use the compiled kernels, for bulk work: this loads numba, which takes a second or two. The results agree with
        the plain path to 1e-9.

    Examples
    --------
    >>> solver = Interpolator(grid, "lte", grid.locate(star_keys))              # doctest: +SKIP
    >>> solver.abundances((5772.0, 4.44, 0.0, 1.0), log_widths).abundance.mean() # doctest: +SKIP
    7.46
    """

    def __init__(self, grid: ResponseGrid, treatment: str = "lte", line_indices=None, compiled: bool = False):
        self.grid = grid
        self.treatment = treatment
        self.line_indices = (
            np.arange(len(grid.lines)) if line_indices is None else np.atleast_1d(np.asarray(line_indices, int))
        )
        if np.any((self.line_indices < 0) | (self.line_indices >= len(grid.lines))):
            raise InputError(f"line indices must lie in 0 .. {len(grid.lines) - 1}")
        self.node_positions = tuple(axis.values for axis in grid.node_axes)
        self.vmic, self.dA = (axis.values for axis in grid.line_axes)
        self.names = (*(axis.name for axis in grid.node_axes), grid.line_axes[0].name)
        self.mh_axis = self.names.index("mh")
        self.stencils = grid.stencils(treatment)
        self.vmic_spline = line_spline(tuple(self.vmic), even=True)
        self.dA_spline = line_spline(tuple(self.dA))
        self.dA_slopes = slopes_of(tuple(self.dA))
        self._cell: tuple[int, ...] | None = None
        self._numbers: np.ndarray | None = None
        self._of_node: dict[tuple[int, ...], tuple[np.ndarray, np.ndarray, np.ndarray]] = {}
        self._range = np.empty(0, int), np.empty(0, int)
        self._cell_flags = 0
        self._latest: tuple[tuple[float, ...], tuple[np.ndarray, np.ndarray]] | None = None
        self._kernels = self._table = None
        if compiled and len(self.node_positions) == TABLE_AXES:
            from specsolve.grid import kernels
            from specsolve.grid.node_table import node_table

            self._kernels, self._table = kernels, node_table(grid, treatment)
            self._table.prepare(self.line_indices)

    def abundances(self, theta, log_reduced_widths) -> LineAbundances:
        """Abundance of each line from its width.

        Parameters
        ----------
        theta : sequence of 4 floats
            teff [K], logg, mh, vmic [km/s].
        log_reduced_widths : ndarray, shape (n_lines,)
            log10(W/lambda).

        Raises
        ------
        OutOfGridError
            If theta lies outside the axes.
        """
        widths = np.asarray(log_reduced_widths, dtype=np.float64)
        n_lines = self.line_indices.size
        if not self._enter(theta):
            blank = np.full(n_lines, np.nan)
            flags = np.full(n_lines, self._cell_flags | MISSING_WIDTHS, dtype=np.uint8)
            return LineAbundances(
                abundance=blank, d_theta=np.full((n_lines, len(self.names)), np.nan), d_width=blank.copy(), flags=flags
            )
        if self._kernels is None:
            dA, d_theta, d_width, flags = invert_curves(
                *self._contract(theta), self.dA, self.dA_slopes, widths, *self._range
            )
        else:
            dA, d_theta, d_width, flags = self._kernels.offsets_at(*self._where(theta), widths)
        d_theta[:, self.mh_axis] += 1.0
        for axis in self._flat_axes():
            d_theta[:, axis] = np.nan
        return LineAbundances(
            abundance=SOLAR_IRON + float(theta[self.mh_axis]) + dA,
            d_theta=d_theta,
            d_width=d_width,
            flags=flags | np.uint8(self._cell_flags),
        )

    def curves(self, theta) -> tuple[np.ndarray, np.ndarray]:
        """Curves of growth at theta.

        Returns
        -------
        log_reduced_widths : ndarray, shape (n_lines, n_dA)
            nan where missing.
        derivatives : ndarray, shape (4, n_lines, n_dA)
            With respect to theta at fixed dA; nan along an axis of one node.
        """
        if not self._enter(theta):
            shape = (self.line_indices.size, self.dA.size)
            return np.full(shape, np.nan), np.full((len(self.names), *shape), np.nan)
        if self._kernels is None:
            curves, derivatives = (array.copy() for array in self._contract(theta))
            node = np.arange(self.dA.size)
            first, end = (limit[:, None] for limit in self._range)
            absent = (node < first) | (node >= end)
            curves[absent] = np.nan
            derivatives[:, absent] = np.nan
        else:
            curves, derivatives = self._kernels.curves_at(*self._where(theta))
        for axis in self._flat_axes():
            derivatives[axis] = np.nan
        return curves, derivatives

    def widths(self, theta, abundance) -> np.ndarray:
        """log10(W/lambda) that abundances predict; nan where the abundance leaves the table or nodes are missing.

        Parameters
        ----------
        theta : sequence of 4 floats
        abundance : float or ndarray, shape (n_lines,)
            A(Fe).
        """
        dA = np.broadcast_to(
            np.asarray(abundance, float) - SOLAR_IRON - float(theta[self.mh_axis]), self.line_indices.shape
        )
        if not self._enter(theta):
            return np.full(self.line_indices.size, np.nan)
        if self._kernels is not None:
            return self._kernels.widths_at(*self._where(theta), np.ascontiguousarray(dA))
        return values_on_curves(self._contract(theta)[0], self.dA, self.dA_slopes, dA, *self._range)

    def flags(self, theta) -> int:
        """Flags of the cell that holds theta (bits 1, 2 and 8)."""
        return self._cell_flags if self._enter(theta) else self._cell_flags | MISSING_WIDTHS

    def _flat_axes(self) -> list[int]:
        return [i for i, x in enumerate((*self.node_positions, self.vmic)) if x.size == 1]

    def _locate(self, theta) -> tuple[int, ...]:
        positions = (*self.node_positions, self.vmic)
        if len(theta) != len(positions):
            raise InputError(f"theta must hold {', '.join(self.names)}, got {len(theta)} numbers")
        choices = []
        for name, x, value in zip(self.names, positions, theta, strict=True):
            if not x[0] <= value <= x[-1]:  # nan fails too
                raise OutOfGridError(name, float(value), float(x[0]), float(x[-1]))
            lower = cell_of(x, value)
            choices.append((lower, lower - 1) if value == x[lower] and lower > 0 else (lower,))
        first = tuple(choice[0] for choice in choices)
        if self.stencils.cell_valid(first[:-1]) or max(len(choice) for choice in choices[:-1]) == 1:
            return first
        # theta lies on a face: the cell on the other side may be whole
        for cell in np.stack(np.meshgrid(*choices[:-1], indexing="ij"), -1).reshape(-1, len(choices) - 1):
            if self.stencils.cell_valid(tuple(cell)):
                return (*map(int, cell), first[-1])
        return first

    def _enter(self, theta) -> bool:
        """Make the numbers of the cell that holds theta the current ones; False if the cell has a missing corner."""
        cell = self._locate(theta)
        if cell == self._cell:
            return self._numbers is not None
        node_cell, vmic_cell = cell[:-1], cell[-1]
        self._cell, self._numbers, self._cell_flags, self._latest = cell, None, 0, None
        vmic_edge = self.vmic.size > 1 and (vmic_cell == self.vmic.size - 2 or (vmic_cell == 0 and self.vmic[0] != 0.0))
        if self.stencils.at_edge(node_cell) or vmic_edge:
            self._cell_flags |= AT_EDGE
        if self.stencils.beside_missing(node_cell):
            self._cell_flags |= BESIDE_MISSING
        if not self.stencils.cell_valid(node_cell):
            return False
        if self._kernels is None:
            self._numbers = self._cell_numbers(node_cell)
        else:
            self._numbers = np.empty(0)  # the shared table holds them
        return True

    def _where(self, theta) -> tuple:
        """First arguments of the kernels."""
        return self._table.arrays, np.asarray(theta, dtype=np.float64), np.array(self._cell), self.line_indices

    def _cell_numbers(self, cell: tuple[int, ...]) -> np.ndarray:
        """Hermite numbers of a cell in units of a code, shape (n_numbers, n_lines, n_vmic, n_dA).

        Numbers ordered as the outer product over axes of (value lo, value hi, slope lo, slope hi); coefficients of the
        splines along vmic and dA. The range of dA that counts is where no node of the cell lacks a width.
        """
        active = self.stencils.active
        kinds = self.stencils.kinds
        numbers = []
        for choice in product(range(4), repeat=len(active)):
            node = list(cell)
            for axis, kind in zip(active, choice, strict=True):
                node[axis] += kind % 2
            slopes = tuple(axis for axis, kind in zip(active, choice, strict=True) if kind >= 2)
            numbers.append(self._node_numbers(tuple(node))[0][kinds.index(slopes)])
        corners = [self._node_numbers(corner) for corner in self.stencils.corners(cell)]
        first = np.max([corner[1] for corner in corners], axis=0)
        self._range = first, np.maximum(np.min([corner[2] for corner in corners], axis=0), first)
        return np.stack(numbers).astype(np.float64)

    def _node_numbers(self, node: tuple[int, ...]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Value and slopes of a node, shape (2 ** n_active, n_lines, n_vmic, n_dA), and the range of dA (n_lines,)."""
        if node not in self._of_node:
            nodes, matrix = self.stencils.node_map(node)
            codes, first, end = continued(self.grid.gather(self.treatment, tuple(nodes.T), self.line_indices), self.dA)
            at_nodes = (matrix @ (codes.reshape(len(nodes), -1) - CENTRE)).reshape(len(matrix), *codes.shape[1:])
            along_dA = at_nodes @ self.dA_spline.coefficients.T
            numbers = np.einsum("jv,klva->klja", self.vmic_spline.coefficients, along_dA).astype(np.float32)
            self._of_node[node] = numbers, first.max(axis=0), end.min(axis=0)
        return self._of_node[node]

    def _axis_basis(self, x: np.ndarray, cell: int, value: float) -> tuple[np.ndarray, np.ndarray]:
        if x.size == 1:
            return np.ones(1), np.zeros(1)
        h = x[cell + 1] - x[cell]
        return hermite_basis((value - x[cell]) / h, h)

    def _basis(self, theta) -> tuple[np.ndarray, np.ndarray]:
        """Weights of the node numbers: for the value (n_numbers,), for the derivatives (n_node_axes, n_numbers)."""
        pairs = [self._axis_basis(x, c, v) for x, c, v in zip(self.node_positions, self._cell, theta, strict=False)]
        products = []
        for derived in range(-1, len(pairs)):
            total = np.ones(1)
            for axis, (value, slope) in enumerate(pairs):
                total = np.outer(total, slope if axis == derived else value).ravel()
            products.append(total)
        return products[0], np.array(products[1:])

    def _contract(self, theta) -> tuple[np.ndarray, np.ndarray]:
        """Curves and derivatives in the current cell; those of the latest theta are kept, for widths after abundances."""
        here = tuple(map(float, theta))
        if self._latest is None or self._latest[0] != here:
            self._latest = here, self._contracted(theta)
        return self._latest[1]

    def _contracted(self, theta) -> tuple[np.ndarray, np.ndarray]:
        value, slopes = self._basis(theta)
        vmic_value, vmic_slope = self.vmic_spline.weights(self._cell[-1], theta[-1])
        weights = np.concatenate(
            [
                np.outer(value, vmic_value).reshape(1, -1),
                (slopes[:, :, None] * vmic_value).reshape(len(slopes), -1),
                np.outer(value, vmic_slope).reshape(1, -1),
            ]
        )
        shape = self._numbers.shape
        numbers = np.swapaxes(self._numbers, 1, 2).reshape(shape[0] * shape[2], -1)
        coefficients = (weights @ numbers).reshape(-1, shape[1], shape[3])
        curves = coefficients @ self.dA_spline.basis.T * STEP
        curves[0] += FIRST_LOG_WIDTH + CENTRE * STEP
        return curves[0], curves[1:]


@lru_cache
def slopes_of(dA: tuple[float, ...]) -> np.ndarray:
    """Slope matrix of the dA axis; see `specsolve.grid.stencil.spline_slopes`."""
    return spline_slopes(np.array(dA))
