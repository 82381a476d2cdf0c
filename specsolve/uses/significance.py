"""From a chi square to sigma of a normal distribution."""

from __future__ import annotations

import numpy as np

LARGEST_SIGMA = 37.0  # beyond it the probability is below the smallest number of a computer


def in_sigma(chi2: float, freedom: int) -> float:
    """Two-sided sigma of a normal distribution with the same probability.

    Examples
    --------
    >>> round(in_sigma(9.0, 1), 6)
    3.0
    """
    from scipy.stats import chi2 as distribution
    from scipy.stats import norm

    if freedom == 0 or not np.isfinite(chi2):
        return float("nan")
    value = norm.isf(0.5 * distribution.sf(chi2, freedom))
    return float(min(value, LARGEST_SIGMA))


def whole_difference(difference: np.ndarray, covariance: np.ndarray) -> tuple[float, int]:
    """d^T C^-1 d over the entries that are known and not exact, and their number."""
    rows = np.flatnonzero(np.isfinite(difference) & (np.diag(covariance) > 0.0))
    if rows.size == 0 or not np.isfinite(covariance[np.ix_(rows, rows)]).all():
        return float("nan"), 0
    d = difference[rows]
    return float(d @ np.linalg.solve(covariance[np.ix_(rows, rows)], d)), rows.size
