"""From a width to an abundance on curves of growth, and back: the cubic along the dA axis.

A curve is given at the nodes of dA and continued between them by a cubic spline. Widths missing at an end of the axis
shorten the curve; it is never continued beyond its last node.
"""

from __future__ import annotations

import numpy as np

from specsolve.grid.stencil import spline_slopes

OUTSIDE = 4
"""Flag of `invert_curves`: the width lies beyond the ends of the curve."""
MISSING = 8
"""Flag of `invert_curves`: the curve has fewer than two neighbouring nodes, or the width is nan."""

ITERATIONS = 60
"""Upper bound of the steps inside one interval; bisection alone reaches 1e-16 in 54."""

CONVERGED = 1e-14
"""Step, in units of the interval, at which the search ends."""


def dA_slope_matrices(dA: np.ndarray) -> np.ndarray:
    """Slope matrix of every unbroken range of nodes; shape (n, n + 1, n, n), indexed by first node and end of range."""
    n = dA.size
    matrices = np.zeros((n, n + 1, n, n))
    for first in range(n):
        for end in range(first + 2, n + 1):
            matrices[first, end, first:end, first:end] = spline_slopes(dA[first:end])
    return matrices


def valid_ranges(curves: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Longest unbroken range of finite values of each curve (the first of equally long ones).

    Parameters
    ----------
    curves : ndarray, shape (n_curves, n_dA)

    Returns
    -------
    first, end : ndarray of int, shape (n_curves,)
        Half-open; equal where no value is finite.
    """
    finite = np.isfinite(curves)
    n_curves, n = curves.shape
    if finite.all():
        return np.zeros(n_curves, dtype=np.int64), np.full(n_curves, n, dtype=np.int64)
    first = np.zeros(n_curves, dtype=np.int64)
    end = np.zeros(n_curves, dtype=np.int64)
    start = np.zeros(n_curves, dtype=np.int64)
    for node in range(n):
        start = np.where(finite[:, node], start, node + 1)
        longer = finite[:, node] & (node + 1 - start > end - first)
        first = np.where(longer, start, first)
        end = np.where(longer, node + 1, end)
    return first, end


def cubic(t, h):
    """The four Hermite basis values, derivatives with respect to t; see `specsolve.grid.stencil.hermite_basis`."""
    value = (1 + 2 * t) * (1 - t) ** 2, t * t * (3 - 2 * t), h * t * (1 - t) ** 2, -h * t * t * (1 - t)
    slope = -6 * t * (1 - t), 6 * t * (1 - t), h * (1 - t) * (1 - 3 * t), h * t * (3 * t - 2)
    return value, slope


def curve_slopes(curves: np.ndarray, matrices: np.ndarray, first: np.ndarray, end: np.ndarray) -> np.ndarray:
    """Slopes of curves at their nodes, shape of `curves`."""
    n = curves.shape[1]
    whole = (first == 0) & (end == n)
    if whole.all():
        return curves @ matrices[0, n].T
    slopes = np.zeros_like(curves)
    filled = np.where(np.isfinite(curves), curves, 0.0)
    for pair in {(int(f), int(e)) for f, e in zip(first, end, strict=True) if e - f >= 2}:
        rows = (first == pair[0]) & (end == pair[1])
        slopes[rows] = filled[rows] @ matrices[pair].T
    return slopes


def invert_curves(curves, derivatives, dA, matrices, widths):
    """Abundance offset at which each curve reaches a width.

    Parameters
    ----------
    curves : ndarray, shape (n_curves, n_dA)
        log10(W/lambda) at the nodes of dA, rising; nan where missing.
    derivatives : ndarray, shape (n_theta, n_curves, n_dA)
        Derivatives of the curves with respect to theta.
    dA : ndarray, shape (n_dA,)
    matrices : ndarray
        From `dA_slope_matrices`.
    widths : ndarray, shape (n_curves,)
        log10(W/lambda).

    Returns
    -------
    offset : ndarray, shape (n_curves,)
    d_theta : ndarray, shape (n_curves, n_theta)
        Derivatives of the offset at fixed width.
    d_width : ndarray, shape (n_curves,)
    flags : ndarray of uint8, shape (n_curves,)
        0, 4 (outside the curve) or 8 (missing).
    """
    n_curves = curves.shape[0]
    rows = np.arange(n_curves)
    first, end = valid_ranges(curves)
    slopes = curve_slopes(curves, matrices, first, end)
    flags = np.zeros(n_curves, dtype=np.uint8)
    flags[(end - first < 2) | ~np.isfinite(widths)] = MISSING
    last = np.maximum(end - 1, 0)
    inside = (flags == 0) & (curves[rows, first] <= widths) & (widths <= curves[rows, last])
    flags[(flags == 0) & ~inside] = OUTSIDE
    # interval: the last node of the range whose value does not exceed the width
    node = np.arange(dA.size)
    below = (node >= first[:, None]) & (node < last[:, None]) & (curves <= widths[:, None])
    lower = np.where(inside, dA.size - 1 - np.argmax(below[:, ::-1], axis=1), 0)
    upper = np.minimum(lower + 1, dA.size - 1)
    h = np.where(inside, dA[upper] - dA[lower], 1.0)
    v0, v1, m0, m1 = curves[rows, lower], curves[rows, upper], slopes[rows, lower], slopes[rows, upper]
    target = np.where(inside, widths, np.nan)
    with np.errstate(invalid="ignore"):
        t = solve_cubic(v0, v1, m0, m1, h, target)
    value, slope = cubic(t, h)
    d_value = (slope[0] * v0 + slope[1] * v1 + slope[2] * m0 + slope[3] * m1) / h
    d_width = 1.0 / d_value
    n_theta = derivatives.shape[0]
    d_theta = np.empty((n_curves, n_theta))
    for k in range(n_theta):
        y = derivatives[k]
        s = curve_slopes(y, matrices, first, end)
        change = (
            value[0] * y[rows, lower]
            + value[1] * y[rows, upper]
            + value[2] * s[rows, lower]
            + value[3] * s[rows, upper]
        )
        d_theta[:, k] = -change * d_width
    return dA[lower] + t * h, d_theta, d_width, flags


def solve_cubic(v0, v1, m0, m1, h, target):
    """t in 0..1 at which the cubic of each interval equals the target: Newton steps kept inside a shrinking bracket.

    All arguments are arrays of one shape; nan where the target is nan.
    """
    low, high = np.zeros_like(target), np.ones_like(target)
    t = np.clip((target - v0) / np.where(v1 > v0, v1 - v0, 1.0), 0.0, 1.0)
    for _ in range(ITERATIONS):
        value, slope = cubic(t, h)
        error = value[0] * v0 + value[1] * v1 + value[2] * m0 + value[3] * m1 - target
        low, high = np.where(error <= 0, t, low), np.where(error > 0, t, high)
        rise = slope[0] * v0 + slope[1] * v1 + slope[2] * m0 + slope[3] * m1
        trial = t - error / np.where(rise > 0, rise, 1.0)
        step = np.where((rise > 0) & (trial >= low) & (trial <= high), trial, 0.5 * (low + high))
        moved = np.nanmax(np.abs(step - t), initial=0.0)
        t = np.where(np.isnan(target), np.nan, step)
        if moved < CONVERGED:
            break
    return t


def values_on_curves(curves, dA, matrices, offsets) -> np.ndarray:
    """log10(W/lambda) of curves at abundance offsets, shape (n_curves,); nan outside the curve."""
    rows = np.arange(curves.shape[0])
    first, end = valid_ranges(curves)
    slopes = curve_slopes(curves, matrices, first, end)
    last = np.maximum(end - 1, 0)
    inside = (end - first >= 2) & (dA[first] <= offsets) & (offsets <= dA[last])
    lower = np.clip(np.searchsorted(dA, offsets, side="right") - 1, first, np.maximum(last - 1, first))
    upper = np.minimum(lower + 1, dA.size - 1)
    h = np.where(upper > lower, dA[upper] - dA[lower], 1.0)
    value, _ = cubic((offsets - dA[lower]) / h, h)
    total = (
        value[0] * curves[rows, lower]
        + value[1] * curves[rows, upper]
        + value[2] * slopes[rows, lower]
        + value[3] * slopes[rows, upper]
    )
    return np.where(inside, total, np.nan)
