"""The simultaneous fit of lines, neighbours and continuum: iteration, weights, found lines, common broadening."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from . import system as systems
from .broadening import FWHM_PER_SIGMA, LIGHT_SPEED_KM_S, Kernel
from .continuum import (
    LEVEL_CHANGE,
    LEVEL_CHANGE_NORMALISED,
    POSITIVE_OUTLIER,
    Knots,
    Unpredicted,
    corrected,
    expected_unpredicted,
    first_estimate,
    make_knots,
    noise_probability,
)
from .options import MeasureOptions
from .predict import OWN_STEP, Prediction
from .system import FIXED, NEIGHBOUR, TARGET, Lines, Priors
from .types import Spectrum

FOUND_SIGNIFICANCE = 5.0
"""Absorption that nobody predicted becomes a line of its own above this many sigma ..."""
FOUND_DEPTH = 0.01  # ... and this depth
FOUND_ERROR = 1.0  # of ln W, beforehand
COSMIC_SHAPE_ERROR = 0.04
"""A line that is less deep than fitted by less than 5 times this part of its depth is no cosmic ray."""
LARGEST_STRETCH = 0.5  # |ln| of the factor on a line's width
LARGEST_SHIFT = 4.0  # km/s
LARGEST_WING = 2.0  # steps of the shapes, 0.8 dex
LEAST_LEVEL = 0.2  # of the corrected continuum
LARGEST_STEP = 1.0  # in ln W of a neighbour, an iteration


@dataclass(kw_only=True, eq=False)
class Fit:
    """State of the fit of one spectrum.

    Attributes
    ----------
    wavelength, order : ndarray, shape (n_pixels,)
        Pixels near the lines to measure.
    flux, sigma : ndarray, shape (n_pixels,)
        Over the first estimate of the continuum.
    good : ndarray of bool
    scale : ndarray
        First estimate of the continuum.
    cosmic : ndarray of bool
        Pixels left out as too bright.
    lines : Lines
    shapes : ndarray, shape (n_rows, n)
        Broadened.
    knots : Knots
    levels : ndarray, shape (n_knots,)
        Corrected continuum at the knots.
    kernel : Kernel
        Common broadening.
    expected, unpredicted : Unpredicted
        Absorption that nobody predicted, beforehand and as found.
    probability : ndarray, shape (n_pixels,)
        That a pixel holds none.
    depth, continuum : ndarray, shape (n_pixels,)
        Of all lines together, and corrected continuum, about 1.
    """

    wavelength: np.ndarray
    order: np.ndarray
    flux: np.ndarray
    sigma: np.ndarray
    good: np.ndarray
    scale: np.ndarray
    cosmic: np.ndarray
    lines: Lines
    shapes: np.ndarray
    knots: Knots
    levels: np.ndarray
    kernel: Kernel
    options: MeasureOptions
    priors: Priors
    expected: Unpredicted | None = None
    unpredicted: Unpredicted | None = None
    probability: np.ndarray = field(default_factory=lambda: np.empty(0))
    depth: np.ndarray = field(default_factory=lambda: np.empty(0))
    continuum: np.ndarray = field(default_factory=lambda: np.empty(0))

    @property
    def reach(self) -> float:
        """Least distance to which lines are followed [km/s]."""
        return 1.2 * self.kernel.total + 4.0

    @property
    def targets(self) -> np.ndarray:
        """Entries of the lines to measure."""
        return np.flatnonzero(self.lines.kind == TARGET)

    def move_continuum(self, step: np.ndarray) -> None:
        """Change the levels at the knots."""
        self.levels = np.maximum(self.levels + step, LEAST_LEVEL)
        self.continuum = self.knots.evaluate(self.levels)

    def update_depth(self) -> None:
        """Depth of all lines together."""
        self.depth = systems.depth_of(self.wavelength, self.order, self.lines, self.shapes, self.reach)

    def near_targets(self, distance: float) -> np.ndarray:
        """True for pixels within a distance [km/s] of a line to measure."""
        near = np.zeros(self.wavelength.size, bool)
        for j in self.targets:
            low, high = pixel_range(self, j, distance)
            near[low:high] = True
        return near

    def model_error(self) -> np.ndarray:
        """Error of the pixels including that of the shapes of the lines, which grows with the depth."""
        return np.hypot(self.sigma, self.options.shape_error * np.clip(self.depth, 0.0, 1.0))


def pixel_range(fit: Fit, entry: int, distance: float) -> tuple[int, int]:
    """Pixels of a line's order within a distance [km/s] of its centre."""
    order = fit.lines.order[entry]
    low, high = np.searchsorted(fit.order, order), np.searchsorted(fit.order, order, side="right")
    centre, part = fit.lines.centre[entry], distance / LIGHT_SPEED_KM_S
    w = fit.wavelength[low:high]
    return (
        int(low + np.searchsorted(w, centre * (1.0 - part))),
        int(low + np.searchsorted(w, centre * (1.0 + part))),
    )


def start_fit(spectrum: Spectrum, prediction: Prediction, kernel: Kernel, options: MeasureOptions) -> Fit | None:
    """Choose pixels and entries, and make the first estimate of the continuum; None if no line is covered."""
    own = prediction.lines.wavelength_air[prediction.lines.own >= 0]
    w = spectrum.wavelength_air
    near = np.searchsorted(own, w + options.window) > np.searchsorted(own, w - options.window)
    near &= np.isfinite(w)
    wavelength, order = w[near], spectrum.order[near]
    good = ~spectrum.mask[near] & np.isfinite(spectrum.flux[near]) & (spectrum.sigma[near] > 0.0)
    if good.sum() < 20:
        return None
    keep = np.flatnonzero(np.isin(order, np.unique(order[good])))
    wavelength, order, good = wavelength[keep], order[keep], good[keep]
    flux = np.where(good, spectrum.flux[near][keep], 1.0)
    sigma = np.where(good, spectrum.sigma[near][keep], np.inf)
    lines = entries(prediction, wavelength, order)
    shapes = prediction.broadened(kernel)
    assign_shapes(lines, prediction)
    knots = make_knots(wavelength, order, options.knot_spacing)
    reach = 1.2 * kernel.total + 4.0
    depth = systems.depth_of(wavelength, order, lines, shapes, reach)
    scale = first_estimate(knots, flux, sigma, good, 1.0 - np.clip(depth, 0.0, 0.95))
    if not np.all(np.isfinite(scale) & (scale > 0.0)):
        return None
    change = LEVEL_CHANGE_NORMALISED if spectrum.normalised else LEVEL_CHANGE
    fit = Fit(
        wavelength=wavelength,
        order=order,
        flux=flux / scale,
        sigma=sigma / scale,
        good=good,
        scale=scale,
        cosmic=np.zeros(good.size, bool),
        lines=lines,
        shapes=shapes,
        knots=knots,
        levels=np.ones(len(knots)),
        kernel=kernel,
        options=options,
        priors=Priors(
            shift=options.shift_error,
            stretch=options.stretch_error,
            wing=options.wing_error / OWN_STEP,
            level_change=change,
        ),
        probability=np.ones(good.size),
    )
    fit.move_continuum(np.zeros(len(knots)))
    choose_kinds(fit)
    fit.update_depth()
    return fit


def entries(prediction: Prediction, wavelength: np.ndarray, order: np.ndarray) -> Lines:
    """One entry for each line and each order that covers it."""
    source, numbers = [], []
    centre = prediction.lines.wavelength_air
    for number in np.unique(order):
        w = wavelength[order == number]
        inside = np.flatnonzero((centre > w[0] - 2.0) & (centre < w[-1] + 2.0))
        source.append(inside)
        numbers.append(np.full(inside.size, number))
    source = np.concatenate(source)
    numbers = np.concatenate(numbers)
    width = prediction.relative_width[source] * LIGHT_SPEED_KM_S
    n = source.size
    return Lines(
        source=source,
        own=prediction.lines.own[source],
        order=numbers,
        centre=centre[source].copy(),
        kind=np.zeros(n, np.int64),
        width=width.copy(),
        prior_width=width.copy(),
        prior_error=np.zeros(n),
        shift=np.zeros(n),
        stretch=np.ones(n),
        wing=np.zeros(n),
        row=np.zeros(n, np.int64),
        share=np.zeros(n),
    )


def assign_shapes(lines: Lines, prediction: Prediction) -> None:
    """Shapes that fit the present widths, in place."""
    family = prediction.shape_width[prediction.family]
    logarithm = np.log10(np.maximum(lines.width / LIGHT_SPEED_KM_S, 1e-9))
    at = np.clip(np.searchsorted(family, logarithm) - 1, 0, family.size - 2)
    lines.row[:] = prediction.family.start + at
    lines.share[:] = np.clip((logarithm - family[at]) / (family[at + 1] - family[at]), 0.0, 1.0)
    own = np.flatnonzero(lines.own >= 0)
    lines.row[own], lines.share[own] = prediction.rows_for(
        lines.source[own], lines.width[own] / LIGHT_SPEED_KM_S, lines.wing[own]
    )


def choose_kinds(fit: Fit) -> None:
    """Lines to measure, neighbours with a free strength, and the haze of weak ones, in place."""
    lines = fit.lines
    own = own_entries(fit)
    peak = lines.width * fit.shapes[lines.row, 0]
    noise = float(np.median(fit.sigma[fit.good])) if fit.good.any() else 0.0
    least = max(fit.options.least_neighbour_depth, 0.6 * noise)  # shallower ones the data cannot correct
    lines.kind[:] = np.where(peak > least, NEIGHBOUR, FIXED)
    lines.prior_error[:] = np.where(lines.source >= 0, fit.options.neighbour_error, FOUND_ERROR)
    lines.kind[own] = TARGET


def own_entries(fit: Fit) -> np.ndarray:
    """Entries of the list's lines that have pixels."""
    known = np.flatnonzero(fit.lines.own >= 0)
    covered = []
    for j in known:
        low, high = pixel_range(fit, j, 0.4 * fit.kernel.total + 1.0)
        if high - low >= 2 and fit.good[low:high].mean() >= 0.5:
            covered.append(j)
    return np.array(covered, dtype=np.int64)


def iterate(fit: Fit, prediction: Prediction, *, weigh: bool) -> None:
    """One Gauss-Newton step, in place.

    Parameters
    ----------
    fit : Fit
    prediction : Prediction
    weigh : bool
        Let pixels count by their probability of holding noise alone, and leave cosmic rays out.
    """
    continuum = fit.continuum
    residual = fit.flux - continuum * (1.0 - fit.depth)
    weight = weights(fit, residual, weigh=weigh)
    built = systems.build(
        fit.wavelength,
        fit.order,
        fit.lines,
        fit.shapes,
        fit.knots,
        continuum,
        fit.depth,
        weight,
        residual,
        fit.reach,
    )
    systems.add_priors(built, fit.lines, fit.knots, fit.levels, fit.priors)
    step, step_knots = built.solve()
    lines, column = fit.lines, built.column[:-1]
    near = np.flatnonzero(lines.kind == NEIGHBOUR)
    lines.width[near] *= np.exp(np.clip(step[column[near]], -LARGEST_STEP, LARGEST_STEP))
    own = fit.targets
    lines.width[own] += step[column[own]]
    lines.shift[own] = np.clip(lines.shift[own] + step[column[own] + 1], -LARGEST_SHIFT, LARGEST_SHIFT)
    stretch = np.log(lines.stretch[own]) + np.clip(step[column[own] + 2], -0.2, 0.2)
    lines.stretch[own] = np.exp(np.clip(stretch, -LARGEST_STRETCH, LARGEST_STRETCH))
    lines.wing[own] = np.clip(lines.wing[own] + np.clip(step[column[own] + 3], -0.5, 0.5), -LARGEST_WING, LARGEST_WING)
    fit.move_continuum(step_knots)
    assign_shapes(lines, prediction)
    fit.update_depth()


def weights(fit: Fit, residual: np.ndarray, *, weigh: bool) -> np.ndarray:
    """Inverse variances of the pixels; updates the probabilities and the cosmic rays of the fit."""
    error = fit.model_error()
    deviation = np.where(fit.good, residual / error, 0.0)
    if weigh:
        relative = np.where(fit.good, error / fit.continuum, 1.0)
        if fit.expected is None:
            fit.expected = fit.unpredicted = expected_unpredicted(fit.depth, fit.options.unknown_part)
        probability = noise_probability(deviation, relative, fit.unpredicted)
        core = fit.near_targets(0.6 * fit.kernel.total)
        among = fit.good & ~core & (fit.depth < 0.3)
        fit.unpredicted = corrected(fit.expected, probability[among], relative[among])
        fit.probability = np.where(core, 1.0, probability)
        coarse = np.hypot(fit.sigma, COSMIC_SHAPE_ERROR * np.clip(fit.depth, 0.0, 1.0))
        fit.cosmic = fit.good & (residual > POSITIVE_OUTLIER * coarse)
    usable = fit.good & ~fit.cosmic
    return np.where(usable, fit.probability / np.where(usable, error, 1.0) ** 2, 0.0)


def find_lines(fit: Fit) -> int:
    """Add lines where absorption is left that nobody predicted; returns how many."""
    width = fit.kernel.total + 1.5  # an unbroadened weak line's own width adds little
    residual = fit.flux - fit.continuum * (1.0 - fit.depth)
    inverse = np.where(fit.good & ~fit.cosmic, 1.0 / np.where(fit.good, fit.model_error(), 1.0) ** 2, 0.0)
    centres, numbers, widths = [], [], []
    for number in np.unique(fit.order):
        at = np.flatnonzero(fit.order == number)
        if at.size < 10:
            continue
        w = fit.wavelength[at]
        step = LIGHT_SPEED_KM_S * float(np.median(np.diff(np.log(w))))
        half = max(2, int(np.ceil(1.5 * width / step)))
        velocity = np.arange(-half, half + 1) * step
        kernel = np.exp(-0.5 * (velocity * FWHM_PER_SIGMA / width) ** 2)
        power = np.convolve(inverse[at], kernel**2, mode="same")
        amplitude = np.convolve(inverse[at] * residual[at], kernel, mode="same") / np.maximum(power, 1e-30)
        significance = amplitude * np.sqrt(power)
        lowest = np.flatnonzero(
            (significance[1:-1] < np.minimum(significance[:-2], significance[2:]))
            & (significance[1:-1] < -FOUND_SIGNIFICANCE)
            & (amplitude[1:-1] < -FOUND_DEPTH)
        )
        lowest += 1
        own = fit.lines.centre[(fit.lines.order == number) & (fit.lines.kind == TARGET)]
        known = fit.lines.centre[(fit.lines.order == number) & (fit.lines.kind == NEIGHBOUR)]
        for place in lowest:
            distance = [
                np.min(np.abs(others / w[place] - 1.0), initial=1.0) * LIGHT_SPEED_KM_S for others in (own, known)
            ]
            if distance[0] > 0.6 * width and distance[1] > 0.35 * width:
                centres.append(w[place])
                numbers.append(number)
                widths.append(-amplitude[place] * width * np.sqrt(np.pi / (4.0 * np.log(2.0))))
    if centres:
        fit.lines = added(fit.lines, np.array(centres), np.array(numbers), np.array(widths))
    return len(centres)


def added(lines: Lines, centre: np.ndarray, order: np.ndarray, width: np.ndarray) -> Lines:
    """The lines and further found ones, sorted by order and wavelength."""
    n = centre.size
    further = {
        "source": np.full(n, -1),
        "own": np.full(n, -1),
        "order": order,
        "centre": centre,
        "kind": np.full(n, NEIGHBOUR),
        "width": width,
        "prior_width": width.copy(),
        "prior_error": np.full(n, FOUND_ERROR),
        "shift": np.zeros(n),
        "stretch": np.ones(n),
        "wing": np.zeros(n),
        "row": np.zeros(n, np.int64),
        "share": np.zeros(n),
    }
    joined = {name: np.concatenate([values, further[name]]) for name, values in vars(lines).items()}
    ranks = np.lexsort((joined["centre"], joined["order"]))
    return Lines(**{name: values[ranks] for name, values in joined.items()})
