"""The mean profile of many lines of a spectrum: depths found at shifted wavelengths, weighted, and where its centre lies."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.constants import LIGHT_SPEED_CM_S

from .types import Spectrum

LIGHT_SPEED_KMS = LIGHT_SPEED_CM_S * 1e-5
GAUSSIAN_FWHM = 2.0 * np.sqrt(2.0 * np.log(2.0))
LINE_VELOCITY = 6.0
"""Width in velocity at which a line is half saturated: depth = w / (w + 6 km/s), w = c W / lambda (shape only)."""
LEVEL_PIECE = 8.0  # Angstrom, for the rough upper envelope
LEVEL_PERCENTILE = 90.0
DEPTH_LIMITS = (-0.3, 1.0)
BLEND_NOISE = 0.05
"""Scatter of the depth at a line that blends alone make; it keeps a few lines of high S/N from ruling."""
FIT_HALF_WIDTH = 1.3  # of the profile's FWHM


def rough_level(wavelength: np.ndarray, flux: np.ndarray, good: np.ndarray) -> np.ndarray:
    """Upper envelope of one order: percentiles of pieces, joined by lines; for the velocity and for figures only."""
    if not good.any():
        return np.ones(flux.size)
    n_pieces = max(1, round((wavelength[-1] - wavelength[0]) / LEVEL_PIECE))
    place = np.minimum(
        ((wavelength - wavelength[0]) / (wavelength[-1] - wavelength[0]) * n_pieces).astype(int), n_pieces - 1
    )
    centres, levels = [], []
    for number in range(n_pieces):
        of = (place == number) & good
        if of.sum() >= 10:
            centres.append(wavelength[of].mean())
            levels.append(np.percentile(flux[of], LEVEL_PERCENTILE))
    if not centres:
        return np.full(flux.size, max(float(np.percentile(flux[good], LEVEL_PERCENTILE)), np.finfo(float).tiny))
    level = np.interp(wavelength, centres, levels)
    floor = 0.05 * np.median(levels)
    return np.maximum(level, floor if floor > 0.0 else np.finfo(float).tiny)


def centre_of(velocity: np.ndarray, profile: np.ndarray) -> tuple[float, float, float]:
    """Centre, full width at half maximum [km/s] and depth of a profile: Gaussian plus sloping baseline.

    Returns nan where nothing can be fitted.

    Examples
    --------
    >>> v = np.arange(-50.0, 50.0, 0.5)
    >>> [round(x, 2) for x in centre_of(v, 0.4 * np.exp(-0.5 * ((v - 3.2) / 4.0) ** 2))]
    [3.2, 9.42, 0.4]
    """
    usable = np.isfinite(profile)
    if usable.sum() < 10:
        return float("nan"), float("nan"), float("nan")
    base = float(np.percentile(profile[usable], 20.0))
    middle = np.abs(velocity - velocity.mean()) < 0.35 * (velocity[-1] - velocity[0])
    top = int(np.argmax(np.where(usable & middle, profile, -np.inf)))
    half = 0.5 * (profile[top] + base)
    left = top - int(np.argmax(~(profile[top::-1] > half)))
    right = top + int(np.argmax(~(profile[top:] > half)))
    fwhm = max(float(velocity[min(right, velocity.size - 1)] - velocity[max(left, 0)]), 2.0)
    centre, height, slope = float(velocity[top]), float(profile[top] - base), 0.0
    sigma = fwhm / GAUSSIAN_FWHM
    for _ in range(25):
        near = usable & (np.abs(velocity - centre) < FIT_HALF_WIDTH * GAUSSIAN_FWHM * sigma)
        if near.sum() < 6:
            return float("nan"), float("nan"), float("nan")
        x = velocity[near] - centre
        shape = np.exp(-0.5 * (x / sigma) ** 2)
        model = base + slope * x + height * shape
        design = np.stack(
            [np.ones(x.size), x, shape, height * shape * x / sigma**2, height * shape * x**2 / sigma**3], 1
        )
        step, *_ = np.linalg.lstsq(design, profile[near] - model, rcond=None)
        base, slope, height = base + step[0], slope + step[1], height + step[2]
        move, widen = float(np.clip(step[3], -sigma, sigma)), float(np.clip(step[4], -0.3 * sigma, 0.3 * sigma))
        base += slope * move
        centre, sigma = centre + move, sigma + widen
        if abs(move) < 1e-5 and abs(widen) < 1e-4:
            break
    if not (velocity[0] < centre < velocity[-1]) or height <= 0.0:
        return float("nan"), float("nan"), float("nan")
    return centre, float(GAUSSIAN_FWHM * sigma), float(height)


@dataclass(frozen=True, eq=False)
class Piece:
    """One order with its depths, ready to be looked up at any wavelength."""

    number: int
    wavelength: np.ndarray
    depth: np.ndarray
    variance: np.ndarray
    good: np.ndarray

    @classmethod
    def of(cls, order: Spectrum) -> Piece:
        good = order.good
        level = rough_level(order.wavelength_air, order.flux, good)
        depth = np.clip(1.0 - order.flux / level, *DEPTH_LIMITS)
        return cls(
            number=int(order.order[0]),
            wavelength=order.wavelength_air,
            depth=np.where(good, depth, 0.0),
            variance=(order.sigma / level) ** 2,
            good=good.astype(float),
        )

    def smoothed(self, sigma_kms: float) -> Piece:
        """Convolved with a Gaussian [km/s]; gaps stay gaps."""
        from scipy.ndimage import gaussian_filter1d

        step = np.median(np.diff(self.wavelength)) / np.median(self.wavelength) * LIGHT_SPEED_KMS
        width = sigma_kms / step
        share = gaussian_filter1d(self.good, width)
        depth = gaussian_filter1d(self.depth * self.good, width) / np.maximum(share, 1e-9)
        return Piece(self.number, self.wavelength, depth, self.variance, self.good)


def predicted_depths(wavelength: np.ndarray, width_ma: np.ndarray) -> np.ndarray:
    in_velocity = np.maximum(np.nan_to_num(width_ma), 0.0) * 1e-3 / wavelength * LIGHT_SPEED_KMS
    return in_velocity / (in_velocity + LINE_VELOCITY)


def covered_by(pieces: list[Piece], wavelength: np.ndarray) -> np.ndarray:
    inside = np.zeros(wavelength.size, bool)
    for piece in pieces:
        inside |= (wavelength > piece.wavelength[0]) & (wavelength < piece.wavelength[-1])
    return inside


@dataclass(frozen=True, eq=False)
class Stack:
    """Weighted depths of each line at each velocity, and the weights, shape (n_lines, n_velocities)."""

    weighted: np.ndarray
    weight: np.ndarray


def stack_of(
    pieces: list[Piece], wavelength: np.ndarray, weights: np.ndarray, velocity: np.ndarray, smooth: float = 0.0
) -> Stack:
    at = wavelength[:, None] * (1.0 + velocity / LIGHT_SPEED_KMS)
    weighted, weight = np.zeros(at.shape), np.zeros(at.shape)
    for piece in pieces:
        source = piece.smoothed(smooth) if smooth else piece
        depth = np.interp(at, source.wavelength, source.depth, left=0.0, right=0.0)
        share = np.interp(at, source.wavelength, source.good, left=0.0, right=0.0)
        noise = np.interp(wavelength, source.wavelength, source.variance)[:, None]
        part = np.where(share > 0.99, weights[:, None] / (noise + BLEND_NOISE**2), 0.0)
        weighted += part * depth
        weight += part
    return Stack(weighted, weight)


def mean_profile(stack: Stack, rows) -> np.ndarray:
    total = stack.weight[rows].sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(total > 0.0, stack.weighted[rows].sum(axis=0) / total, np.nan)


def jackknife(velocity: np.ndarray, stack: Stack, rows: np.ndarray, n_groups: int) -> float:
    """Error of the centre of the mean profile of some lines; nan with fewer than three groups that can be fitted."""
    rows = rows[stack.weight[rows].sum(axis=1) > 0.0]
    n_groups = min(n_groups, rows.size)
    if n_groups < 3:
        return float("nan")
    total, weight = stack.weighted[rows].sum(axis=0), stack.weight[rows].sum(axis=0)
    centres = []
    for group in range(n_groups):
        out = rows[group::n_groups]
        left = weight - stack.weight[out].sum(axis=0)
        with np.errstate(invalid="ignore", divide="ignore"):
            profile = np.where(left > 0.0, (total - stack.weighted[out].sum(axis=0)) / left, np.nan)
        centres.append(centre_of(velocity, profile)[0])
    centres = np.array(centres)
    centres = centres[np.isfinite(centres)]
    n = centres.size
    return float(np.sqrt((n - 1) / n * np.sum((centres - centres.mean()) ** 2))) if n >= 3 else float("nan")
