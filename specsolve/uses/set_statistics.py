"""Robust zero point, scatter beyond the errors and trends of a set of differences."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

HUBER_K = 1.345  # 95 % efficiency for normal errors; Huber 1964, Ann. Math. Statist. 35, 73
MAD_TO_SIGMA = 1.4826  # standard deviation of a normal distribution over its median absolute deviation
PASSES = 60
FEWEST_FOR_TREND = 5
TINY = 1e-9  # stands for an error of zero, in K, dex and km/s


@dataclass(frozen=True)
class Location:
    """Robust mean of values with errors.

    Attributes
    ----------
    mean, error : float
    scatter : float
        Robust standard deviation about the mean.
    beyond : float
        Standard deviation that the errors do not explain; 0 if they explain all.
    n : int
    """

    mean: float
    error: float
    scatter: float
    beyond: float
    n: int


def location(values: np.ndarray, errors: np.ndarray) -> Location:
    """Huber mean with weights 1 / (error^2 + beyond^2), `beyond` from sum w z^2 = n - 1.

    Examples
    --------
    >>> one = location(np.array([0.0, 0.1, -0.1, 9.0]), np.full(4, 0.1))
    >>> abs(one.mean) < 0.1
    True
    """
    ok = np.isfinite(values) & np.isfinite(errors)
    x, s = values[ok], np.maximum(errors[ok], TINY)
    nan = float("nan")
    if x.size == 0:
        return Location(nan, nan, nan, nan, 0)
    if x.size == 1:
        return Location(float(x[0]), float(s[0]), nan, nan, 1)
    mean = float(np.median(x))
    scatter = MAD_TO_SIGMA * float(np.median(np.abs(x - mean)))
    beyond = float(np.sqrt(max(scatter**2 - float(np.median(s)) ** 2, 0.0)))
    for _ in range(PASSES):
        total = s**2 + beyond**2
        z = (x - mean) / np.sqrt(total)
        w = np.minimum(1.0, HUBER_K / np.maximum(np.abs(z), 1e-12))
        new = float(np.sum(w * x / total) / np.sum(w / total))
        new_beyond = _beyond(x - new, s, w)
        if abs(new - mean) + abs(new_beyond - beyond) < 1e-9 * (1.0 + abs(mean)):
            break
        mean, beyond = new, new_beyond
    total = s**2 + beyond**2
    z = (x - mean) / np.sqrt(total)
    psi, core = np.clip(z, -HUBER_K, HUBER_K), np.abs(z) <= HUBER_K
    root = np.sqrt(total)
    error = float(np.sqrt(np.sum(psi**2 / total)) / max(np.sum(core / total), 1e-300))
    normal = float(1.0 / np.sqrt(np.sum(1.0 / total)))
    error = max(error, normal) if root.size > 2 else normal
    return Location(mean, error, float(MAD_TO_SIGMA * np.median(np.abs(x - mean))), beyond, int(x.size))


def _beyond(deviation: np.ndarray, errors: np.ndarray, weights: np.ndarray) -> float:
    """b with sum w d^2 / (s^2 + b^2) = sum w - 1, by bisection (Paule & Mandel 1982, robust weights kept)."""
    wanted = float(weights.sum()) - 1.0

    def excess(variance: float) -> float:
        return float(np.sum(weights * deviation**2 / (errors**2 + variance))) - wanted

    if wanted <= 0.0 or excess(0.0) <= 0.0:
        return 0.0
    low, high = 0.0, float(np.sum(deviation**2)) / wanted + 1e-30
    for _ in range(100):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) > 0.0 else (low, middle)
    return float(np.sqrt(0.5 * (low + high)))


def trend(x: np.ndarray, values: np.ndarray, errors: np.ndarray) -> tuple[float, float]:
    """Robust slope of values against x, and its error; nan below five points or without a spread in x.

    Iterated least squares with Huber weights; the errors count with the scatter beyond them.
    """
    ok = np.isfinite(x) & np.isfinite(values) & np.isfinite(errors)
    if ok.sum() < FEWEST_FOR_TREND or np.ptp(x[ok]) == 0.0:
        return float("nan"), float("nan")
    x, y, s = x[ok], values[ok], np.maximum(errors[ok], TINY)
    design = np.column_stack([np.ones(x.size), x - x.mean()])
    w = np.ones(x.size)
    total = s**2 + location(y, s).beyond ** 2
    total = np.maximum(total, 1e-24)
    for _ in range(PASSES):
        weight = w / total
        covariance = np.linalg.inv((design * weight[:, None]).T @ design)
        coefficients = covariance @ (design * weight[:, None]).T @ y
        residual = y - design @ coefficients
        total = np.maximum(s**2 + _beyond(residual, s, w) ** 2, 1e-24)
        new = np.minimum(1.0, HUBER_K / np.maximum(np.abs(residual) / np.sqrt(total), 1e-12))
        if np.max(np.abs(new - w)) < 1e-9:
            break
        w = new
    return float(coefficients[1]), float(np.sqrt(covariance[1, 1]))
