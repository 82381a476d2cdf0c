"""Compiled equivalent widths; the same equations as `equivalent_width.reduced_widths_reference`.

The innermost loop runs over abundances, so that the compiler can vectorise it.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from specsolve.matter.line_profile import voigt_fast

from .exponential_integral import N_PIECES, OFFSET, SHIFT

voigt_compiled = njit(cache=True, nogil=True)(voigt_fast)


@njit(cache=True, nogil=True)
def relative_widths(
    line_parts,
    growth_scale,
    column_mass,
    amounts,
    doppler,
    points,
    weights,
    absorption,
    scattering,
    strength,
    damping,
    planck,
    line_source,
    inverse_eddington,
    edges,
    reference_opacity,
    layer,
    e2_table,
    result,
):
    """W / lambda of all lines and abundances at one microturbulence.

    Parameters
    ----------
    line_parts : ndarray, shape (n,)
        Work space.
    growth_scale : ndarray, shape (n,)
        dm per layer step.
    column_mass : ndarray, shape (n,)
    amounts : ndarray, shape (n_a + 1,)
        Iron per hydrogen; the first must be zero: it makes the continuum.
    doppler : ndarray, shape (n,)
    points, weights : ndarray, shape (n_lines, n_profile)
    absorption, scattering, strength, damping, planck, line_source : ndarray, shape (n_lines, n)
    inverse_eddington, edges, reference_opacity, layer
        The attributes of `EddingtonFactors`.
    e2_table : ndarray, shape (n_pieces, 3)
    result : ndarray, shape (n_lines, n_a)
        Returned W / lambda.
    """
    n_lines, n = strength.shape
    n_profile = points.shape[1]
    n_a = amounts.shape[0]
    growth = np.empty((n, n_a))
    depth = np.empty((n, n_a))
    bits = depth.view(np.int64)
    steps = np.empty((n, n_a))
    thermal = np.empty((n, n_a))
    albedo = np.empty((n, n_a))
    ratio = np.empty((n, n_a))
    value = np.empty((n, n_a))
    moment = np.empty((n, n_a))
    inverse_f = np.empty((n, n_a))
    strengths = np.empty(n_a)
    flux = np.empty(n_a)
    total = np.empty(n_a)
    for i in range(n_lines):
        total[:] = 0.0
        for k in range(n_profile):
            for d in range(n):
                profile = voigt_compiled(damping[i, d] / doppler[d], points[i, k] / doppler[d])
                line_parts[d] = strength[i, d] / doppler[d] * profile
            for d in range(n):
                part = line_parts[d]
                cont = absorption[i, d] + scattering[i, d]
                in_thermal = absorption[i, d] * planck[i, d]
                for j in range(n_a):
                    line = part * amounts[j]
                    c = cont + line
                    inverse = 1.0 / c
                    growth[d, j] = c * growth_scale[d]
                    thermal[d, j] = (line * line_source[i, d] + in_thermal) * inverse
                    albedo[d, j] = scattering[i, d] * inverse
            for j in range(n_a):
                depth[0, j] = column_mass[0] * (
                    line_parts[0] * amounts[j] + 0.5 * (absorption[i, 0] + scattering[i, 0])
                )
                steps[0, j] = (9.0 * growth[0, j] + 19.0 * growth[1, j] - 5.0 * growth[2, j] + growth[3, j]) / 24.0
                steps[n - 2, j] = (
                    9.0 * growth[n - 1, j] + 19.0 * growth[n - 2, j] - 5.0 * growth[n - 3, j] + growth[n - 4, j]
                ) / 24.0
            for d in range(1, n - 2):
                for j in range(n_a):
                    steps[d, j] = (13.0 * (growth[d, j] + growth[d + 1, j]) - growth[d - 1, j] - growth[d + 2, j]) * (
                        1.0 / 24.0
                    )
            for d in range(1, n):
                for j in range(n_a):
                    depth[d, j] = depth[d - 1, j] + steps[d - 1, j]
            for j in range(n_a):
                relative = line_parts[layer] * amounts[j] / reference_opacity[i]
                strengths[j] = relative / (1.0 + relative)
            for d in range(n):
                for j in range(n_a):
                    y = strengths[j]
                    inverse_f[d, j] = inverse_eddington[i, 0, d] + y * (
                        inverse_eddington[i, 1, d] + y * (inverse_eddington[i, 2, d] + y * inverse_eddington[i, 3, d])
                    )
            # mean intensity: elimination from the top, without cancellation
            for j in range(n_a):
                width = 0.5 * steps[0, j]
                y = strengths[j]
                edge = edges[i, 0] + y * (edges[i, 1] + y * (edges[i, 2] + y * edges[i, 3]))
                ratio[0, j] = (width * (1.0 - albedo[0, j]) + edge) * inverse_f[0, j] * steps[0, j]
                value[0, j] = width * thermal[0, j] * steps[0, j] / (1.0 + ratio[0, j])
            for d in range(1, n - 1):
                for j in range(n_a):
                    width = 0.5 * (steps[d - 1, j] + steps[d, j]) * steps[d, j]
                    quotient = steps[d, j] / steps[d - 1, j]
                    r = width * (1.0 - albedo[d, j]) * inverse_f[d, j] + quotient * ratio[d - 1, j] / (
                        1.0 + ratio[d - 1, j]
                    )
                    ratio[d, j] = r
                    value[d, j] = (width * thermal[d, j] + quotient * value[d - 1, j]) / (1.0 + r)
            for j in range(n_a):
                moment[n - 1, j] = thermal[n - 1, j] / ((1.0 - albedo[n - 1, j]) * inverse_f[n - 1, j])
            for e in range(n - 1):
                d = n - 2 - e
                for j in range(n_a):
                    moment[d, j] = value[d, j] + moment[d + 1, j] / (1.0 + ratio[d, j])
            for j in range(n_a):
                flux[j] = 0.0
            for d in range(n):
                end = 0.5 if d == 0 or d == n - 1 else 1.0
                for j in range(n_a):
                    piece = min(max((bits[d, j] >> SHIFT) - OFFSET, 0), N_PIECES - 1)
                    t = depth[d, j]
                    e2 = e2_table[piece, 0] + t * (e2_table[piece, 1] + t * e2_table[piece, 2])
                    source = thermal[d, j] + albedo[d, j] * moment[d, j] * inverse_f[d, j]
                    if d == 0:  # above the first layer: 1 - 2 E3(t) with E3 = (exp(-t) - t E2) / 2
                        flux[j] = source * (1.0 - np.exp(-t) + t * e2)
                    flux[j] += end * 2.0 * source * e2 * growth[d, j]
            for j in range(1, n_a):
                total[j] += weights[i, k] * (1.0 - flux[j] / flux[0])
        for j in range(1, n_a):
            result[i, j - 1] = total[j]
