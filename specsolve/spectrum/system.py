"""All lines and the continuum of a spectrum in one least-squares system.

Model: F = C times the product of (1 - W phi), with C piecewise straight and phi the broadened shape of each line (a
product, because a weak line in a deep one finds less light to take). Parameters: W,
shift, stretch and wing of every line to measure, ln W of every neighbour that matters, C at its knots. The lines make a banded
matrix, bordered by the continuum:

    | L  B | |x|   |p|
    | B' K | |c| = |q|

A step eliminates the lines. The same elimination gives the covariances: L^-1 is that of the lines for a given
continuum, S^-1 = (K - B' L^-1 B)^-1 that of the continuum, and J = -L^-1 B the response of the lines to the
continuum, so that J S^-1 J' is the part of their covariance that the continuum makes common.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from . import system_kernels as kernels
from .continuum import Knots
from .predict import TABLE_STEP

FIXED, NEIGHBOUR, TARGET = 0, 1, 2


@dataclass(kw_only=True, eq=False)
class Lines:
    """Lines as they enter the fit, one entry a line and order; arrays of shape (n_entries,).

    Attributes
    ----------
    source : ndarray of int
        Place in the prediction; -1 for a line found in the spectrum.
    own : ndarray of int
        Place in the list of lines to measure; -1 for others.
    order : ndarray of int
    centre : ndarray
        [Angstrom], air.
    kind : ndarray of int
        `FIXED`, `NEIGHBOUR` or `TARGET`.
    width, prior_width : ndarray
        W c / lambda [km/s], fitted and predicted.
    prior_error : ndarray
        1-sigma of ln W of a neighbour beforehand.
    shift, stretch : ndarray
        [km/s], factor on the broadened shape's width.
    wing : ndarray
        Steps along the line's shapes away from that of its width: more of the line in its wings.
    row, share : ndarray
        Shape: row below, share of the next row.
    """

    source: np.ndarray
    own: np.ndarray
    order: np.ndarray
    centre: np.ndarray
    kind: np.ndarray
    width: np.ndarray
    prior_width: np.ndarray
    prior_error: np.ndarray
    shift: np.ndarray
    stretch: np.ndarray
    wing: np.ndarray
    row: np.ndarray
    share: np.ndarray

    def __len__(self) -> int:
        return self.centre.size


@dataclass(frozen=True, kw_only=True)
class Priors:
    """1-sigma widths of what is known beforehand.

    Attributes
    ----------
    shift : float
        Of a line to measure [km/s].
    stretch : float
        Of ln of the factor on a line's width.
    wing : float
        Of `Lines.wing`.
    level_change : float
        Of the corrected continuum between knots.
    """

    shift: float
    stretch: float
    wing: float
    level_change: float


LARGEST_REACH = 60  # parameters
FREE_WIDTH = 1e3  # km/s, 1-sigma of W c / lambda of a line to measure: no knowledge
LEAST_DEPTH = 2e-5
"""A line's depth is followed out to this; its parameters' effect out to `LEAST_COLUMN`."""
LEAST_COLUMN = 2e-3


@dataclass(frozen=True, kw_only=True, eq=False)
class System:
    """Normal equations at one state of the fit."""

    band: np.ndarray
    border: np.ndarray
    corner: np.ndarray
    right: np.ndarray
    right_knots: np.ndarray
    column: np.ndarray

    def solve(self) -> tuple[np.ndarray, np.ndarray]:
        """Steps of the line parameters and of the knots, by sparse elimination of the whole."""
        from scipy import sparse
        from scipy.sparse.linalg import splu

        n = self.band.shape[1]
        offsets = np.arange(self.band.shape[0])
        lower = sparse.dia_array((self.band, -offsets), shape=(n, n))
        lines = lower + sparse.triu(lower.T, 1)
        border = sparse.csc_array(self.border)
        whole = sparse.block_array([[lines, border], [border.T, sparse.csc_array(self.corner)]], format="csc")
        factors = splu(whole, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
        step = factors.solve(np.concatenate([self.right, self.right_knots]))
        return step[:n], step[n:]

    def _eliminate(self, right: np.ndarray) -> np.ndarray:
        from scipy.linalg import solveh_banded

        if not right.shape[0]:
            return right
        return solveh_banded(self.band, right, lower=True, check_finite=False)

    def continuum_covariance(self) -> tuple[np.ndarray, np.ndarray]:
        """Covariance of the knots, and response of the line parameters to them."""
        response = self._eliminate(self.border)
        return np.linalg.inv(self.corner - self.border.T @ response), -response

    def line_covariances(self, columns: np.ndarray, size: int) -> np.ndarray:
        """Covariances of blocks of `size` neighbouring line parameters for a given continuum.

        The inverse of a banded matrix falls off with distance: of the matrix two bandwidths to both sides enter.

        Parameters
        ----------
        columns : ndarray of int, shape (n,)
            First parameter of each block.

        Returns
        -------
        ndarray, shape (n, size, size)
        """
        width, n = self.band.shape[0] - 1, self.band.shape[1]
        reach = min(2 * width + size, LARGEST_REACH)
        result = np.empty((columns.size, size, size))
        for k, first in enumerate(columns):
            low, high = max(first - reach, 0), min(first + size + reach, n)
            m = high - low
            block = np.zeros((m, m))
            for d in range(min(width, m - 1) + 1):
                values = self.band[d, low : high - d]
                block[np.arange(d, m), np.arange(m - d)] = values
                block[np.arange(m - d), np.arange(d, m)] = values
            unit = np.zeros((m, size))
            unit[first - low + np.arange(size), np.arange(size)] = 1.0
            result[k] = np.linalg.solve(block, unit)[first - low : first - low + size]
        return result


def runs(wavelength, order, lines: Lines, shapes, least_depth: float, least_reach: float):
    """Pixels of each line, see `system_kernels.runs_of_lines`."""
    start, stop = np.empty(len(lines), np.int64), np.empty(len(lines), np.int64)
    kernels.runs_of_lines(
        wavelength,
        order,
        lines.order,
        lines.centre,
        lines.width,
        lines.row,
        shapes,
        TABLE_STEP,
        least_depth,
        least_reach,
        start,
        stop,
    )
    return start, stop


def depth_of(wavelength, order, lines: Lines, shapes, least_reach: float, which=slice(None)) -> np.ndarray:
    """Depth of some lines together at the pixels, 1 - product of (1 - depth)."""
    some = pick(lines, which)
    start, stop = runs(wavelength, order, some, shapes, LEAST_DEPTH, least_reach)
    transmission = np.ones(wavelength.size)
    kernels.transmit(
        wavelength,
        start,
        stop,
        some.centre,
        some.width,
        some.shift,
        some.stretch,
        some.row,
        some.share,
        shapes,
        TABLE_STEP,
        transmission,
    )
    return 1.0 - transmission


def pick(lines: Lines, which) -> Lines:
    """Some of the lines."""
    return Lines(**{name: values[which] for name, values in vars(lines).items()})


def build(
    wavelength, order, lines: Lines, shapes, knots: Knots, continuum, depth, weight, residual, least_reach
) -> System:
    """Normal equations around the present state.

    Parameters
    ----------
    continuum, depth : ndarray, shape (n_pixels,)
        Present corrected continuum and depth of all lines.
    weight, residual : ndarray, shape (n_pixels,)
        Inverse variances, and data minus model.
    """
    start, stop = runs(wavelength, order, lines, shapes, LEAST_COLUMN, least_reach)
    n_of = np.array([0, 1, 4])[lines.kind]
    column = np.concatenate([[0], np.cumsum(n_of)])
    n = int(column[-1])
    owner = np.repeat(np.arange(len(lines)), n_of)
    first, last = start[owner], stop[owner]
    offset = np.concatenate([[0], np.cumsum(last - first)])
    values = np.zeros(int(offset[-1]))
    kernels.columns_of_lines(
        wavelength,
        start,
        stop,
        lines.centre,
        lines.width,
        lines.shift,
        lines.stretch,
        lines.row,
        lines.share,
        shapes,
        TABLE_STEP,
        1.0 - depth,
        lines.kind,
        column,
        offset,
        values,
    )
    scaled = weight * continuum**2
    band = np.zeros((kernels.bandwidth(first, last) + 1 if n else 1, n))
    right = np.zeros(n)
    kernels.normal_matrix(first, last, offset, values, scaled, -residual / continuum, band, right)
    n_knots = len(knots)
    border = np.zeros((n, n_knots))
    free = 1.0 - depth
    for side, hat in ((0, 1.0 - knots.share), (1, knots.share)):
        kernels.border_matrix(first, last, offset, values, -weight * continuum * free * hat, knots.left + side, border)
    corner = np.zeros((n_knots, n_knots))
    right_knots = np.zeros(n_knots)
    at = knots.left
    hats = (1.0 - knots.share, knots.share)
    for i in (0, 1):
        np.add.at(right_knots, at + i, weight * free * hats[i] * residual)
        for j in (0, 1):
            np.add.at(corner, (at + i, at + j), weight * free**2 * hats[i] * hats[j])
    return System(band=band, border=border, corner=corner, right=right, right_knots=right_knots, column=column)


def add_priors(system: System, lines: Lines, knots: Knots, levels: np.ndarray, priors: Priors) -> None:
    """Add what is known beforehand, in place."""
    column = system.column[:-1]
    neighbour = np.flatnonzero(lines.kind == NEIGHBOUR)
    precision = 1.0 / lines.prior_error[neighbour] ** 2
    system.band[0, column[neighbour]] += precision
    system.right[column[neighbour]] += precision * np.log(lines.prior_width[neighbour] / lines.width[neighbour])
    target = np.flatnonzero(lines.kind == TARGET)
    system.band[0, column[target]] += 1.0 / FREE_WIDTH**2  # a line without usable pixels
    system.band[0, column[target] + 1] += 1.0 / priors.shift**2
    system.right[column[target] + 1] -= lines.shift[target] / priors.shift**2
    system.band[0, column[target] + 2] += 1.0 / priors.stretch**2
    system.right[column[target] + 2] -= np.log(lines.stretch[target]) / priors.stretch**2
    system.band[0, column[target] + 3] += 1.0 / priors.wing**2
    system.right[column[target] + 3] -= lines.wing[target] / priors.wing**2
    same = np.flatnonzero(knots.order[1:] == knots.order[:-1])
    stiff = 1.0 / priors.level_change**2
    difference = levels[same + 1] - levels[same]
    for i, sign in ((same, -1.0), (same + 1, 1.0)):
        np.add.at(system.corner, (i, i), stiff)
        np.add.at(system.right_knots, i, -sign * stiff * difference)
    np.add.at(system.corner, (same, same + 1), -stiff)
    np.add.at(system.corner, (same + 1, same), -stiff)
