"""Radiative flows and the equations of statistical equilibrium.

Unknowns are the departure coefficients b = n / n*. Every process between levels i and j is a pair of flows
[cm^-3 s^-1] per unit b, up U_ij b_i and down D_ij b_j; in equilibrium the sum into every level vanishes. For a line,
U = (4 pi / h nu) (pi e^2 / m c) f n_i* J and D = the same with exp(-h nu/kT) (2 h nu^3 / c^2 + J): equal in a black-body field
whatever the energies of merged levels.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from specsolve.constants import LIGHT_SPEED_CM_S, PLANCK_ERG_S


def spontaneous(wavelength_cm: np.ndarray) -> np.ndarray:
    """2 h nu^3 / c^2 [erg s^-1 cm^-2 sr^-1 Hz^-1]."""
    return 2.0 * PLANCK_ERG_S * LIGHT_SPEED_CM_S / np.asarray(wavelength_cm) ** 3


def fixed_equations(
    collisions: np.ndarray, level: np.ndarray, target: np.ndarray, ionization: np.ndarray, recombination: np.ndarray
) -> np.ndarray:
    """Matrix of what does not change in the iteration.

    Parameters
    ----------
    collisions : ndarray, shape (n, n_levels, n_levels)
        Symmetric flows.
    level, target : ndarray of int, shape (n_continua,)
    ionization, recombination : ndarray, shape (n_continua, n)

    Returns
    -------
    ndarray, shape (n, n_levels, n_levels)
        A with A b = 0: losses on the diagonal, gains off it with a minus sign.
    """
    matrix = -collisions
    diagonal = np.einsum("dii->di", matrix)
    diagonal[:] = collisions.sum(axis=2)
    for k in range(level.size):
        i, j = level[k], target[k]
        matrix[:, i, i] += ionization[k]
        matrix[:, j, i] -= ionization[k]
        matrix[:, j, j] += recombination[k]
        matrix[:, i, j] -= recombination[k]
    return matrix


@njit(cache=True, nogil=True)
def add_lines(matrix, low, up, coefficient, boltzmann, emission, effective, diagonal):
    """Add preconditioned line flows (Rybicki & Hummer 1991, A&A 245, 171, eq. 2.16 in departure coefficients).

    Parameters
    ----------
    matrix : ndarray, shape (n, n_levels, n_levels)
        Changed in place.
    low, up : ndarray of int, shape (m,)
    coefficient, boltzmann : ndarray, shape (m, n)
        (4 pi / h nu) (pi e^2 / m c) f n_low*; exp(-h nu / kT).
    emission : ndarray, shape (m,)
        2 h nu^3 / c^2.
    effective, diagonal : ndarray, shape (m, n)
        J - L S and L; with L = 0 and J the plain rates.
    """
    for k in range(low.size):
        i, j = low[k], up[k]
        for d in range(matrix.shape[0]):
            gain = coefficient[k, d] * effective[k, d]
            loss = coefficient[k, d] * boltzmann[k, d] * (emission[k] * (1.0 - diagonal[k, d]) + effective[k, d])
            matrix[d, i, i] += gain
            matrix[d, j, i] -= gain
            matrix[d, j, j] += loss
            matrix[d, i, j] -= loss


def solve_populations(matrix: np.ndarray, lte: np.ndarray) -> np.ndarray:
    """Departure coefficients that satisfy the equations and conserve particles.

    Parameters
    ----------
    matrix : ndarray, shape (n, n_levels, n_levels)
        Changed in place.
    lte : ndarray, shape (n_levels, n)
        [cm^-3]

    Returns
    -------
    ndarray, shape (n_levels, n)
    """
    n = matrix.shape[0]
    scale = np.abs(np.einsum("dii->di", matrix))
    matrix /= scale[:, :, None]
    share = (lte / lte.sum(axis=0)).T
    main = np.argmax(share, axis=1)
    matrix[np.arange(n), main] = share
    right = np.zeros(share.shape)
    right[np.arange(n), main] = 1.0
    return np.linalg.solve(matrix, right[:, :, None])[:, :, 0].T
