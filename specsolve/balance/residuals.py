"""The four residuals of the balance as one linear operator on line abundances.

With weights frozen, the plane through Fe I,

    y = c + b_e (chi - <chi>) + b_s (x - <x>),

and the weighted means are linear in the line abundances y, so that ``r = G y - mh e`` and ``C = G V G^T``.
Everything else in
this room (Newton steps, covariances, the influence of a line) is algebra on G.

Order of the residuals: excitation_slope [dex/eV], ionization_offset [dex], metallicity_offset [dex], strength_slope
[dex/dex], which is
the order of the parameters (teff, logg, feh, vmic) that they fix.
"""

from __future__ import annotations

import numpy as np

EXCITATION, IONIZATION, METALLICITY, STRENGTH = range(4)

# An axis of the plane with less weighted spread than this carries no slope (common practice, no source).
MIN_EXCITATION_SPREAD_EV = 0.05
MIN_STRENGTH_SPREAD_DEX = 0.02


def weighted_mean(values: np.ndarray, weights: np.ndarray) -> float:
    """Weighted mean; nan where no value carries weight.

    Examples
    --------
    >>> weighted_mean(np.array([1.0, 3.0]), np.array([1.0, 1.0]))
    2.0
    """
    total = weights.sum()
    return float(weights @ values / total) if total > 0.0 else float("nan")


def mean_operator(weights: np.ndarray) -> np.ndarray:
    """Row g with ``g @ y`` the weighted mean of y; nan where no line carries weight. Shape (n_lines,)."""
    total = weights.sum()
    if total > 0.0:
        return weights / total
    return np.full(weights.shape, np.nan)


def plane_operator(excitation_potential: np.ndarray, strength: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Operator of the weighted plane through lines of one ion.

    Parameters
    ----------
    excitation_potential : ndarray, shape (n_lines,)
        Lower-level energy [eV].
    strength : ndarray, shape (n_lines,)
        Strength axis [dex].
    weights : ndarray, shape (n_lines,)
        Inverse variances [dex^-2]; zero drops a line.

    Returns
    -------
    operator : ndarray, shape (3, n_lines)
        Rows that applied to abundances give: the weighted mean, the slope against excitation potential at fixed
        strength, the slope
        against strength at fixed excitation potential. A slope whose axis has no spread, or for which fewer than
        three lines carry weight, is nan; the other slope is then that of a line, not of a plane.

    Notes
    -----
    Weighted least squares about the weighted means: ``(X^T W X)^-1 X^T W`` with centred columns.
    """
    operator = np.full((3, len(weights)), np.nan)
    total = weights.sum()
    if not total > 0.0:
        return operator
    normalized = weights / total
    operator[0] = normalized
    if np.count_nonzero(weights) < 3:
        return operator
    columns = np.stack([excitation_potential - normalized @ excitation_potential, strength - normalized @ strength])
    spread = np.sqrt((columns**2) @ normalized)
    usable = np.flatnonzero(spread > np.array([MIN_EXCITATION_SPREAD_EV, MIN_STRENGTH_SPREAD_DEX]))
    if usable.size == 0:
        return operator
    scaled = columns[usable] / spread[usable, None]
    normal = (scaled * normalized) @ scaled.T
    if usable.size == 2 and np.linalg.det(normal) < 1e-6:  # the two axes are the same axis
        return operator
    operator[1 + usable] = np.linalg.solve(normal, scaled * normalized) / spread[usable, None]
    return operator


def balance_operator(
    is_fe2: np.ndarray,
    excitation_potential: np.ndarray,
    strength: np.ndarray,
    weights: np.ndarray,
    metallicity_from_fe1: bool = False,
) -> np.ndarray:
    """Operator G, shape (4, n_lines), of the four residuals.

    Parameters
    ----------
    is_fe2 : ndarray of bool, shape (n_lines,)
        True for the second ion of the pair.
    excitation_potential, strength, weights : ndarray, shape (n_lines,)
        See `plane_operator`.
    metallicity_from_fe1 : bool
        The metallicity from the first ion alone (gravity fixed: the ions need not agree).

    Returns
    -------
    operator : ndarray, shape (4, n_lines)
        Rows that cannot be formed from these lines are nan.
    """
    first, second = ~is_fe2, is_fe2
    operator = np.zeros((4, len(weights)))
    plane = plane_operator(excitation_potential[first], strength[first], weights[first])
    operator[EXCITATION, first] = plane[1]
    operator[STRENGTH, first] = plane[2]
    operator[IONIZATION, first] = plane[0]
    operator[IONIZATION, second] = -mean_operator(weights[second])
    if not weights[second].sum() > 0.0:
        operator[IONIZATION] = np.nan
    if metallicity_from_fe1:
        operator[METALLICITY, first] = plane[0]
    else:
        operator[METALLICITY] = mean_operator(weights)
    for row in range(4):
        if np.isnan(operator[row]).any():
            operator[row] = np.nan
    return operator


def residual_vector(operator: np.ndarray, relative_abundance: np.ndarray, mh: float) -> np.ndarray:
    """``r = G y - mh e_metallicity``, shape (4,); y is abundance minus zero point [dex], nan allowed where G is
    zero.
    """
    y = np.where(np.any(operator != 0.0, axis=0), relative_abundance, 0.0)
    residuals = operator @ y
    residuals[METALLICITY] -= mh
    return residuals


def residual_covariance(operator: np.ndarray, variances: np.ndarray) -> np.ndarray:
    """``C = G V G^T``, shape (4, 4), for independent lines (variances (n,)) or a full V (n, n)."""
    used = np.any(operator != 0.0, axis=0)
    g = np.where(used, operator, 0.0)
    if variances.ndim == 1:
        return (g * np.where(used, variances, 0.0)) @ g.T
    return g @ variances @ g.T


def deviations(
    is_fe2: np.ndarray,
    excitation_potential: np.ndarray,
    strength: np.ndarray,
    weights: np.ndarray,
    relative_abundance: np.ndarray,
) -> np.ndarray:
    """Line abundance minus the fitted plane (first ion) or the mean (second ion), shape (n_lines,) [dex].

    Lines of zero weight get their deviation from the same plane. A slope that cannot be formed is taken as zero.
    """
    out = np.full(len(weights), np.nan)
    for ion in (~is_fe2, is_fe2):
        y, w = relative_abundance[ion], weights[ion]
        if not w.sum() > 0.0:
            continue
        known = np.where(w > 0.0, y, 0.0)
        out[ion] = y - weighted_mean(known, w)
    first = ~is_fe2
    plane = plane_operator(excitation_potential[first], strength[first], weights[first])
    known = np.where(weights[first] > 0.0, relative_abundance[first], 0.0)
    for row, axis in ((1, excitation_potential[first]), (2, strength[first])):
        slope = float(plane[row] @ known)
        if np.isfinite(slope):
            centre = weighted_mean(axis, weights[first])
            out[first] -= slope * (axis - centre)
    return out
