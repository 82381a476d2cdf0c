"""Compiled synthesis; the same equations as `synthesis.relative_flux_reference`.

The innermost loops run over wavelengths, so that the compiler can vectorise them.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from .exponential_integral import N_PIECES, OFFSET, SHIFT
from .kernels import voigt_compiled


@njit(cache=True, nogil=True)
def add_lines(part, wavelength, first, last, centre, reach, element, doppler, strength, damping):
    """Add the opacities of lines to points of one block.

    Parameters
    ----------
    part : ndarray, shape (n, n_points)
        Line opacity at each layer and point, added to [cm2/g].
    wavelength : ndarray, shape (n_points,)
        Increasing; unit as `centre`.
    first, last : int
        Range of lines that may reach the block.
    centre, reach : ndarray, shape (n_lines,)
        Wavelength, and distance as a fraction of it beyond which the line is left out.
    element : ndarray of int, shape (n_lines,)
    doppler : ndarray, shape (n_elements, n)
        Doppler width as a fraction of the wavelength.
    strength, damping : ndarray, shape (n_lines, n)
    """
    n = part.shape[0]
    for i in range(first, last):
        low = np.searchsorted(wavelength, centre[i] * (1.0 - reach[i]))
        high = np.searchsorted(wavelength, centre[i] * (1.0 + reach[i]))
        if low >= high:
            continue
        for d in range(n):
            width = doppler[element[i], d]
            a = damping[i, d] / width
            s = strength[i, d] / width
            scale = 1.0 / (centre[i] * width)
            for p in range(low, high):
                part[d, p] += s * voigt_compiled(a, (wavelength[p] - centre[i]) * scale)


@njit(cache=True, nogil=True)
def flux_of_block(
    part, growth_scale, column_mass, absorption, scattering, planck, inverse_eddington, edges, opacity, layer, e2, flux
):
    """Emergent flux at the points of one block, in LTE.

    Parameters
    ----------
    part : ndarray, shape (n, n_points)
        Line opacity [cm2/g].
    growth_scale, column_mass, absorption, scattering, planck : ndarray, shape (n,)
    inverse_eddington : ndarray, shape (4, n)
    edges : ndarray, shape (4,)
    opacity, layer
        Of `EddingtonFactors`, for this block.
    e2 : ndarray, shape (n_pieces, 3)
    flux : ndarray, shape (n_points,)
        Returned.
    """
    n, m = part.shape
    growth = np.empty((n, m))
    depth = np.empty((n, m))
    bits = depth.view(np.int64)
    steps = np.empty((n, m))
    thermal = np.empty((n, m))
    albedo = np.empty((n, m))
    ratio = np.empty((n, m))
    value = np.empty((n, m))
    inverse_f = np.empty((n, m))
    y = np.empty(m)
    for p in range(m):
        r = part[layer, p] / opacity
        y[p] = r / (1.0 + r)
    for d in range(n):
        c0, c1, c2, c3 = (
            inverse_eddington[0, d],
            inverse_eddington[1, d],
            inverse_eddington[2, d],
            inverse_eddington[3, d],
        )
        for p in range(m):
            c = absorption[d] + scattering[d] + part[d, p]
            inverse = 1.0 / c
            growth[d, p] = c * growth_scale[d]
            albedo[d, p] = scattering[d] * inverse
            thermal[d, p] = (part[d, p] + absorption[d]) * planck[d] * inverse
            inverse_f[d, p] = c0 + y[p] * (c1 + y[p] * (c2 + y[p] * c3))
    for p in range(m):
        depth[0, p] = column_mass[0] * (part[0, p] + 0.5 * (absorption[0] + scattering[0]))
        steps[0, p] = (9.0 * growth[0, p] + 19.0 * growth[1, p] - 5.0 * growth[2, p] + growth[3, p]) / 24.0
        steps[n - 2, p] = (
            9.0 * growth[n - 1, p] + 19.0 * growth[n - 2, p] - 5.0 * growth[n - 3, p] + growth[n - 4, p]
        ) / 24.0
    for d in range(1, n - 2):
        for p in range(m):
            steps[d, p] = (13.0 * (growth[d, p] + growth[d + 1, p]) - growth[d - 1, p] - growth[d + 2, p]) / 24.0
    for d in range(1, n):
        for p in range(m):
            depth[d, p] = depth[d - 1, p] + steps[d - 1, p]
    for p in range(m):  # mean intensity: elimination from the top, without cancellation
        width = 0.5 * steps[0, p]
        edge = edges[0] + y[p] * (edges[1] + y[p] * (edges[2] + y[p] * edges[3]))
        ratio[0, p] = (width * (1.0 - albedo[0, p]) + edge) * inverse_f[0, p] * steps[0, p]
        value[0, p] = width * thermal[0, p] * steps[0, p] / (1.0 + ratio[0, p])
    for d in range(1, n - 1):
        for p in range(m):
            width = 0.5 * (steps[d - 1, p] + steps[d, p]) * steps[d, p]
            quotient = steps[d, p] / steps[d - 1, p]
            r = width * (1.0 - albedo[d, p]) * inverse_f[d, p] + quotient * ratio[d - 1, p] / (1.0 + ratio[d - 1, p])
            ratio[d, p] = r
            value[d, p] = (width * thermal[d, p] + quotient * value[d - 1, p]) / (1.0 + r)
    for p in range(m):
        value[n - 1, p] = thermal[n - 1, p] / ((1.0 - albedo[n - 1, p]) * inverse_f[n - 1, p])
        flux[p] = 0.0
    for e in range(n - 1):
        d = n - 2 - e
        for p in range(m):
            value[d, p] += value[d + 1, p] / (1.0 + ratio[d, p])
    for d in range(n):
        end = 0.5 if d == 0 or d == n - 1 else 1.0
        for p in range(m):
            t = depth[d, p]
            piece = min(max((bits[d, p] >> SHIFT) - OFFSET, 0), N_PIECES - 1)
            weight = e2[piece, 0] + t * (e2[piece, 1] + t * e2[piece, 2])
            source = thermal[d, p] + albedo[d, p] * value[d, p] * inverse_f[d, p]
            if d == 0:  # above the first layer: 1 - 2 E3(t) with E3 = (exp(-t) - t E2) / 2
                flux[p] = source * (1.0 - np.exp(-t) + t * weight)
            flux[p] += end * 2.0 * source * weight * growth[d, p]
