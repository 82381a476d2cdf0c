"""Compiled parts of `coarse_inverse`; importing this loads numba."""

from __future__ import annotations

import numpy as np
from numba import njit

from specsolve.grid.codes import MISSING

CHUNK = 512  # elements whose sums stay in the fast cache


@njit(cache=True, nogil=True)
def invert_row(row, target, dA, least_slope):
    """One curve of `coarse_inverse.invert_linear`."""
    n = row.size
    first, count, below = n, 0, 0
    for a in range(n):
        if row[a] != MISSING:
            if first == n:
                first = a
            count += 1
            below += row[a] <= target
    if count < 2:
        return np.nan
    upper = min(max(first + below, first + 1), first + count - 1)
    if row[upper - 1] == MISSING or row[upper] == MISSING:
        return np.nan
    low, high = float(row[upper - 1]), float(row[upper])
    slope = max((high - low) / (dA[upper] - dA[upper - 1]), least_slope)
    return dA[upper - 1] + (target - low) / slope


@njit(cache=True, nogil=True)
def fill(codes, valid, lines, lower, level_codes, dA, least_slope, offsets, filled):
    """Make the offsets of lines at their two levels where they are not there yet.

    `codes` (n_valid, n_lines, n_vmic, n_dA) are those of the lines at the flat nodes `valid`.
    """
    n_vmic = codes.shape[2]
    for i in range(lines.size):
        line = lines[i]
        for level in range(lower[i], lower[i] + 2):
            if filled[line, level]:
                continue
            out = offsets[line, level]
            out[:] = np.nan
            for k in range(valid.size):
                node = valid[k]
                for j in range(n_vmic):
                    out[node * n_vmic + j] = invert_row(codes[k, i, j], level * level_codes, dA, least_slope)
            filled[line, level] = True


@njit(cache=True, nogil=True)
def combine(offsets, lines, lower, share, operator):
    """Sums over lines of operator times offset, shape (n_rows, n_points)."""
    n_rows, n_points = operator.shape[0], offsets.shape[2]
    total = np.zeros((n_rows, n_points))
    y = np.empty(CHUNK)
    for start in range(0, n_points, CHUNK):
        size = min(CHUNK, n_points - start)
        for i in range(lines.size):
            first = offsets[lines[i], lower[i], start : start + size]
            second = offsets[lines[i], lower[i] + 1, start : start + size]
            for k in range(size):
                y[k] = first[k] * (1.0 - share[i]) + second[k] * share[i]
            for row in range(n_rows):
                weight = operator[row, i]
                if weight != 0.0:
                    out = total[row, start : start + size]
                    for k in range(size):
                        out[k] += weight * y[k]
    return total
