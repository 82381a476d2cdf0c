"""Weights that a few blended or misread lines cannot turn, and the line-to-line term.

Only losses with a monotone influence are offered: a redescending one makes minima of its own.
"""

from __future__ import annotations

import math

import numpy as np

HUBER_K = 1.345  # 95 % efficiency for normal errors; Huber 1981, Robust Statistics (from memory)
STUDENT_NU = 4.0  # degrees of freedom of the Student t weights (common practice, no source)
MAX_LINE_TO_LINE_DEX = 1.0  # search limit of s; a star with more scatter than this is not a solution
MAX_SCALE_STEPS = 100
START_SCATTER = np.array([0.03, 0.03])  # dex; where the search for s begins
SCALE_TOLERANCE = 1e-12  # relative, of s^2
FEW_FE2_LINES = 10  # below this number of lines the second ion shares the line-to-line term


def huber_weights(standardized: np.ndarray, k: float = HUBER_K) -> np.ndarray:
    """Weights ``min(1, k/|z|)`` of Huber's loss; nan gives 0.

    Examples
    --------
    >>> huber_weights(np.array([0.5, -2.69, np.nan]))
    array([1. , 0.5, 0. ])
    """
    size = np.abs(standardized)
    weights = np.minimum(1.0, k / np.maximum(size, k))
    return np.where(np.isfinite(size), weights, 0.0)


def student_weights(standardized: np.ndarray, nu: float = STUDENT_NU) -> np.ndarray:
    """Weights ``(nu + 1)/(nu + z^2)`` of a Student t likelihood; nan gives 0."""
    weights = (nu + 1.0) / (nu + standardized**2)
    return np.where(np.isfinite(standardized), weights, 0.0)


def robust_weights(standardized: np.ndarray, loss: str) -> np.ndarray:
    """Weights for the named loss: "huber", "student" or "none"."""
    if loss == "huber":
        return huber_weights(standardized)
    if loss == "student":
        return student_weights(standardized)
    if loss == "none":
        return np.where(np.isfinite(standardized), 1.0, 0.0)
    raise ValueError(f"loss = {loss!r} is not one of 'huber', 'student', 'none'")


def huber_consistency(k: float = HUBER_K) -> float:
    """E[min(z^2, k^2)] for a standard normal z (Huber's second proposal)."""
    density = math.exp(-0.5 * k * k) / math.sqrt(2.0 * math.pi)
    upper = 0.5 * math.erfc(k / math.sqrt(2.0))
    return (1.0 - 2.0 * upper) - 2.0 * k * density + 2.0 * k * k * upper


def line_to_line_term(deviation: np.ndarray, variances: np.ndarray, n_parameters: int, guess: float = 0.03) -> float:
    """The term s [dex] that the known errors lack, from the deviations of lines about plane or mean.

    Solves ``sum min(z_i^2, k^2) = (n - p) E[min(z^2, k^2)]`` with ``z_i^2 = deviation_i^2 / (variance_i + s^2)``:
    Huber's second proposal for a scale, so that blended lines do not set it.

    Parameters
    ----------
    deviation : ndarray, shape (n_lines,)
        [dex]; nan entries are left out.
    variances : ndarray, shape (n_lines,)
        Known variances [dex^2].
    n_parameters : int
        Parameters of the fitted plane and means.
    guess : float
        Where the search begins [dex]; changes the speed alone.

    Returns
    -------
    s : float
        [dex]; 0 where the known errors suffice; nan when no degree of freedom is left.
    """
    known = np.isfinite(deviation) & np.isfinite(variances)
    squares, variance = deviation[known] ** 2, variances[known]
    freedom = squares.size - n_parameters
    if freedom < 1:
        return float("nan")
    target = freedom * huber_consistency()
    limit = HUBER_K**2

    low, high = 0.0, MAX_LINE_TO_LINE_DEX**2
    if _excess(squares, variance, low)[0] <= target:
        return 0.0
    if _excess(squares, variance, high)[0] > target:
        return MAX_LINE_TO_LINE_DEX
    # Newton steps in s^2 kept inside the bracket; the sum falls monotonically.
    value = max(guess * guess, float(np.mean(np.minimum(squares, limit * variance))) * 1e-2)
    for _ in range(MAX_SCALE_STEPS):
        total, slope = _excess(squares, variance, value)
        low, high = (value, high) if total > target else (low, value)
        trial = value - (total - target) / slope if slope < 0.0 else low
        if not low < trial < high:
            trial = 0.5 * (low + high)
        moved, value = abs(trial - value), trial
        if moved <= SCALE_TOLERANCE * value:
            break
    return math.sqrt(value)


def _excess(squares: np.ndarray, variance: np.ndarray, s_squared: float) -> tuple[float, float]:
    """``sum min(z^2, k^2)`` and its derivative with respect to s^2."""
    total = variance + s_squared
    z_squared = squares / total
    core = z_squared < HUBER_K**2
    inner = z_squared[core]
    return float(inner.sum()) + HUBER_K**2 * (core.size - inner.size), -float((inner / total[core]).sum())


def line_to_line_terms(
    is_fe2: np.ndarray,
    deviation: np.ndarray,
    variances: np.ndarray,
    used: np.ndarray,
    guess: np.ndarray = START_SCATTER,
) -> np.ndarray:
    """s [dex] of each ion, shape (2,); pooled over the ions when the second has fewer than `FEW_FE2_LINES` lines."""
    first, second = used & ~is_fe2, used & is_fe2
    n_first, n_second = int(first.sum()), int(second.sum())
    n_plane = 3 if n_first > 3 else 1
    if n_second >= FEW_FE2_LINES and n_first >= FEW_FE2_LINES:
        terms = (
            line_to_line_term(deviation[first], variances[first], n_plane, guess[0]),
            line_to_line_term(deviation[second], variances[second], 1, guess[1]),
        )
    else:
        n_parameters = (n_plane if n_first else 0) + (1 if n_second else 0)
        pooled = line_to_line_term(deviation[used], variances[used], n_parameters, guess[0])
        terms = (pooled, pooled)
    return np.array([0.0 if math.isnan(term) else term for term in terms])
