"""Noise of a spectrum from its own pixels, where the file does not tell it.

The second difference f_i - (f_(i-k) + f_(i+k)) / 2 removes the slope and leaves noise: its variance is
sigma^2 (3/2 - 2 rho_k + rho_2k / 2), with rho the autocorrelation.  A spectrum that was brought to a finer grid has
correlated noise, so the estimate grows with the lag k until the pixels are independent, and later again because of the
lines; the lag of least growth lies between.
"""

from __future__ import annotations

import numpy as np

MEDIAN_TO_SIGMA = 1.4826
"""Standard deviation over the median absolute value of a Gaussian."""
INDEPENDENT_VARIANCE = 1.5
"""Variance of the second difference over that of one pixel, for independent pixels."""
LAGS = np.arange(1, 11)
CHUNK = 1000
"""Pixels for one value of the noise: a second difference has its error then known to about 3 %."""
LEAST_PIXELS = 40
FLAT_GROWTH = 0.15
"""d ln sigma / d ln k below which pixels at this lag count as independent."""


def second_difference_noise(flux: np.ndarray, lag: int) -> float:
    """Robust standard deviation per pixel as if pixels were independent; nan with fewer than `LEAST_PIXELS` values.

    Examples
    --------
    >>> noise = np.random.default_rng(1).normal(1.0, 0.01, 4000)
    >>> round(second_difference_noise(noise, 1), 3)
    0.01
    """
    difference = flux[lag:-lag] - 0.5 * (flux[2 * lag :] + flux[: -2 * lag])
    difference = difference[np.isfinite(difference)]
    if difference.size < LEAST_PIXELS:
        return float("nan")
    return float(MEDIAN_TO_SIGMA * np.median(np.abs(difference)) / np.sqrt(INDEPENDENT_VARIANCE))


def independent_lag(flux: np.ndarray, mask: np.ndarray) -> tuple[int, float]:
    """Lag at which pixels are independent, and by how much correlation raises the variance of a sum.

    Parameters
    ----------
    flux, mask : ndarray, shape (n_pixels,)
        One order; True where a pixel must not be used.

    Returns
    -------
    lag : int
        In pixels.
    correlation : float
        1 + 2 * sum of the autocorrelation: the variance of the sum of many pixels over that of independent ones.
    """
    by_lag = np.array([_quietest(flux, mask, int(lag)) for lag in LAGS])
    if not np.all(by_lag[:3] > 0.0):
        return 1, 1.0
    growth = np.diff(np.log(by_lag)) / np.diff(np.log(LAGS))
    growth = np.where(np.isfinite(growth), growth, np.inf)
    flat = np.flatnonzero(growth < FLAT_GROWTH)
    place = int(flat[0] if flat.size else np.argmin(growth))
    lag = int(LAGS[place])
    if lag == 1:
        return 1, 1.0
    rho = np.zeros(2 * lag + 2)
    for k in range(lag - 1, 0, -1):
        ratio = (by_lag[k - 1] / by_lag[place]) ** 2
        rho[k] = np.clip(0.5 * (INDEPENDENT_VARIANCE * (1.0 - ratio) + 0.5 * rho[2 * k]), 0.0, 1.0)
    return lag, float(1.0 + 2.0 * rho.sum())


def estimate_noise(flux: np.ndarray, mask: np.ndarray) -> tuple[np.ndarray, float]:
    """Error of each pixel of one order, and the factor of `independent_lag`.

    Parameters
    ----------
    flux, mask : ndarray, shape (n_pixels,)

    Returns
    -------
    sigma : ndarray, shape (n_pixels,)
        Smooth along the order; nan if there are too few pixels. Where lines are dense it is an upper limit.
    correlation : float

    Examples
    --------
    >>> noise = np.random.default_rng(1).normal(1.0, 0.01, 4000)
    >>> sigma, correlation = estimate_noise(noise, np.zeros(4000, bool))
    >>> round(float(np.median(sigma)), 3), correlation
    (0.01, 1.0)
    """
    lag, correlation = independent_lag(flux, mask)
    n_chunks = max(1, flux.size // CHUNK)
    pieces = np.array_split(np.arange(flux.size), n_chunks)
    centres, values = [], []
    for piece in pieces:
        value = second_difference_noise(np.where(mask[piece], np.nan, flux[piece]), lag)
        if np.isfinite(value) and value > 0.0:
            centres.append(piece.mean())
            values.append(value)
    if not values:
        return np.full(flux.size, np.nan), 1.0
    return np.interp(np.arange(flux.size), centres, values), correlation


def _quietest(flux: np.ndarray, mask: np.ndarray, lag: int) -> float:
    """Lower quartile over chunks, in units of the chunk's own level: where lines disturb least."""
    values = []
    for piece in np.array_split(np.where(mask, np.nan, flux), max(1, flux.size // CHUNK)):
        level = np.nanmedian(piece) if np.isfinite(piece).any() else np.nan
        if level > 0.0 and piece.size > 2 * lag:
            values.append(second_difference_noise(piece, lag) / level)
    return float(np.nanpercentile(values, 25.0)) if np.isfinite(values).any() else float("nan")
