"""The common broadening of a spectrum, fitted to its cleanest lines.

Where the resolving power is known: its Gaussian, radial-tangential macroturbulence, and rotation where it shows; a
resolving power that is understated is told by lines narrower than the instrument. Where it is unknown: a Gaussian, and
rotation where it shows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from . import system as systems
from .broadening import FWHM_PER_SIGMA, LIGHT_SPEED_KM_S, ROTATION_TO_SIGMA, Kernel
from .fit import Fit, pixel_range
from .predict import N_TABLE, TABLE_STEP, Prediction

MOST_LINES = 50
N_SHORT = 256  # velocities of the shapes compared, 100 km/s
DEPTHS = (0.04, 0.7)  # central depths of the lines that serve
LARGEST_CONTAMINATION = 0.25
ROTATION_GAIN = 16.0
"""Rotation is taken where it lowers chi square by this much (4 sigma), after scaling to the residuals."""
USUAL_MACROTURBULENCE = (3.5, 3.0)
"""Mean and 1-sigma beforehand [km/s], slow rotation and the pixels' own width included; common practice, no source."""
LARGEST_STAR = 45.0  # km/s


@dataclass(frozen=True)
class Broadening:
    """Common broadening.

    Attributes
    ----------
    kernel : Kernel
    error : float
        Of its total full width [km/s]; nan where too few lines served.
    n_lines : int
    """

    kernel: Kernel
    error: float
    n_lines: int


def fit_broadening(fit: Fit, prediction: Prediction, instrument: float) -> Broadening:
    """Fit the common broadening with free strengths, shifts as they are.

    Parameters
    ----------
    fit : Fit
    prediction : Prediction
    instrument : float
        Full width of the instrument [km/s]; nan if unknown.
    """
    from scipy.optimize import minimize, minimize_scalar

    data = _pixels(fit)
    if data is None:
        return Broadening(fit.kernel, float("nan"), 0)
    rows, row_of, share, velocity, line, depth, weight = data
    transforms = prediction.shapes[rows][:, :: N_TABLE // N_SHORT]
    x = np.abs(velocity) / TABLE_STEP
    i = np.minimum(x.astype(int), N_SHORT - 2)
    t = x - i
    n_lines = int(line.max()) + 1

    def chi_square(kernel: Kernel) -> float:
        table = np.fft.irfft(transforms * kernel.transform(2 * N_SHORT, TABLE_STEP), axis=1)[:, :N_SHORT]
        phi = (1.0 - share) * ((1.0 - t) * table[row_of, i] + t * table[row_of, i + 1])
        phi += share * ((1.0 - t) * table[row_of + 1, i] + t * table[row_of + 1, i + 1])
        own = np.bincount(line, weight * phi * phi, n_lines)
        mixed = np.bincount(line, weight * phi * depth, n_lines)
        level = np.where(own > 0.0, mixed / np.maximum(own, 1e-30), 0.0)
        difference = depth - level[line] * phi
        return float(np.sum(2.0 * (np.sqrt(1.0 + weight * difference**2) - 1.0)))  # soft: a blend counts linearly

    def of(star: float, vsini: float) -> Kernel:
        """Kernel for a part of the star: macroturbulence, or with an unknown instrument a Gaussian."""
        if known:
            if star >= 0.0:
                return Kernel(fwhm=instrument, macroturbulence=float(star), vsini=float(abs(vsini)))
            return Kernel(fwhm=float(max(instrument + star, 0.3 * instrument)), vsini=float(abs(vsini)))
        return Kernel(fwhm=float(max(star, 0.3)), vsini=float(abs(vsini)))

    known = bool(np.isfinite(instrument))
    low = -0.4 * instrument if known else 0.5
    usual, spread = USUAL_MACROTURBULENCE

    def objective(star: float, vsini: float) -> float:
        beforehand = ((star - usual) / spread) ** 2 if known else 0.0
        return chi_square(of(star, vsini)) + beforehand

    best = minimize_scalar(
        lambda star: objective(star, 0.0),
        bounds=(low, LARGEST_STAR),
        method="bounded",
        options={"xatol": 0.02},
    )
    kernel, chi2, star = of(best.x, 0.0), float(best.fun), float(best.x)
    scale = max(1.0, chi2 / max(1, depth.size - n_lines))
    floor = instrument if known else 2.0
    excess = np.sqrt(max(kernel.total**2 - floor**2, 0.0)) / (FWHM_PER_SIGMA * ROTATION_TO_SIGMA)
    if excess > 0.5 * floor:
        two = minimize(
            lambda p: objective(p[0], p[1]),
            [0.4 * star if known else floor, 0.8 * excess],
            method="Nelder-Mead",
            options={"xatol": 0.1, "fatol": 1.0, "maxfev": 40},
        )
        if (chi2 - two.fun) / scale > ROTATION_GAIN:
            kernel, chi2, star = of(*two.x), float(two.fun), float(two.x[0])
    h = 0.05 * kernel.total
    low_star, high_star = max(star - h, low), star + h
    ends = [chi_square(of(s, kernel.vsini)) for s in (low_star, high_star)]
    width = high_star - low_star
    middle = 0.5 * (low_star + high_star)
    curvature = 4.0 * (sum(ends) - 2.0 * chi_square(of(middle, kernel.vsini))) / width**2
    error = float("nan")
    if curvature > 0.0:
        slope = (of(high_star, kernel.vsini).total - of(low_star, kernel.vsini).total) / width
        error = float(np.sqrt(2.0 * scale / curvature) * abs(slope))
    return Broadening(kernel, error, n_lines)


def _pixels(fit: Fit):
    """Pixels of the lines that serve, with the depths of all others taken out; None with fewer than 5 lines."""
    lines, own = fit.lines, fit.targets
    own = own[lines.own[own] >= 0]
    peak = lines.width[own] * fit.shapes[lines.row[own], 0]
    total = fit.kernel.total
    alone = systems.depth_of(fit.wavelength, fit.order, lines, fit.shapes, fit.reach, own)
    others = 1.0 - (1.0 - fit.depth) / (1.0 - alone)
    quality = np.full(own.size, -np.inf)
    ranges = [pixel_range(fit, j, 0.75 * total + 2.5) for j in own]
    for k, (low, high) in enumerate(ranges):
        if not DEPTHS[0] < peak[k] < DEPTHS[1] or high - low < 5 or not fit.good[low:high].all():
            continue
        dirt = others[low:high].max() / peak[k]
        if dirt < LARGEST_CONTAMINATION:
            quality[k] = peak[k] / np.median(fit.sigma[low:high]) * (1.0 - dirt / LARGEST_CONTAMINATION)
    chosen = np.argsort(-quality)[:MOST_LINES]
    chosen = chosen[np.isfinite(quality[chosen])]
    if chosen.size < 5:
        return None
    continuum = fit.continuum
    rows, row_of, share, velocity, number, depth, weight = [], [], [], [], [], [], []
    for n, k in enumerate(chosen):
        j = own[k]
        low, high = ranges[k]
        size = high - low
        rows += [lines.row[j], lines.row[j] + 1]
        row_of.append(np.full(size, 2 * n))
        share.append(np.full(size, lines.share[j]))
        velocity.append((fit.wavelength[low:high] / lines.centre[j] - 1.0) * LIGHT_SPEED_KM_S - lines.shift[j])
        number.append(np.full(size, n))
        depth.append(1.0 - fit.flux[low:high] / continuum[low:high] / (1.0 - others[low:high]))
        error = np.hypot(fit.sigma[low:high], fit.options.shape_error * peak[k])
        weight.append(1.0 / error**2)
    joined = [np.concatenate(v) for v in (row_of, share, velocity, number, depth, weight)]
    return (np.array(rows), *joined)
