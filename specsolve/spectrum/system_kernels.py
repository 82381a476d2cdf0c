"""Compiled parts of the simultaneous fit: columns of the model's derivatives, and the banded normal matrix.

A column is the derivative of the relative depth by one parameter; it covers a run of neighbouring pixels only. Columns
are kept one after another in a flat array.
"""

from __future__ import annotations

import numpy as np
from numba import njit

LIGHT_SPEED_KM_S = 299792.458
LEAST_TRANSMISSION = 0.02  # of one line; lines end near 0.05


@njit(cache=True, nogil=True)
def runs_of_lines(
    wavelength, order, line_order, centre, width, row, shapes, step, least_depth, least_reach, start, stop
):
    """Pixels that each line touches: where its depth may exceed `least_depth`, at least `least_reach` km/s.

    Parameters
    ----------
    wavelength, order : ndarray, shape (n_pixels,)
        Sorted by order, then wavelength.
    line_order, centre, width, row : ndarray, shape (n_lines,)
        Order, wavelength, W c / lambda [km/s], row of the shape.
    shapes : ndarray, shape (n_rows, n)
    start, stop : ndarray of int, shape (n_lines,)
        Returned.
    """
    n = shapes.shape[1]
    for j in range(centre.size):
        reach = 0
        while reach < n - 1 and abs(width[j]) * shapes[row[j], reach] > least_depth:
            reach = min(reach + 2 + reach // 8, n - 1)
        fraction = max(reach * step, least_reach) / LIGHT_SPEED_KM_S
        low = np.searchsorted(order, line_order[j])
        high = np.searchsorted(order, line_order[j], side="right")
        start[j] = low + np.searchsorted(wavelength[low:high], centre[j] * (1.0 - fraction))
        stop[j] = low + np.searchsorted(wavelength[low:high], centre[j] * (1.0 + fraction))


@njit(cache=True, nogil=True)
def transmit(wavelength, start, stop, centre, width, shift, stretch, row, share, shapes, step, transmission):
    """Multiply `transmission`, shape (n_pixels,), by 1 - depth of every line."""
    n = shapes.shape[1]
    for j in range(centre.size):
        scale = 1.0 / (stretch[j] * step)
        for p in range(start[j], stop[j]):
            x = abs((wavelength[p] / centre[j] - 1.0) * LIGHT_SPEED_KM_S - shift[j]) * scale
            i = int(x)
            if i < n - 1:
                t = x - i
                a = (1.0 - t) * shapes[row[j], i] + t * shapes[row[j], i + 1]
                b = (1.0 - t) * shapes[row[j] + 1, i] + t * shapes[row[j] + 1, i + 1]
                depth = width[j] / stretch[j] * ((1.0 - share[j]) * a + share[j] * b)
                transmission[p] *= max(1.0 - depth, LEAST_TRANSMISSION)


@njit(cache=True, nogil=True)
def columns_of_lines(
    wavelength,
    start,
    stop,
    centre,
    width,
    shift,
    stretch,
    row,
    share,
    shapes,
    step,
    transmission,
    kind,
    column,
    offset,
    values,
):
    """Derivatives of the depth of all lines together by the parameters of each.

    Parameters
    ----------
    kind : ndarray of int, shape (n_lines,)
        0: no parameter; 1: ln W; 2: W [km/s], shift [km/s], ln stretch, step along its shapes.
    column : ndarray of int, shape (n_lines,)
        The line's first column.
    offset : ndarray of int, shape (n_columns,)
        Where each column starts in `values`.
    values : ndarray
        Returned.
    """
    n = shapes.shape[1]
    for j in range(centre.size):
        if kind[j] == 0:
            continue
        scale = 1.0 / (stretch[j] * step)
        for p in range(start[j], stop[j]):
            v = (wavelength[p] / centre[j] - 1.0) * LIGHT_SPEED_KM_S - shift[j]
            x = abs(v) * scale
            i = int(x)
            phi, slope, change = 0.0, 0.0, 0.0
            if i < n - 1:
                t = x - i
                f = share[j]
                left = (1.0 - f) * shapes[row[j], i] + f * shapes[row[j] + 1, i]
                right = (1.0 - f) * shapes[row[j], i + 1] + f * shapes[row[j] + 1, i + 1]
                phi = ((1.0 - t) * left + t * right) / stretch[j]
                change = (1.0 - t) * (shapes[row[j] + 1, i] - shapes[row[j], i])
                change = (change + t * (shapes[row[j] + 1, i + 1] - shapes[row[j], i + 1])) / stretch[j]
                slope = (right - left) * scale / stretch[j]
                if v < 0.0:
                    slope = -slope
            rest = transmission[p] / max(1.0 - width[j] * phi, LEAST_TRANSMISSION)  # of the other lines
            c = column[j]
            k = p - start[j]
            if kind[j] == 1:
                values[offset[c] + k] = rest * width[j] * phi
            else:
                values[offset[c] + k] = rest * phi
                values[offset[c + 1] + k] = -rest * width[j] * slope
                values[offset[c + 2] + k] = -rest * width[j] * (phi + v * slope)
                values[offset[c + 3] + k] = rest * width[j] * change


@njit(cache=True, nogil=True)
def bandwidth(first, last):
    """Largest distance of two columns that share pixels, for columns that cover [first, last)."""
    n = first.size
    earliest = np.empty(n + 1, np.int64)  # of all columns from here on
    earliest[n] = 2**62
    for i in range(n - 1, -1, -1):
        earliest[i] = min(earliest[i + 1], first[i])
    widest = 0
    for i in range(n):
        j = i + widest + 1
        while j < n and earliest[j] < last[i]:
            if first[j] < last[i] and first[i] < last[j]:
                widest = j - i
            j += 1
    return widest


@njit(cache=True, nogil=True)
def normal_matrix(first, last, offset, values, weight, residual, band, right):
    """Lower band of sum over pixels of weight a_i a_j, and sum of weight a_i residual.

    Parameters
    ----------
    first, last, offset : ndarray of int, shape (n_columns,)
    values : ndarray
    weight, residual : ndarray, shape (n_pixels,)
    band : ndarray, shape (width + 1, n_columns)
        Returned: band[j - i, i] for j >= i.
    right : ndarray, shape (n_columns,)
        Returned.
    """
    n = first.size
    width = band.shape[0] - 1
    longest = 0
    for i in range(n):
        longest = max(longest, last[i] - first[i])
    weighted = np.empty(longest)
    for i in range(n):
        total = 0.0
        for p in range(first[i], last[i]):
            w = weight[p] * values[offset[i] + p - first[i]]
            weighted[p - first[i]] = w
            total += w * residual[p]
        right[i] = total
        for k in range(min(width, n - 1 - i) + 1):
            j = i + k
            low, high = max(first[i], first[j]), min(last[i], last[j])
            total = 0.0
            a, b = -first[i], offset[j] - first[j]
            for p in range(low, high):
                total += weighted[p + a] * values[b + p]
            band[k, i] = total


@njit(cache=True, nogil=True)
def border_matrix(first, last, offset, values, weight, knot, border):
    """Add the sum over pixels of weight a_i to border[i, knot of the pixel]."""
    for i in range(first.size):
        for p in range(first[i], last[i]):
            border[i, knot[p]] += weight[p] * values[offset[i] + p - first[i]]
