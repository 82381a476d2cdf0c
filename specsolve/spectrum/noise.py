"""Noise of a spectrum from its own pixels, where the file does not tell it.

Differences of neighbouring pixels remove level and slope and leave noise; those of the sixth order also remove lines,
which an instrument of three or more pixels per resolution element leaves no power near the Nyquist frequency.  A
spectrum that was brought to a finer grid has correlated noise: its sixth differences are smaller than its second ones,
f_i - (f_(i-k) + f_(i+k)) / 2 with variance sigma^2 (3/2 - 2 rho_k + rho_2k / 2), and these grow with the lag k until the
pixels are independent.  Lines do the same at larger lags, so only lags below a third of the width of a line count.
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
SIXTH = np.array([1.0, -6.0, 15.0, -20.0, 15.0, -6.0, 1.0])
SMOOTHER = 1.25
"""Second over sixth differences, each scaled for independent noise, above which pixels are correlated or lines count."""
LEAST_PER_FWHM = 3.0
"""Pixels that an instrument's own detector has per resolution element; lags beyond width / 3 are not looked at."""


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


def sixth_difference_noise(flux: np.ndarray) -> float:
    """As `second_difference_noise` at lag 1, blind to lines of three pixels and more.

    Examples
    --------
    >>> noise = np.random.default_rng(1).normal(1.0, 0.01, 4000)
    >>> round(sixth_difference_noise(noise), 3)
    0.01
    """
    if flux.size < SIXTH.size:
        return float("nan")
    difference = np.convolve(flux, SIXTH, mode="valid")
    difference = difference[np.isfinite(difference)]
    if difference.size < LEAST_PIXELS:
        return float("nan")
    return float(MEDIAN_TO_SIGMA * np.median(np.abs(difference)) / np.sqrt(np.sum(SIXTH**2)))


def line_pixels(flux: np.ndarray, mask: np.ndarray) -> float:
    """Full width at half maximum of the lines in pixels, from the autocorrelation; nan if it shows none.

    Gaussian lines of width w have an autocorrelation of half width w / sqrt(2).
    """
    values = np.where(mask, np.nan, flux)
    level = np.nanmedian(values) if np.isfinite(values).any() else np.nan
    if not level > 0.0:
        return float("nan")
    depth = np.clip(np.where(np.isfinite(values), values / level - 1.0, 0.0), -1.0, 0.2)
    sums = np.array([np.mean(depth[lag:] * depth[: depth.size - lag]) for lag in range(min(60, depth.size // 4))])
    base = sums[-10:].mean() if sums.size > 20 else 0.0
    sums = sums - base
    if sums.size < 4 or not sums[1] > 0.0:
        return float("nan")
    below = np.flatnonzero(sums[1:] < 0.5 * sums[1])
    return float(np.sqrt(2.0) * (below[0] + 1)) if below.size else float("nan")


def independent_lag(flux: np.ndarray, mask: np.ndarray, per_fwhm: float = np.nan) -> tuple[int, float]:
    """Lag at which pixels are independent, and by how much correlation raises the variance of a sum.

    Parameters
    ----------
    flux, mask : ndarray, shape (n_pixels,)
        One order; True where a pixel must not be used.
    per_fwhm : float
        Pixels in the width of the instrument's profile; the width of the lines serves where it is not known.

    Returns
    -------
    lag : int
        In pixels.
    correlation : float
        1 + 2 * sum of the autocorrelation: the variance of the sum of many pixels over that of independent ones.
    """
    width = per_fwhm if np.isfinite(per_fwhm) else line_pixels(flux, mask)
    most = LAGS.size if not np.isfinite(width) else int(np.clip(width / LEAST_PER_FWHM, 1, LAGS.size))
    values = np.where(mask, np.nan, flux)
    if most == 1:
        return 1, 1.0
    # linear interpolation leaves pixels between two others without a second difference at lag 1, hence both lags
    rough = max(second_difference_noise(values, 1), second_difference_noise(values, 2))
    if not rough > SMOOTHER * sixth_difference_noise(values):
        return 1, 1.0
    lags = LAGS[: most + 1]
    by_lag = np.array([_quietest(flux, mask, int(lag)) for lag in lags])
    if not np.all(by_lag > 0.0):
        return 1, 1.0
    growth = np.diff(np.log(by_lag)) / np.diff(np.log(lags))
    flat = np.flatnonzero(growth < FLAT_GROWTH)
    place = int(flat[0] if flat.size else np.argmin(growth))
    lag = int(lags[place])
    rho = np.zeros(2 * lag + 2)
    for k in range(lag - 1, 0, -1):
        ratio = (by_lag[k - 1] / by_lag[place]) ** 2
        rho[k] = np.clip(0.5 * (INDEPENDENT_VARIANCE * (1.0 - ratio) + 0.5 * rho[2 * k]), 0.0, 1.0)
    return lag, float(1.0 + 2.0 * rho.sum())


def estimate_noise(flux: np.ndarray, mask: np.ndarray, per_fwhm: float = np.nan) -> tuple[np.ndarray, float]:
    """Error of each pixel of one order, and the factor of `independent_lag`.

    Parameters
    ----------
    flux, mask : ndarray, shape (n_pixels,)
    per_fwhm : float
        As in `independent_lag`.

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
    lag, correlation = independent_lag(flux, mask, per_fwhm)
    values = np.where(mask, np.nan, flux)
    centres, noise = [], []
    for piece in np.array_split(np.arange(flux.size), max(1, flux.size // CHUNK)):
        one = sixth_difference_noise(values[piece]) if lag == 1 else second_difference_noise(values[piece], lag)
        if np.isfinite(one) and one > 0.0:
            centres.append(piece.mean())
            noise.append(one)
    if not noise:
        return np.full(flux.size, np.nan), 1.0
    return np.interp(np.arange(flux.size), centres, noise), correlation


def _quietest(flux: np.ndarray, mask: np.ndarray, lag: int) -> float:
    """Lower quartile over chunks, in units of the chunk's own level: where lines disturb least."""
    values = []
    for piece in np.array_split(np.where(mask, np.nan, flux), max(1, flux.size // CHUNK)):
        level = np.nanmedian(piece) if np.isfinite(piece).any() else np.nan
        if level > 0.0 and piece.size > 2 * lag:
            values.append(second_difference_noise(piece, lag) / level)
    return float(np.nanpercentile(values, 25.0)) if np.isfinite(values).any() else float("nan")
