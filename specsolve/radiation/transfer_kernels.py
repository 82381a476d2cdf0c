"""Fast transfer: variable Eddington factors, and the response of the flux to temperature.

The tridiagonal systems are eliminated in the form of Rybicki & Hummer (1991, A&A 245, 171, appendix A), which keeps
its precision when the optical steps are as small as 1e-8. Tested against `transfer.solve_reference`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from specsolve.radiation.transfer import ANGLE_COSINES, ANGLE_WEIGHTS

MAX_EDDINGTON_PASSES = 60
EDDINGTON_TOLERANCE = 1e-9


@njit(cache=True, nogil=True)
def _eliminate(lower, diagonal_extra, upper, right, ratio, value, out):
    """Solve -lower x[d-1] + (extra + lower + upper) x[d] - upper x[d+1] = right without cancellation."""
    n = right.shape[0]
    ratio[0] = diagonal_extra[0] / upper[0]
    value[0] = right[0] / (upper[0] * (1.0 + ratio[0]))
    for d in range(1, n - 1):
        carried = diagonal_extra[d] + lower[d] * ratio[d - 1] / (1.0 + ratio[d - 1])
        ratio[d] = carried / upper[d]
        value[d] = (right[d] + lower[d] * value[d - 1]) / (upper[d] + carried)
    d = n - 1
    carried = diagonal_extra[d] + lower[d] * ratio[d - 1] / (1.0 + ratio[d - 1])
    out[d] = (right[d] + lower[d] * value[d - 1]) / carried
    for d in range(n - 2, -1, -1):
        out[d] = value[d] + out[d + 1] / (1.0 + ratio[d])


@njit(cache=True, nogil=True)
def radiation_field(
    steps, tops, destruction, thermal, cosines, weights, eddington, mean, flux, surface, edges,
    tolerance=EDDINGTON_TOLERANCE,
):  # fmt: skip
    """Radiation field of all channels.

    Parameters
    ----------
    steps : ndarray, shape (n_k, n - 1)
    tops : ndarray, shape (n_k,)
    destruction, thermal : ndarray, shape (n_k, n)
    cosines, weights : ndarray, shape (n_angles,)
    eddington : ndarray, shape (n_k, n)
        f = K / J: on entry a first guess, on return the solution.
    mean : ndarray, shape (n_k, n)
        Returned J.
    flux : ndarray, shape (n_k, n - 1)
        Returned H between the points.
    surface : ndarray, shape (n_k,)
        Returned H at the first point.
    edges : ndarray, shape (n_k, 2)
        Returned boundary factors H_0 / J_0 and (sum w mu u) / J at the bottom; on entry a first guess.
    tolerance : float
        On the change of the Eddington factors.

    Returns
    -------
    int
        Number of channels whose Eddington factors did not settle.
    """
    n_k, n = thermal.shape
    n_mu = cosines.shape[0]
    lower = np.zeros(n)
    upper = np.zeros(n)
    extra = np.empty(n)
    right = np.empty(n)
    width = np.empty(n)
    ratio = np.empty(n)
    value = np.empty(n)
    u = np.empty(n)
    y = np.empty(n)
    source = np.empty(n)
    total = np.empty(n)
    second = np.empty(n)
    unsettled = 0
    for k in range(n_k):
        p = steps[k]
        eps = destruction[k]
        b = thermal[k]
        width[0] = 0.5 * p[0]
        width[n - 1] = 0.5 * p[n - 2]
        for d in range(1, n - 1):
            width[d] = 0.5 * (p[d] + p[d - 1])
        gradient = (b[n - 1] - b[n - 2]) / p[n - 2]
        settled = False
        for _ in range(MAX_EDDINGTON_PASSES):
            # moment equation for y = f J
            for d in range(n):
                lower[d] = 1.0 / p[d - 1] if d > 0 else 0.0
                upper[d] = 1.0 / p[d] if d < n - 1 else 0.0
                extra[d] = width[d] * eps[d] / eddington[k, d]
                right[d] = width[d] * eps[d] * b[d]
            extra[0] += edges[k, 0] / eddington[k, 0]
            extra[n - 1] += edges[k, 1] / eddington[k, n - 1]
            right[n - 1] += 0.5 * b[n - 1] + gradient / 3.0
            _eliminate(lower, extra, upper, right, ratio, value, y)
            for d in range(n):
                mean[k, d] = y[d] / eddington[k, d]
                source[d] = eps[d] * b[d] + (1.0 - eps[d]) * mean[k, d]
                total[d] = 0.0
                second[d] = 0.0
            # formal solution angle by angle
            top_flux = 0.0
            bottom = 0.0
            for i in range(n_mu):
                mu = cosines[i]
                incoming = (1.0 - np.exp(-tops[k] / mu)) * source[0]
                for d in range(n):
                    lower[d] = mu * mu / p[d - 1] if d > 0 else 0.0
                    upper[d] = mu * mu / p[d] if d < n - 1 else 0.0
                    extra[d] = width[d]
                    right[d] = width[d] * source[d]
                extra[0] += mu
                right[0] += mu * incoming
                extra[n - 1] += mu
                right[n - 1] += mu * (b[n - 1] + mu * gradient)
                _eliminate(lower, extra, upper, right, ratio, value, u)
                for d in range(n):
                    total[d] += weights[i] * u[d]
                    second[d] += weights[i] * mu * mu * u[d]
                top_flux += weights[i] * mu * (u[0] - incoming)
                bottom += weights[i] * mu * u[n - 1]
            change = 0.0
            for d in range(n):
                factor = second[d] / total[d]
                change = max(change, abs(factor - eddington[k, d]))
                eddington[k, d] = factor
            change = max(change, abs(top_flux / total[0] - edges[k, 0]))
            edges[k, 0] = top_flux / total[0]
            edges[k, 1] = bottom / total[n - 1]
            for d in range(n):
                mean[k, d] = total[d]
            surface[k] = top_flux
            if change < tolerance:
                settled = True
                break
        if not settled:
            unsettled += 1
        for d in range(n - 1):
            flux[k, d] = (second[d + 1] - second[d]) / p[d]
    return unsettled


@njit(cache=True, nogil=True)
def flux_response(
    column_mass,
    steps,
    destruction,
    thermal,
    opacity_slope,
    destruction_slope,
    thermal_slope,
    eddington,
    mean,
    flux,
    edges,
):
    """Derivatives of the flux and of the net absorption with respect to temperature, all channels summed.

    Parameters
    ----------
    column_mass : ndarray, shape (n,)
    steps, flux : ndarray, shape (n_k, n - 1)
    destruction, thermal, eddington, mean : ndarray, shape (n_k, n)
    opacity_slope, destruction_slope, thermal_slope : ndarray, shape (n_k, n)
        Derivatives with respect to the local temperature variable (at fixed gas pressure).
    edges : ndarray, shape (n_k, 2)

    Returns
    -------
    d_flux : ndarray, shape (n - 1, n)
        d H[between d and d+1] / d T[j].
    d_net : ndarray, shape (n, n)
        d (width eps (J - B))[d] / d T[j].

    Notes
    -----
    Eddington and boundary factors are held fixed: a Newton iteration that renews them converges to the same solution.
    """
    n_k, n = thermal.shape
    d_flux = np.zeros((n - 1, n))
    d_net = np.zeros((n, n))
    lower = np.empty(n)
    upper = np.empty(n)
    extra = np.empty(n)
    ratio = np.empty(n)
    pivot = np.empty(n)
    width = np.empty(n)
    right = np.empty(n)
    y = np.empty(n)
    half = np.empty(n - 1)
    for d in range(n - 1):
        half[d] = 0.5 * (column_mass[d + 1] - column_mass[d])
    for k in range(n_k):
        p = steps[k]
        eps = destruction[k]
        b = thermal[k]
        f = eddington[k]
        width[0] = 0.5 * p[0]
        width[n - 1] = 0.5 * p[n - 2]
        for d in range(1, n - 1):
            width[d] = 0.5 * (p[d] + p[d - 1])
        for d in range(n):
            lower[d] = 1.0 / p[d - 1] if d > 0 else 0.0
            upper[d] = 1.0 / p[d] if d < n - 1 else 0.0
            extra[d] = width[d] * eps[d] / f[d]
        extra[0] += edges[k, 0] / f[0]
        extra[n - 1] += edges[k, 1] / f[n - 1]
        ratio[0] = extra[0] / upper[0]
        pivot[0] = upper[0] + extra[0]
        for d in range(1, n):
            carried = extra[d] + lower[d] * ratio[d - 1] / (1.0 + ratio[d - 1])
            if d < n - 1:
                ratio[d] = carried / upper[d]
            pivot[d] = upper[d] + carried
        for j in range(n):
            first = max(j - 1, 0)
            last = min(j + 1, n - 1)
            slope_left = half[j - 1] * opacity_slope[k, j] if j > 0 else 0.0  # d p[j-1] / dT_j
            slope_right = half[j] * opacity_slope[k, j] if j < n - 1 else 0.0  # d p[j] / dT_j
            for d in range(first, n):
                right[d] = 0.0
            # source terms of rows j-1, j, j+1 from changed steps: M y = right
            if j > 0:
                part = flux[k, j - 1] / p[j - 1] * slope_left
                right[j - 1] -= part + 0.5 * slope_left * eps[j - 1] * (mean[k, j - 1] - b[j - 1])
                right[j] += part - 0.5 * slope_left * eps[j] * (mean[k, j] - b[j])
            if j < n - 1:
                part = flux[k, j] / p[j] * slope_right
                right[j] -= part + 0.5 * slope_right * eps[j] * (mean[k, j] - b[j])
                right[j + 1] += part - 0.5 * slope_right * eps[j + 1] * (mean[k, j + 1] - b[j + 1])
            right[j] -= width[j] * (destruction_slope[k, j] * (mean[k, j] - b[j]) - eps[j] * thermal_slope[k, j])
            if j == n - 1:
                right[n - 1] += thermal_slope[k, j] * (0.5 + 1.0 / (3.0 * p[n - 2]))
                right[n - 1] -= (b[n - 1] - b[n - 2]) / (3.0 * p[n - 2] ** 2) * slope_left
            elif j == n - 2:
                right[n - 1] -= thermal_slope[k, j] / (3.0 * p[n - 2])
                right[n - 1] -= (b[n - 1] - b[n - 2]) / (3.0 * p[n - 2] ** 2) * slope_right
            for d in range(first, n):
                carry = lower[d] * y[d - 1] if d > first else 0.0
                y[d] = (right[d] + carry) / pivot[d]
            for d in range(n - 2, -1, -1):
                own = y[d] if d >= first else 0.0
                y[d] = own + y[d + 1] / (1.0 + ratio[d])
            for d in range(n - 1):
                d_flux[d, j] += (y[d + 1] - y[d]) / p[d]
            for d in range(n):
                d_net[d, j] += width[d] * eps[d] * y[d] / f[d]
            if j > 0:
                d_flux[j - 1, j] -= flux[k, j - 1] / p[j - 1] * slope_left
            if j < n - 1:
                d_flux[j, j] -= flux[k, j] / p[j] * slope_right
            d_net[j, j] += width[j] * (destruction_slope[k, j] * (mean[k, j] - b[j]) - eps[j] * thermal_slope[k, j])
            for d in range(first, last + 1):
                change = 0.0  # of p[d - 1] + p[d]
                if d <= j:
                    change += slope_left
                if d >= j:
                    change += slope_right
                d_net[d, j] += 0.5 * change * eps[d] * (mean[k, d] - b[d])
    return d_flux, d_net


def solve_channels(
    opacity: np.ndarray,
    destruction: np.ndarray,
    thermal: np.ndarray,
    column_mass: np.ndarray,
    eddington: np.ndarray | None = None,
    edges: np.ndarray | None = None,
) -> dict[str, np.ndarray]:
    """Radiation field of all channels from opacities.

    Parameters
    ----------
    opacity, destruction, thermal : ndarray, shape (n_k, n)
        Total opacity [cm2 / g], absorbed fraction, Planck function.
    column_mass : ndarray, shape (n,)
        [g / cm2].
    eddington, edges : ndarray, optional
        Factors of an earlier call, as a first guess.

    Returns
    -------
    dict
        `steps` (n_k, n-1), `mean` (n_k, n), `flux` (n_k, n-1), `surface` (n_k,), `eddington` (n_k, n), `edges`
        (n_k, 2), `unsettled` (count).
    """
    n_k, n = thermal.shape
    steps = 0.5 * (opacity[:, 1:] + opacity[:, :-1]) * np.diff(column_mass)
    tops = 0.5 * opacity[:, 0] * column_mass[0]
    eddington = np.full((n_k, n), 1.0 / 3.0) if eddington is None else eddington.copy()
    edges = np.full((n_k, 2), 0.5) if edges is None else edges.copy()
    mean = np.empty((n_k, n))
    flux = np.empty((n_k, n - 1))
    surface = np.empty(n_k)
    unsettled = radiation_field(
        steps, tops, destruction, thermal, ANGLE_COSINES, ANGLE_WEIGHTS, eddington, mean, flux, surface, edges
    )
    return {
        "steps": steps,
        "mean": mean,
        "flux": flux,
        "surface": surface,
        "eddington": eddington,
        "edges": edges,
        "unsettled": unsettled,
    }
