"""Coarse look at the whole grid: residual vectors at every node, and the starting points that they suggest.

At the nodes nothing is interpolated but the curve of growth (straight lines along dA); lines whose abundance leaves
the table are
continued with the last slope. This is only for starting points: a candidate never rests on a continued abundance.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.grid.coarse_inverse import coarse_inverse, coarse_offsets

from .problem import GRID_AXES, Problem
from .residuals import balance_operator, residual_covariance
from .solution import PARAMETER_NAMES
from .strength import line_variances

SCAN_SCATTER_DEX = 0.08  # line-to-line term of the scan's weights; only scales chi2 there
SCAN_D_WIDTH = 1.5  # dA/dlogW of the scan's weights: between a weak (1) and a saturated line (about 3)
CURVATURE_MARGIN = 0.25  # least share of a residual's range over a cell by which it may miss zero at the corners
LANDING_MARGIN = 1.0  # in cells: how far outside a cell the linear prediction may land
MERGE_CELLS = 0.5  # predictions closer than this in every axis are one starting point


@dataclass(frozen=True, eq=False)
class Scan:
    """Residuals at the nodes.

    Attributes
    ----------
    positions : tuple of ndarray
        Node values of each axis, a fixed axis holding the fixed value alone.
    residuals : ndarray, shape (n_teff, n_logg, n_mh, n_vmic, 4)
        nan at missing nodes.
    metric : ndarray, shape (n_active, n_active)
        C^-1 of the active residuals.
    active : ndarray of int
        Residuals that take part.
    """

    positions: tuple[np.ndarray, ...]
    residuals: np.ndarray
    metric: np.ndarray
    active: np.ndarray

    @property
    def n_nodes(self) -> int:
        """Nodes looked at."""
        return int(np.isfinite(self.residuals[..., self.active]).all(axis=-1).sum())


@dataclass(frozen=True, eq=False)
class Seed:
    """A starting point: theta, the chi2 that the scan expects there, and how many cells or nodes proposed it."""

    theta: np.ndarray
    chi2: float
    count: int


def node_residuals(problem: Problem, chosen: np.ndarray, operator: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Residual vectors at every node with widths, with a given operator.

    Parameters
    ----------
    chosen : ndarray of int
        Lines that take part.
    operator : ndarray, shape (4, n_chosen)

    Returns
    -------
    nodes : ndarray of int, shape (n_nodes, 3)
    residuals : ndarray, shape (n_nodes, n_vmic, 4)
    """
    grid, inputs = problem.grid, problem.inputs
    nodes = _nodes_needed(problem)
    lines, widths = problem.line_indices[chosen], inputs.log_reduced_width[chosen]
    mh = np.asarray(grid.axes["mh"], float)[nodes[:, 2]]
    constant = SOLAR_IRON - inputs.zero_point[chosen] - problem.log_gf_shift[chosen]
    if problem.compiled:
        sums = coarse_inverse(grid, problem.treatment).combine(lines, widths, operator)
        residuals = np.moveaxis(sums[:, np.ravel_multi_index(tuple(nodes.T), grid.node_shape)], 0, -1)
    else:
        codes = grid.gather(problem.treatment, tuple(nodes.T), lines)
        offsets = coarse_offsets(codes, widths, np.asarray(grid.axes["dA"], float))
        residuals = np.einsum("nlv,rl->nvr", offsets, operator)
    residuals = residuals + operator @ constant + operator.sum(axis=1) * mh[:, None, None]
    residuals[..., 2] -= mh[:, None]
    return nodes, residuals


def _nodes_needed(problem: Problem) -> np.ndarray:
    """Valid nodes; along a fixed axis only those around the fixed value."""
    grid = problem.grid
    valid = np.array(grid.node_valid(problem.treatment))
    for axis, name in enumerate(PARAMETER_NAMES[:3]):
        if name in problem.fixed:
            x = np.asarray(grid.axes[GRID_AXES[axis]], float)
            keep = np.zeros(x.size, dtype=bool)
            keep[list(_around(x, problem.fixed[name])[0])] = True
            shape = [1, 1, 1]
            shape[axis] = -1
            valid &= keep.reshape(shape)
    return np.argwhere(valid)


def _around(x: np.ndarray, value: float) -> tuple[tuple[int, ...], tuple[float, ...]]:
    """Indices of the nodes around a value and their linear weights."""
    if x.size == 1:
        return (0,), (1.0,)
    lower = int(np.clip(np.searchsorted(x, value, side="right") - 1, 0, x.size - 2))
    share = float((value - x[lower]) / (x[lower + 1] - x[lower]))
    if share == 0.0:
        return (lower,), (1.0,)
    if share == 1.0:
        return (lower + 1,), (1.0,)
    return (lower, lower + 1), (1.0 - share, share)


def scan_nodes(problem: Problem, allowed: np.ndarray) -> Scan:
    """Residual vectors at all nodes, with fixed weights and the measured width as strength axis."""
    inputs, grid = problem.inputs, problem.grid
    chosen = np.flatnonzero(allowed)
    ones = np.ones(chosen.size)
    variances = line_variances(
        SCAN_D_WIDTH * ones, inputs.sigma_logw[chosen], inputs.sigma_gf[chosen], SCAN_SCATTER_DEX * ones
    ).total
    operator = balance_operator(
        inputs.is_fe2[chosen],
        inputs.excitation_potential[chosen],
        inputs.log_reduced_width[chosen],
        1.0 / variances,
        metallicity_from_fe1="logg" in problem.fixed,
    )
    active = np.flatnonzero(problem.active & np.isfinite(operator).all(axis=1))
    vmic = np.asarray(grid.axes["vmic"], float)
    nodes, values = node_residuals(problem, chosen, operator)
    full = np.full((*grid.node_shape, vmic.size, 4), np.nan)
    full[tuple(nodes.T)] = values
    positions = [np.asarray(grid.axes[name], float) for name in GRID_AXES]
    for axis, name in enumerate(PARAMETER_NAMES):
        if name in problem.fixed:
            indices, shares = _around(positions[axis], problem.fixed[name])
            full = sum(share * np.take(full, [index], axis=axis) for index, share in zip(indices, shares, strict=True))
            positions[axis] = np.array([problem.fixed[name]])
    covariance = residual_covariance(operator, variances)[np.ix_(active, active)]
    return Scan(tuple(positions), full, np.linalg.inv(covariance), active)


@dataclass(frozen=True, eq=False)
class Starts:
    """Starting points, best first, and what the scan says of the grid; see `certificate.Certificate`."""

    seeds: tuple[Seed, ...]
    n_blank: int
    n_cells: int
    n_partial: int
    n_kept: int
    n_landed: int
    n_lattice: int


def starts_from_scan(problem: Problem, scan: Scan) -> Starts:
    """Starting points: cells in which all residuals can vanish, and local minima of chi2 over the nodes."""
    landed, n_kept, n_cells, n_partial = _cells_with_roots(scan)
    lattice = _lattice_minima(problem, scan)
    step = np.array([np.median(np.diff(x)) if x.size > 1 else 1.0 for x in scan.positions])
    merged: list[Seed] = []
    places = np.empty((len(landed) + len(lattice), 4))
    for seed in sorted(landed + lattice, key=lambda s: (s.chi2, *s.theta.tolist())):
        near = (np.abs(places[: len(merged)] - seed.theta) < MERGE_CELLS * step).all(axis=1)
        if near.any():
            i = int(np.argmax(near))
            merged[i] = Seed(merged[i].theta, merged[i].chi2, merged[i].count + seed.count)
        else:
            places[len(merged)] = seed.theta
            merged.append(seed)
    return Starts(
        seeds=tuple(merged),
        n_blank=int(np.prod(scan.residuals.shape[:-1])) - scan.n_nodes,
        n_cells=n_cells,
        n_partial=n_partial,
        n_kept=n_kept,
        n_landed=len(landed),
        n_lattice=len(lattice),
    )


def seeds_from_scan(problem: Problem, scan: Scan) -> list[Seed]:
    """The starting points of `starts_from_scan`, best first."""
    return list(starts_from_scan(problem, scan).seeds)


def _cells_with_roots(scan: Scan) -> tuple[list[Seed], int, int, int]:
    """Gauss-Newton steps of kept cells that land near; cells kept, whole cells and cells with some corners."""
    values = scan.residuals[..., scan.active]
    axes = [axis for axis in range(4) if values.shape[axis] > 1]
    whole = some = np.isfinite(values).all(axis=-1)
    for axis in axes:
        first, last = _halves(axis)
        whole, some = whole[first[:-1]] & whole[last[:-1]], some[first[:-1]] | some[last[:-1]]
    n_cells, n_partial = int(whole.sum()), int((some & ~whole).sum())
    if len(scan.active) != len(axes) or not axes:
        return [], 0, n_cells, n_partial
    low, high = values, values
    for axis in axes:
        first, last = _halves(axis)
        low = np.fmin(low[first], low[last])
        high = np.fmax(high[first], high[last])
    margin = np.fmax(CURVATURE_MARGIN * (high - low), _curvature(values, axes))
    possible = ((low - margin <= 0.0) & (high + margin >= 0.0)).all(axis=-1)
    cells = np.argwhere(possible)
    return _linear_roots(scan, values, cells, axes), len(cells), n_cells, n_partial


def _curvature(values: np.ndarray, axes: list[int]) -> np.ndarray:
    """How far residuals may leave the linear interpolation inside each cell: second differences / 8, summed over axes.

    The larger one of the nodes at both ends of the cell counts, over all corners; nothing where there is none.
    """
    total = 0.0
    for axis in axes:
        bend = np.zeros(values.shape)
        if values.shape[axis] > 2:
            inner = [slice(None)] * values.ndim
            inner[axis] = slice(1, -1)
            second = np.abs(np.diff(values, n=2, axis=axis))
            bend[tuple(inner)] = np.where(np.isfinite(second), second, 0.0)
        for along in axes:
            first, last = _halves(along)
            bend = np.maximum(bend[first], bend[last])
        total = total + bend / 8.0
    return total


def _halves(axis: int) -> tuple[tuple, tuple]:
    first, last = [slice(None)] * 5, [slice(None)] * 5
    first[axis], last[axis] = slice(None, -1), slice(1, None)
    return tuple(first), tuple(last)


def _linear_roots(scan: Scan, values: np.ndarray, cells: np.ndarray, axes: list[int]) -> list[Seed]:
    """Roots of the linear fits through the corners of cells that land near enough."""
    corners = np.array(list(product((0, 1), repeat=len(axes))))
    index = np.repeat(cells[:, None, :], len(corners), axis=1)
    index[:, :, axes] += corners
    rows = values[tuple(np.moveaxis(index, -1, 0))]  # (cell, corner, residual)
    known = np.isfinite(rows).all(axis=-1)
    design = np.column_stack([np.ones(len(corners)), corners - 0.5])
    whole = known.all(axis=1)
    fits = np.full((len(cells), len(axes) + 1, rows.shape[-1]), np.nan)
    fits[whole] = np.linalg.pinv(design) @ rows[whole]
    for k in np.flatnonzero(~whole & (known.sum(axis=1) > len(axes))):
        fits[k] = np.linalg.lstsq(design[known[k]], rows[k][known[k]], rcond=None)[0]
    keep = np.isfinite(fits).all(axis=(1, 2))
    cells, fits = cells[keep], fits[keep]
    inverse = np.linalg.pinv(np.swapaxes(fits[:, 1:], 1, 2), rcond=1e-8)
    steps = -np.einsum("kar,kr->ka", inverse, fits[:, 0])
    near = np.max(np.abs(steps), axis=1, initial=0.0) <= 0.5 + LANDING_MARGIN
    cells, fits, steps = cells[near], fits[near], np.clip(steps[near], -0.5, 0.5)
    theta = np.stack([x[i] for x, i in zip(scan.positions, cells.T, strict=True)], axis=1).astype(float)
    for place, axis in enumerate(axes):
        x = scan.positions[axis]
        low, high = x[cells[:, axis]], x[cells[:, axis] + 1]
        theta[:, axis] = low + (0.5 + steps[:, place]) * (high - low)
    miss = fits[:, 0] + np.einsum("ka,kar->kr", steps, fits[:, 1:])
    chi2 = np.einsum("ki,ij,kj->k", miss, scan.metric, miss)
    return [Seed(t, float(c), 1) for t, c in zip(theta, chi2, strict=True)]


def _lattice_minima(problem: Problem, scan: Scan) -> list[Seed]:
    values = scan.residuals[..., scan.active]
    chi2 = np.einsum("...i,ij,...j->...", values, scan.metric, values)
    points = np.stack(np.meshgrid(*scan.positions, indexing="ij"), -1)
    if problem.outside:
        for index in np.argwhere(np.isfinite(chi2)):
            terms, _ = problem.outside_terms(points[tuple(index)])
            chi2[tuple(index)] += terms @ terms
    filled = np.where(np.isfinite(chi2), chi2, np.inf)
    lowest = filled  # of all neighbours, axis by axis
    for axis in range(4):
        ends = [(1, 1) if k == axis else (0, 0) for k in range(4)]
        padded = np.pad(lowest, ends, constant_values=np.inf)
        lowest = np.minimum(padded.take(range(2, padded.shape[axis]), axis=axis), lowest)
        lowest = np.minimum(padded.take(range(padded.shape[axis] - 2), axis=axis), lowest)
    least = filled <= lowest
    least &= np.isfinite(filled)
    return [Seed(points[tuple(index)].astype(float), float(filled[tuple(index)]), 1) for index in np.argwhere(least)]
