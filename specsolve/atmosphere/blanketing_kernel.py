"""Compiled evaluation of the blanketing tables; `blanketing.line_opacity_reference` is the plain statement of it."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def evaluate(spline, cell_t, cell_p, weights_t, weights_p, weights_v, log_taper, factors):
    """Opacity, shape (n_bands * n_sub, n), from spline coefficients (n_t + 2, n_p + 2, n_v, n_bands * n_sub)."""
    n = len(cell_t)
    n_v, n_k = spline.shape[2], spline.shape[3]
    opacity = np.empty((n_k, n))
    row = np.empty(n_k)
    for point in range(n):
        row[:] = log_taper[point]
        for i in range(4):
            for j in range(4):
                for v in range(n_v):
                    weight = weights_t[i, point] * weights_p[j, point] * weights_v[v]
                    if weight != 0.0:
                        coefficients = spline[cell_t[point] + i, cell_p[point] + j, v]
                        for k in range(n_k):
                            row[k] += weight * coefficients[k]
        for k in range(n_k):
            opacity[k, point] = factors[k] * np.exp(row[k] * 2.302585092994046)
    return opacity
