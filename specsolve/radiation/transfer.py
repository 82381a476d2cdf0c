"""Transfer in plane-parallel layers with thermal and scattering opacity: the plain reference.

The second-order equation of Feautrier for u = (I+ + I-) / 2 on three Gauss angles,

    mu^2 d2u/dtau2 = u - S,      S = eps B + (1 - eps) J,      J = sum_i w_i u_i,

with second-order boundary conditions (Auer 1967, ApJ 150, L53; Mihalas 1978, Stellar Atmospheres, ch. 6).
Summed over angles the same difference equations are those of the moments, with K = f J, so that the solution with
variable Eddington factors f is exactly the angle-by-angle one. `transfer_kernels` holds the fast version.
"""

from __future__ import annotations

import numpy as np

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(3)
ANGLE_COSINES = 0.5 * (_NODES + 1.0)  # mu on (0, 1)
ANGLE_WEIGHTS = 0.5 * _WEIGHTS  # sum to 1


def optical_steps(opacity: np.ndarray, column_mass: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Optical thickness of the intervals between depth points, and of what lies above the first.

    Parameters
    ----------
    opacity : ndarray, shape (..., n)
        Total opacity [cm2 / g].
    column_mass : ndarray, shape (n,)
        [g / cm2], increasing.

    Returns
    -------
    steps : ndarray, shape (..., n - 1)
        Trapezoidal in column mass.
    top : ndarray, shape (...)
        Half the product of opacity and column mass at the first point: opacity falls in proportion to pressure above it.
    """
    steps = 0.5 * (opacity[..., 1:] + opacity[..., :-1]) * np.diff(column_mass)
    return steps, 0.5 * opacity[..., 0] * column_mass[0]


def solve_reference(
    steps: np.ndarray, top: float, destruction: np.ndarray, thermal: np.ndarray
) -> tuple[np.ndarray, np.ndarray, float]:
    """Mean intensity and flux of one frequency by one dense linear solve.

    Parameters
    ----------
    steps : ndarray, shape (n - 1,)
        Optical thickness of each interval.
    top : float
        Optical depth of the first point.
    destruction : ndarray, shape (n,)
        eps, absorption over total opacity.
    thermal : ndarray, shape (n,)
        Planck function B (any unit).

    Returns
    -------
    mean_intensity : ndarray, shape (n,)
    eddington_flux : ndarray, shape (n - 1,)
        H between the points.
    surface_flux : float
        H at the first point.
    """
    n, n_angles = len(thermal), len(ANGLE_COSINES)
    matrix = np.zeros((n * n_angles, n * n_angles))
    right = np.zeros(n * n_angles)
    width = np.concatenate([[0.5 * steps[0]], 0.5 * (steps[1:] + steps[:-1]), [0.5 * steps[-1]]])
    shade = -np.expm1(-top / ANGLE_COSINES)  # I- at the first point is shade * S
    for d in range(n):
        for i, mu in enumerate(ANGLE_COSINES):
            row = d * n_angles + i
            source = {row: width[d]}
            if d > 0:
                source[row] += mu**2 / steps[d - 1]
                source[row - n_angles] = -(mu**2) / steps[d - 1]
            if d < n - 1:
                source[row] += mu**2 / steps[d]
                source[row + n_angles] = -(mu**2) / steps[d]
            share = width[d] + (mu * shade[i] if d == 0 else 0.0)
            if d in (0, n - 1):
                source[row] += mu
            for column, value in source.items():
                matrix[row, column] += value
            columns = slice(d * n_angles, (d + 1) * n_angles)
            matrix[row, columns] -= share * (1.0 - destruction[d]) * ANGLE_WEIGHTS
            right[row] += share * destruction[d] * thermal[d]
            if d == n - 1:
                right[row] += mu * (thermal[-1] + mu * (thermal[-1] - thermal[-2]) / steps[-1])
    u = np.linalg.solve(matrix, right).reshape(n, n_angles)
    mean = u @ ANGLE_WEIGHTS
    second = u @ (ANGLE_WEIGHTS * ANGLE_COSINES**2)
    source_top = destruction[0] * thermal[0] + (1.0 - destruction[0]) * mean[0]
    surface = float(np.sum(ANGLE_WEIGHTS * ANGLE_COSINES * (u[0] - shade * source_top)))
    return mean, np.diff(second) / steps, surface


def emergent_intensity(
    opacity: np.ndarray, source: np.ndarray, column_mass: np.ndarray, cosines: np.ndarray
) -> np.ndarray:
    """Emergent specific intensity by direct integration of the source function.

    Parameters
    ----------
    opacity, source : ndarray, shape (n_w, n)
        Total opacity [cm2 / g] and source function.
    column_mass : ndarray, shape (n,)
        [g / cm2].
    cosines : ndarray, shape (n_mu,)
        Cosine of the angle to the normal.

    Returns
    -------
    ndarray, shape (n_w, n_mu)
        In the unit of `source`.

    Notes
    -----
    The source is linear in optical depth within each interval, constant above the first point, and continued with
    its last gradient below the last.
    """
    steps, top = optical_steps(opacity, column_mass)
    depth = np.concatenate([top[:, None], top[:, None] + np.cumsum(steps, axis=1)], axis=1)
    result = np.empty((opacity.shape[0], len(cosines)))
    for i, mu in enumerate(cosines):
        slab = steps / mu
        trans = np.exp(-depth / mu)
        slope = np.diff(source, axis=1) / slab
        inner = trans[:, :-1] * (source[:, :-1] + slope) - trans[:, 1:] * (source[:, 1:] + slope)
        result[:, i] = (
            inner.sum(axis=1) + source[:, 0] * (1.0 - trans[:, 0]) + trans[:, -1] * (source[:, -1] + slope[:, -1])
        )
    return result
