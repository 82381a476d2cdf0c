"""Compiled twin of `state.settle` and of the operators, for bulk work; `state.py` is the reference that it is
tested against.

Importing this module loads numba; the path for few stars never does.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from .residuals import MIN_EXCITATION_SPREAD_EV, MIN_STRENGTH_SPREAD_DEX
from .robust import (
    FEW_FE2_LINES,
    HUBER_K,
    MAX_LINE_TO_LINE_DEX,
    MAX_SCALE_STEPS,
    SCALE_TOLERANCE,
    STUDENT_NU,
    huber_consistency,
)

LOSS_CODES = {"none": 0, "huber": 1, "student": 2}
CONSISTENCY = huber_consistency()
MAX_PASSES = 100
WEIGHT_TOLERANCE = 1e-9
SCATTER_TOLERANCE = 1e-10  # dex
SAME_AXIS_DETERMINANT = 1e-6


@njit(cache=True, nogil=True)
def _plane_rows(ion_mask, chi, x, weights, rows):
    """Rows mean, excitation slope, strength slope of the weighted plane over the lines of a mask; nan where
    undefined.
    """
    n = weights.size
    rows[:] = 0.0
    total, count = 0.0, 0
    for i in range(n):
        if ion_mask[i] and weights[i] > 0.0:
            total += weights[i]
            count += 1
    if not total > 0.0:
        rows[:] = np.nan
        return
    mean_chi, mean_x = 0.0, 0.0
    for i in range(n):
        if ion_mask[i]:
            mean_chi += weights[i] * chi[i]
            mean_x += weights[i] * x[i]
    mean_chi /= total
    mean_x /= total
    s_cc, s_xx, s_cx = 0.0, 0.0, 0.0
    for i in range(n):
        if ion_mask[i]:
            w = weights[i] / total
            rows[0, i] = w
            a, b = chi[i] - mean_chi, x[i] - mean_x
            s_cc += w * a * a
            s_xx += w * b * b
            s_cx += w * a * b
    has_chi = count >= 3 and np.sqrt(s_cc) > MIN_EXCITATION_SPREAD_EV
    has_x = count >= 3 and np.sqrt(s_xx) > MIN_STRENGTH_SPREAD_DEX
    if has_chi and has_x and 1.0 - s_cx * s_cx / (s_cc * s_xx) < SAME_AXIS_DETERMINANT:
        has_chi, has_x = False, False
    determinant = s_cc * s_xx - s_cx * s_cx
    for i in range(n):
        if not ion_mask[i]:
            continue
        w, a, b = weights[i] / total, chi[i] - mean_chi, x[i] - mean_x
        if has_chi and has_x:
            rows[1, i] = w * (s_xx * a - s_cx * b) / determinant
            rows[2, i] = w * (s_cc * b - s_cx * a) / determinant
        elif has_chi:
            rows[1, i] = w * a / s_cc
        elif has_x:
            rows[2, i] = w * b / s_xx
    if not has_chi:
        rows[1] = np.nan
    if not has_x:
        rows[2] = np.nan


@njit(cache=True, nogil=True)
def _operator(is_fe1, is_fe2, chi, x, weights, from_fe1):
    """The four residuals as rows, as `residuals.balance_operator`."""
    n = weights.size
    rows = np.zeros((3, n))
    out = np.zeros((4, n))
    _plane_rows(is_fe1, chi, x, weights, rows)
    second, everything = 0.0, 0.0
    for i in range(n):
        everything += weights[i]
        if is_fe2[i]:
            second += weights[i]
    for i in range(n):
        out[0, i] = rows[1, i]
        out[3, i] = rows[2, i]
        out[1, i] = rows[0, i]
        if is_fe2[i]:
            out[1, i] -= weights[i] / second if second > 0.0 else np.nan
        out[2, i] = rows[0, i] if from_fe1 else (weights[i] / everything if everything > 0.0 else np.nan)
    if not second > 0.0:
        out[1] = np.nan
    return out


@njit(cache=True, nogil=True)
def _deviations(is_fe1, is_fe2, chi, x, weights, y, rows, out):
    """As `residuals.deviations`."""
    n = weights.size
    _plane_rows(is_fe1, chi, x, weights, rows)
    t1, m1, mc, mx, t2, m2 = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    slope_chi, slope_x = 0.0, 0.0
    for i in range(n):
        if is_fe1[i]:
            t1 += weights[i]
            m1 += weights[i] * y[i]
            mc += weights[i] * chi[i]
            mx += weights[i] * x[i]
            slope_chi += rows[1, i] * y[i]
            slope_x += rows[2, i] * y[i]
        else:
            t2 += weights[i]
            m2 += weights[i] * y[i]
    slope_chi = slope_chi if np.isfinite(slope_chi) else 0.0
    slope_x = slope_x if np.isfinite(slope_x) else 0.0
    for i in range(n):
        if is_fe1[i]:
            if t1 > 0.0:
                out[i] = y[i] - m1 / t1 - slope_chi * (chi[i] - mc / t1) - slope_x * (x[i] - mx / t1)
            else:
                out[i] = np.nan
        else:
            out[i] = y[i] - m2 / t2 if t2 > 0.0 else np.nan


@njit(cache=True, nogil=True)
def _excess(mask, deviation, variance, s_squared):
    total, slope = 0.0, 0.0
    limit = HUBER_K**2
    for i in range(mask.size):
        if mask[i]:
            v = variance[i] + s_squared
            z = deviation[i] * deviation[i] / v
            if z < limit:
                total += z
                slope -= z / v
            else:
                total += limit
    return total, slope


@njit(cache=True, nogil=True)
def _line_to_line(mask, deviation, variance, n_parameters, guess):
    """As `robust.line_to_line_term`; 0 where no degree of freedom is left."""
    n, start = 0, 0.0
    for i in range(mask.size):
        if mask[i]:
            n += 1
            start += min(deviation[i] * deviation[i], HUBER_K**2 * variance[i])
    freedom = n - n_parameters
    if freedom < 1:
        return 0.0
    target = freedom * CONSISTENCY
    low, high = 0.0, MAX_LINE_TO_LINE_DEX**2
    if _excess(mask, deviation, variance, low)[0] <= target:
        return 0.0
    if _excess(mask, deviation, variance, high)[0] > target:
        return MAX_LINE_TO_LINE_DEX
    value = max(guess * guess, start / n * 1e-2)
    for _ in range(MAX_SCALE_STEPS):
        total, slope = _excess(mask, deviation, variance, value)
        if total > target:
            low = value
        else:
            high = value
        trial = value - (total - target) / slope if slope < 0.0 else low
        if not (low < trial < high):
            trial = 0.5 * (low + high)
        moved = abs(trial - value)
        value = trial
        if moved <= SCALE_TOLERANCE * value:
            break
    return np.sqrt(value)


@njit(cache=True, nogil=True)
def settle_kernel(
    is_fe2,
    chi,
    measured,
    sigma_logw,
    sigma_gf,
    gf_unknown,
    extra,
    y,
    slope,
    predicted,
    used,
    robust,
    scatter,
    loss,
    from_fe1,
):
    """Fixed point of weights, line-to-line term and strength axis, and both operators there.

    Arguments are arrays of shape (n_lines,) except `scatter` (2,), `loss` (code) and `from_fe1`; no nan may reach
    `y`, `slope`,
    `predicted`, `sigma_gf`.

    Returns
    -------
    robust, scatter, width_variance, gf_variance, strength, deviation, settled, operator, response
    """
    n = y.size
    is_fe1 = ~is_fe2
    robust, scatter = robust.copy(), scatter.copy()
    width_variance, gf_variance = np.empty(n), np.empty(n)
    for i in range(n):
        width_variance[i] = (slope[i] * sigma_logw[i]) ** 2
        gf_variance[i] = sigma_gf[i] ** 2 + extra[i]
    known = width_variance + gf_variance
    first, second, n_first, n_second = used & is_fe1, used & is_fe2, 0, 0
    for i in range(n):
        n_first += first[i]
        n_second += second[i]
    n_plane = 3 if n_first > 3 else 1
    apart = n_second >= FEW_FE2_LINES and n_first >= FEW_FE2_LINES
    n_pooled = (n_plane if n_first > 0 else 0) + (1 if n_second > 0 else 0)
    strength, deviation, weights = np.empty(n), np.empty(n), np.empty(n)
    rows = np.zeros((3, n))
    settled = False
    for _ in range(MAX_PASSES):
        for i in range(n):
            s2 = scatter[1 if is_fe2[i] else 0] ** 2
            gf = gf_variance[i] + (s2 if gf_unknown[i] else 0.0)
            total = known[i] + s2
            share = gf / total if total > 0.0 else 0.0
            strength[i] = measured[i] * share + predicted[i] * (1.0 - share)
            weights[i] = robust[i] / total
        _deviations(is_fe1, is_fe2, chi, strength, weights, y, rows, deviation)
        if apart:
            s1 = _line_to_line(first, deviation, known, n_plane, scatter[0])
            s2 = _line_to_line(second, deviation, known, 1, scatter[1])
        else:
            s1 = _line_to_line(used, deviation, known, n_pooled, scatter[0])
            s2 = s1
        change = 0.0
        for i in range(n):
            w = 0.0
            if used[i]:
                s = s2 if is_fe2[i] else s1
                z = abs(deviation[i]) / np.sqrt(known[i] + s * s)
                if not np.isfinite(z):
                    w = 0.0
                elif loss == 1:
                    w = 1.0 if z <= HUBER_K else HUBER_K / z
                elif loss == 2:
                    w = (STUDENT_NU + 1.0) / (STUDENT_NU + z * z)
                else:
                    w = 1.0
            change = max(change, abs(w - robust[i]))
            robust[i] = w
        change_scatter = max(abs(s1 - scatter[0]), abs(s2 - scatter[1]))
        scatter[0], scatter[1] = s1, s2
        if change < WEIGHT_TOLERANCE and change_scatter < SCATTER_TOLERANCE:
            settled = True
            break
    follow = np.empty(n)
    for i in range(n):
        s = scatter[1 if is_fe2[i] else 0]
        total = known[i] + s * s
        weights[i] = robust[i] / total
        follow[i] = weights[i]
        if loss > 0:
            z = deviation[i] / np.sqrt(total) if used[i] else 0.0
            if loss == 1:
                bend = 1.0 if abs(z) <= HUBER_K else 0.0
            else:
                w = (STUDENT_NU + 1.0) / (STUDENT_NU + z * z)
                bend = max(w * (1.0 - 2.0 * z * z * w / (STUDENT_NU + 1.0)), 0.0)
            follow[i] = bend / total if used[i] else 0.0
    operator = _operator(is_fe1, is_fe2, chi, strength, weights, from_fe1)
    response = _operator(is_fe1, is_fe2, chi, strength, follow, from_fe1)
    for i in range(n):
        for k in range(4):
            if not np.isfinite(response[k, i]):
                response[k, i] = operator[k, i]
    return robust, scatter, width_variance, gf_variance, strength, deviation, settled, operator, response


@njit(cache=True, nogil=True)
def project(operator, response, star, shared, y, d_theta, mh):
    """Residuals, their Jacobian and both diagonal-error covariances from the operators."""
    n = y.size
    residuals, jacobian = np.zeros(4), np.zeros((4, 4))
    c_star, c_shared = np.zeros((4, 4)), np.zeros((4, 4))
    for i in range(n):
        for k in range(4):
            g = operator[k, i]
            residuals[k] += g * y[i]
            for m in range(4):
                if np.isfinite(d_theta[i, m]):
                    jacobian[k, m] += response[k, i] * d_theta[i, m]
            for m in range(k + 1):
                product = g * operator[m, i]
                c_star[k, m] += product * star[i]
                c_shared[k, m] += product * shared[i]
    for k in range(4):
        for m in range(k):
            c_star[m, k] = c_star[k, m]
            c_shared[m, k] = c_shared[k, m]
    residuals[2] -= mh
    jacobian[2, 2] -= 1.0
    return residuals, jacobian, c_star, c_shared
