"""Orders that overlap: do they agree, and one spectrum of them where that is wanted."""

from __future__ import annotations

from itertools import pairwise

import numpy as np

from .mean_profile import LIGHT_SPEED_KMS, rough_level
from .types import Spectrum

LEAST_OVERLAP = 30  # pixels
LEVEL_DIFFERENCE = 0.05
"""Relative difference of normalised orders in their overlap that is told: more than any continuum fit should leave."""
SHIFT_DIFFERENCE = 1.0  # km/s
SIGNIFICANT = 5.0


def overlap_notes(spectrum: Spectrum) -> tuple[str, ...]:
    """What neighbouring orders disagree about where they overlap.

    The second order is fitted by the first, scaled and shifted: f2 = a f1 + s lambda/c df1/dlambda.

    Returns
    -------
    tuple of str
        One sentence for each overlap that does not fit.
    """
    notes = []
    orders = spectrum.orders()
    for first, second in pairwise(orders):
        inside = (second.wavelength_air <= first.wavelength_air[-1]) & second.good
        if inside.sum() < LEAST_OVERLAP:
            continue
        wave = second.wavelength_air[inside]
        with_gaps = np.interp(wave, first.wavelength_air, first.mask.astype(float)) > 0.0
        if (~with_gaps).sum() < LEAST_OVERLAP:
            continue
        wave = wave[~with_gaps]
        values, errors = second.flux[inside][~with_gaps], second.sigma[inside][~with_gaps]
        one = np.interp(wave, first.wavelength_air, first.flux)
        variance = errors**2 + np.interp(wave, first.wavelength_air, first.sigma) ** 2
        everywhere = np.ones(wave.size, bool)
        level = rough_level(wave, values, everywhere) / rough_level(wave, one, everywhere)
        one, slope = one * level, np.gradient(one * level, wave) * wave / LIGHT_SPEED_KMS
        design = np.stack([one, -slope], 1) / np.sqrt(variance)[:, None]
        inverse = np.linalg.pinv(design.T @ design)
        scale, shift = inverse @ design.T @ (values / np.sqrt(variance))
        chi2 = float(np.mean((values - scale * one + shift * slope) ** 2 / variance))
        error = float(np.sqrt(inverse[1, 1] * max(chi2, 1.0) * spectrum.correlation))
        names = f"orders {int(first.order[0])} and {int(second.order[0])}"
        where = f"{wave[0]:.1f}-{wave[-1]:.1f} Angstrom"
        difference = float(np.median(level)) - 1.0
        if spectrum.normalised and abs(difference) > LEVEL_DIFFERENCE:
            notes.append(f"{names} differ by {100.0 * difference:+.0f} % in their overlap ({where})")
        if abs(shift) > max(SHIFT_DIFFERENCE, SIGNIFICANT * error):
            notes.append(f"{names} are shifted by {shift:+.1f} km/s against each other in their overlap ({where})")
    return tuple(notes)


def merged(spectrum: Spectrum) -> Spectrum:
    """One order of all: in each overlap the pixels up to the point where the next order has the better signal.

    Nothing is interpolated, so the noise of the pixels stays independent. Orders that are not normalised are brought to
    one level by their overlaps.

    Examples
    --------
    >>> one = Spectrum.from_arrays("A", [1.0, 2, 3, 2.5, 3.5], [1.0] * 5, sigma=[0.1, 0.1, 0.2, 0.1, 0.1],
    ...                            order=[0, 0, 0, 1, 1])
    >>> merged(one).wavelength_air
    array([1. , 2. , 2.5, 3.5])
    """
    orders = spectrum.orders()
    result = orders[0]
    for following in orders[1:]:
        start, end = following.wavelength_air[0], result.wavelength_air[-1]
        if start >= end:
            result = _joined(result, following)
            continue
        if not spectrum.normalised:
            following = _levelled(result, following)
        at = np.linspace(start, end, 101)
        ours, theirs = _signal(result, at), _signal(following, at)
        better = np.flatnonzero(theirs >= ours)
        cut = float(at[better[0]]) if better.size else end
        kept = result.select(result.wavelength_air < cut)
        result = _joined(kept, following.select(following.wavelength_air >= cut)) if kept.n_pixels else following
    return result.replace(order=np.zeros(result.n_pixels, np.int64))


def _signal(one: Spectrum, wavelength: np.ndarray) -> np.ndarray:
    """Signal to noise of pixels, smooth; 0 outside and in gaps."""
    ratio = np.where(one.mask, 0.0, one.flux / one.sigma)
    size = min(51, ratio.size)
    smooth = np.convolve(ratio, np.ones(size) / size, mode="same") if ratio.size > size else ratio
    return np.interp(wavelength, one.wavelength_air, smooth, left=0.0, right=0.0)


def _levelled(first: Spectrum, second: Spectrum) -> Spectrum:
    inside = (second.wavelength_air <= first.wavelength_air[-1]) & second.good
    if inside.sum() < LEAST_OVERLAP:
        return second
    there = np.interp(second.wavelength_air[inside], first.wavelength_air, first.flux)
    ratio = float(np.median(there) / np.median(second.flux[inside]))
    return second.replace(flux=second.flux * ratio, sigma=second.sigma * ratio) if ratio > 0.0 else second


def _joined(first: Spectrum, second: Spectrum) -> Spectrum:
    names = ("wavelength_air", "flux", "sigma", "mask", "order")
    return first.replace(**{name: np.concatenate([getattr(first, name), getattr(second, name)]) for name in names})
