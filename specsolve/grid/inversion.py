"""From a width to an abundance on curves of growth, and back: the cubic along the dA axis.

A curve is given at the nodes of dA, and a cubic spline between them. Widths missing at an end of the axis shorten the
range in which it counts; what the spline does beyond never becomes a result.
"""

from __future__ import annotations

import numpy as np

OUTSIDE = 4
"""Flag of `invert_curves`: the width lies beyond the ends of the curve."""
MISSING = 8
"""Flag of `invert_curves`: the curve has fewer than two neighbouring nodes, or the width is nan."""

ITERATIONS = 60
"""Upper bound of the steps inside one interval; bisection alone reaches 1e-16 in 54."""

CONVERGED = 1e-14
"""Step, in units of the interval, at which the search ends."""


def cubic(t, h):
    """The four Hermite basis values, derivatives with respect to t; see `specsolve.grid.stencil.hermite_basis`."""
    value = (1 + 2 * t) * (1 - t) ** 2, t * t * (3 - 2 * t), h * t * (1 - t) ** 2, -h * t * t * (1 - t)
    slope = -6 * t * (1 - t), 6 * t * (1 - t), h * (1 - t) * (1 - 3 * t), h * t * (3 * t - 2)
    return value, slope


def invert_curves(curves, derivatives, dA, slopes, widths, first=None, end=None):
    """Abundance offset at which each curve reaches a width.

    Parameters
    ----------
    curves : ndarray, shape (n_curves, n_dA)
        log10(W/lambda) at the nodes of dA, rising.
    derivatives : ndarray, shape (n_theta, n_curves, n_dA)
        Derivatives of the curves with respect to theta.
    dA : ndarray, shape (n_dA,)
    slopes : ndarray, shape (n_dA, n_dA)
        Slope matrix of the axis, see `stencil.spline_slopes`.
    widths : ndarray, shape (n_curves,)
        log10(W/lambda).
    first, end : ndarray of int, shape (n_curves,), optional
        Half-open range of the nodes that count; all by default.

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
    first = np.zeros(n_curves, dtype=np.int64) if first is None else first
    end = np.full(n_curves, dA.size) if end is None else end
    at_nodes = curves @ slopes.T
    flags = np.zeros(n_curves, dtype=np.uint8)
    flags[(end - first < 2) | ~np.isfinite(widths)] = MISSING
    start = np.minimum(first, dA.size - 1)
    last = np.maximum(end - 1, 0)
    inside = (flags == 0) & (curves[rows, start] <= widths) & (widths <= curves[rows, last])
    flags[(flags == 0) & ~inside] = OUTSIDE
    # interval: the last node of the range whose value does not exceed the width
    node = np.arange(dA.size)
    below = (node >= first[:, None]) & (node < last[:, None]) & (curves <= widths[:, None])
    lower = np.where(inside, dA.size - 1 - np.argmax(below[:, ::-1], axis=1), 0)
    upper = np.minimum(lower + 1, dA.size - 1)
    h = np.where(inside, dA[upper] - dA[lower], 1.0)
    v0, v1, m0, m1 = curves[rows, lower], curves[rows, upper], at_nodes[rows, lower], at_nodes[rows, upper]
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
        s = y @ slopes.T
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


def values_on_curves(curves, dA, slopes, offsets, first=None, end=None) -> np.ndarray:
    """log10(W/lambda) of curves at abundance offsets, shape (n_curves,); nan outside the range that counts."""
    n_curves = curves.shape[0]
    rows = np.arange(n_curves)
    first = np.zeros(n_curves, dtype=np.int64) if first is None else first
    end = np.full(n_curves, dA.size) if end is None else end
    at_nodes = curves @ slopes.T
    last = np.maximum(end - 1, 0)
    inside = (end - first >= 2) & (dA[np.minimum(first, dA.size - 1)] <= offsets) & (offsets <= dA[last])
    lower = np.clip(np.searchsorted(dA, offsets, side="right") - 1, 0, max(dA.size - 2, 0))
    upper = np.minimum(lower + 1, dA.size - 1)
    h = np.where(upper > lower, dA[upper] - dA[lower], 1.0)
    value, _ = cubic((offsets - dA[lower]) / h, h)
    total = (
        value[0] * curves[rows, lower]
        + value[1] * curves[rows, upper]
        + value[2] * at_nodes[rows, lower]
        + value[3] * at_nodes[rows, upper]
    )
    return np.where(inside, total, np.nan)
