"""Density of the measured widths, which ranks the candidates.

    -2 ln L = sum_i [ (A_i - mu)^2 / v_i + ln v_i - 2 ln |dA_i / dlnW_i| ] + const

with mu the common abundance. The last term is the Jacobian from abundances to widths: without it, corners of
parameter space
where the widths hardly depend on the abundance would win.
"""

from __future__ import annotations

import numpy as np

LN10 = float(np.log(10.0))


def minus_two_log_density(
    relative_abundance: np.ndarray,
    variances: np.ndarray,
    d_abundance_d_width: np.ndarray,
    groups: np.ndarray,
) -> float:
    """-2 ln L of the measured widths, up to the constant n ln 2 pi.

    Parameters
    ----------
    relative_abundance : ndarray, shape (n_lines,)
        A_i minus zero point [dex].
    variances : ndarray, shape (n_lines,)
        v_i [dex^2]; a robustly down-weighted line enters with v_i / w_i.
    d_abundance_d_width : ndarray, shape (n_lines,)
        dA/dlog10(W).
    groups : ndarray of int, shape (n_lines,)
        Lines of one group share a common abundance mu: all zero when both ions must agree, 0 and 1 where the
        gravity is fixed.

    Returns
    -------
    value : float
        nan if any line has no abundance.
    """
    total = 0.0
    for group in np.unique(groups):
        members = groups == group
        y, weight = relative_abundance[members], 1.0 / variances[members]
        mu = float(weight @ y / weight.sum())
        total += float(weight @ (y - mu) ** 2)
    total += float(np.log(variances).sum())
    total -= 2.0 * float(np.log(np.abs(d_abundance_d_width) / LN10).sum())
    return total
