"""The local continuum: straight pieces between knots, found together with the lines.

A first estimate is the level of the pixels that the predicted lines leave free, chunk by chunk. The flux divided by it
is then fitted by hat functions at equal distances, in one system with all lines (`system`), so that the error of the
continuum and its effect on every width, common to neighbouring lines, come out of the same matrix.

Absorption by lines that nobody predicted is one-sided. A pixel is therefore a mixture: with some probability it holds
further absorption, exponentially distributed, else noise alone; it counts by its probability of the latter. How many
pixels hold further absorption, and how much, follows from the predicted lines (as if a part of their like were
missing); where the noise is small the residuals correct the number.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

SHALLOW = 0.005
"""Predicted depths above this say how often and how deep lines are that nobody predicted."""
LEAST_UNKNOWN_DEPTH = 0.01
LEFT_OVER = 0.5
"""Part of the unpredicted absorption that the strengths of known neighbours and lines found do not take up; from
computed spectra (`tests/spectrum/trials.py`)."""
PART_LIMITS = (1e-3, 0.3)  # of the pixels with unpredicted absorption
LEVEL_CHANGE = 0.03
"""1-sigma change of the corrected continuum from knot to knot, which bridges gaps and regions full of lines."""
LEVEL_CHANGE_NORMALISED = 0.01
FREE_OF_LINES = 0.97
"""Pixels with a predicted flux above this enter the first estimate, or the freest third of them."""
POSITIVE_OUTLIER = 5.0  # sigma


@dataclass(frozen=True, kw_only=True, eq=False)
class Knots:
    """Knots of all orders.

    Attributes
    ----------
    wavelength, order : ndarray, shape (n_knots,)
        Sorted by order, then wavelength; at least two an order that has pixels.
    left : ndarray of int, shape (n_pixels,)
        Knot at or before each pixel; the next one is of the same order.
    share : ndarray, shape (n_pixels,)
        Weight of the next knot; the left one has the rest.
    first, last : ndarray of int, shape (n_knots,)
        Pixels on which each knot's hat is not zero.
    """

    wavelength: np.ndarray
    order: np.ndarray
    left: np.ndarray
    share: np.ndarray
    first: np.ndarray
    last: np.ndarray

    def __len__(self) -> int:
        return self.wavelength.size

    def evaluate(self, values: np.ndarray) -> np.ndarray:
        """Continuum at the pixels for values at the knots."""
        return (1.0 - self.share) * values[self.left] + self.share * values[self.left + 1]


def make_knots(wavelength: np.ndarray, order: np.ndarray, spacing: float) -> Knots:
    """Knots about `spacing` Angstrom apart over the pixels of every order.

    Examples
    --------
    >>> knots = make_knots(np.linspace(5000.0, 5020.0, 100), np.zeros(100, int), 10.0)
    >>> knots.wavelength.tolist()
    [5000.0, 5010.0, 5020.0]
    """
    positions, orders, left, share, start = [], [], np.empty(order.size, int), np.empty(order.size), 0
    for number in np.unique(order):
        at = np.flatnonzero(order == number)
        w = wavelength[at]
        n = max(2, round((w[-1] - w[0]) / spacing) + 1)
        ends = (w[0], w[-1]) if w[-1] > w[0] else (w[0], w[0] + spacing)
        knots = np.linspace(*ends, n)
        index = np.clip(np.searchsorted(knots, w, side="right") - 1, 0, n - 2)
        filled = np.unique(np.concatenate([index, index + 1]))  # knots in gaps are left out
        place = np.searchsorted(filled, index)
        left[at] = start + place
        share[at] = (w - knots[index]) / (knots[index + 1] - knots[index])
        positions.append(knots[filled])
        orders.append(np.full(filled.size, number))
        start += filled.size
    n_knots = start
    first = np.full(n_knots, order.size)
    last = np.zeros(n_knots, int)
    pixels = np.arange(order.size)
    for shift in (0, 1):
        np.minimum.at(first, left + shift, pixels)
        np.maximum.at(last, left + shift, pixels + 1)
    return Knots(
        wavelength=np.concatenate(positions),
        order=np.concatenate(orders),
        left=left,
        share=share,
        first=first,
        last=last,
    )


def first_estimate(
    knots: Knots, flux: np.ndarray, sigma: np.ndarray, good: np.ndarray, model: np.ndarray
) -> np.ndarray:
    """Continuum at the pixels from the level of those that predicted lines leave free.

    Parameters
    ----------
    knots : Knots
    flux, sigma, good, model : ndarray, shape (n_pixels,)
        `model` is the predicted flux over the continuum.

    Returns
    -------
    ndarray, shape (n_pixels,)
    """
    values = np.full(len(knots), np.nan)
    ratio = flux / np.maximum(model, 0.05)
    for k in range(len(knots)):
        at = np.arange(knots.first[k], knots.last[k])
        at = at[good[at]]
        if at.size < 5:
            continue
        free = at[model[at] >= min(FREE_OF_LINES, np.quantile(model[at], 0.67))]
        level = np.median(ratio[free])
        for _ in range(5):  # one-sided: unpredicted lines pull down, cosmic rays up
            deviation = (ratio[free] - level) / (sigma[free] / model[free])
            keep = (deviation > -2.5) & (deviation < 4.0)
            if keep.sum() < 0.3 * free.size:
                break
            level = np.median(ratio[free][keep])
        values[k] = level
    known = np.isfinite(values) & (values > 0.0)
    if not known.any():
        return np.full(flux.size, np.nan)
    for number in np.unique(knots.order):
        of = np.flatnonzero(knots.order == number)
        with_level = of[known[of]]
        source = with_level if with_level.size else np.flatnonzero(known)
        values[of] = np.interp(knots.wavelength[of], knots.wavelength[source], values[source])
    return knots.evaluate(values)


@dataclass(frozen=True)
class Unpredicted:
    """Absorption that nobody predicted.

    Attributes
    ----------
    part : float
        Part of the pixels that hold some.
    depth : float
        Its mean there, in units of the continuum.
    """

    part: float
    depth: float


def expected_unpredicted(depth: np.ndarray, missing: float) -> Unpredicted:
    """What is to be expected if a part `missing` of all lines is unknown, from the depths of the known ones.

    Examples
    --------
    >>> some = expected_unpredicted(np.array([0.0, 0.0, 0.0, 0.1]), 0.2)
    >>> round(some.part, 4), round(some.depth, 2)
    (0.0312, 0.1)
    """
    with_lines = depth > SHALLOW
    share = float(with_lines.mean()) if depth.size else 0.0
    mean = float(depth[with_lines].mean()) if with_lines.any() else LEAST_UNKNOWN_DEPTH
    part = float(np.clip(LEFT_OVER * missing / (1.0 - missing) * share, *PART_LIMITS))
    return Unpredicted(part, max(mean, LEAST_UNKNOWN_DEPTH))


def noise_probability(deviation: np.ndarray, sigma: np.ndarray, unpredicted: Unpredicted) -> np.ndarray:
    """Probability that a pixel holds noise alone and no unpredicted absorption.

    Parameters
    ----------
    deviation : ndarray
        Residual over its error.
    sigma : ndarray
        Error in units of the continuum.
    unpredicted : Unpredicted

    Examples
    --------
    >>> p = noise_probability(np.array([0.0, -6.0]), np.array([0.01, 0.01]), Unpredicted(0.05, 0.04))
    >>> bool(p[0] > 0.95), bool(p[1] < 0.01)
    (True, True)
    """
    from scipy.special import log_ndtr

    mean = unpredicted.depth / sigma
    log_noise = -0.5 * deviation**2 - 0.5 * np.log(2.0 * np.pi)
    # noise minus an exponential: exponentially modified Gaussian
    log_absorbed = -np.log(mean) + deviation / mean + 0.5 / mean**2 + log_ndtr(-deviation - 1.0 / mean)
    odds = unpredicted.part / (1.0 - unpredicted.part)
    return 1.0 / (1.0 + np.exp(np.clip(log_absorbed - log_noise, -50.0, 50.0)) * odds)


def corrected(expected: Unpredicted, probability: np.ndarray, sigma: np.ndarray) -> Unpredicted:
    """The part that the probabilities show, as far as the noise lets it be seen.

    Parameters
    ----------
    expected : Unpredicted
        Beforehand.
    probability, sigma : ndarray
        Of pixels outside known deep lines; errors in units of the continuum.
    """
    if not probability.size:
        return expected
    blindness = min((float(np.median(sigma)) / (0.5 * expected.depth)) ** 2, 1e3)
    seen = float(np.mean(1.0 - probability))
    part = (blindness * expected.part + seen) / (1.0 + blindness)
    return Unpredicted(float(np.clip(part, *PART_LIMITS)), expected.depth)
