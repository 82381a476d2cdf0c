"""From a finished fit to widths: errors, cross-checks, one entry a line."""

from __future__ import annotations

import numpy as np

from . import system as systems
from .broadening import LIGHT_SPEED_KM_S
from .fit import Fit, pixel_range, weights
from .predict import TABLE_STEP, Prediction
from .system import NEIGHBOUR
from .types import Window

NEIGHBOURHOOD = 3.0
"""Half width of the range whose predicted lines say how much an unknown one may hold [Angstrom]."""
UNSEEN_PART = 0.09
"""An unknown line with more than this part of a line's width would show in the line's shape or flags; from computed
spectra (`tests/spectrum/trials.py`)."""
WINDOW_FWHM = 6.0  # half width of the pixels kept for figures, in widths of the line


def half_width(shape: np.ndarray) -> float:
    """Full width at half maximum of a shape at velocities 0, 1, 2 ... times `TABLE_STEP` [km/s]."""
    below = int(np.argmax(shape < 0.5 * shape[0]))
    if below == 0:
        return float("nan")
    high, low = shape[below - 1], shape[below]
    return 2.0 * TABLE_STEP * (below - 1 + (high - 0.5 * shape[0]) / (high - low))


def errors_of(fit: Fit) -> dict[str, np.ndarray]:
    """Variances of the targets' widths [(km/s)^2], errors of shift and stretch, and the continuum's common part.

    Returns
    -------
    dict
        ``noise``, ``lines``, ``continuum`` variances; ``shift``, ``stretch`` errors; ``covariance`` (n, n) of the
        continuum's part.
    """
    residual = fit.flux - fit.continuum * (1.0 - fit.depth)
    weight = weights(fit, residual, weigh=True)
    arguments = (fit.wavelength, fit.order, fit.lines, fit.shapes, fit.knots, fit.continuum, fit.depth)
    built = systems.build(*arguments, weight, residual, fit.reach)
    systems.add_priors(built, fit.lines, fit.knots, fit.levels, fit.priors)
    own = built.column[:-1][fit.targets]
    given = built.line_covariances(own, 4)
    variances = np.array([given[:, i, i] for i in range(3)])
    covariance, response = built.continuum_covariance()
    common = response[own] @ covariance @ response[own].T
    usable = fit.good & ~fit.cosmic
    photon = np.where(usable, 1.0 / np.where(usable, fit.sigma, 1.0) ** 2, 0.0)
    alone = systems.build(*arguments, photon, residual, fit.reach)
    systems.add_priors(alone, fit.lines, fit.knots, fit.levels, fit.priors)
    block = np.empty((own.size, 4, 4))
    for i in range(4):
        for j in range(4):
            low, high = min(i, j), max(i, j)
            block[:, i, j] = alone.band[high - low, own + low] if high - low < alone.band.shape[0] else 0.0
    return {
        "noise": np.linalg.inv(block)[:, 0, 0],
        "lines": variances[0],
        "continuum": np.diag(common).copy(),
        "covariance": common,
        "shift": np.sqrt(variances[1]),
        "stretch": np.sqrt(variances[2]),
    }


def unknown_variance(fit: Fit, prediction: Prediction, entry: int, part: float) -> float:
    """Variance that unlisted lines put into a width [(km/s)^2]: as if every predicted neighbour were one of them.

    Each of the lines predicted within `NEIGHBOURHOOD` stands for part / (1 - part) unknown ones of its width, which fall
    into the line's core by chance; one that would show in the line's shape counts up to `UNSEEN_PART` of the line.
    """
    lines = prediction.lines
    centre = fit.lines.centre[entry]
    low, high = np.searchsorted(lines.wavelength_air, [centre - NEIGHBOURHOOD, centre + NEIGHBOURHOOD])
    widths = prediction.relative_width[low:high] * LIGHT_SPEED_KM_S
    most = UNSEEN_PART * max(fit.lines.width[entry], 0.0)
    widths = np.minimum(widths[lines.own[low:high] < 0], most)
    core = fit.kernel.total + 3.0
    chance = core / LIGHT_SPEED_KM_S * centre / (2.0 * NEIGHBOURHOOD)
    return float(part / (1.0 - part) * min(chance, 1.0) * np.sum(widths**2))


def cross_checks(fit: Fit, entry: int, line: np.ndarray, others: np.ndarray, low: int, high: int, fwhm: float) -> dict:
    """Direct integration, asymmetry and chi square of one line.

    Parameters
    ----------
    line, others : ndarray, shape (high - low,)
        Fitted depths of the line and of its neighbours.
    fwhm : float
        [km/s].

    Returns
    -------
    dict
        ``integrated`` [km/s], ``integrated_error``, ``asymmetry`` (blue minus red half) [km/s], ``asymmetry_error``,
        ``chi2``, ``bad``, ``cosmic``, ``contamination``.
    """
    at = slice(low, high)
    lines = fit.lines
    velocity = (fit.wavelength[at] / lines.centre[entry] - 1.0) * LIGHT_SPEED_KM_S - lines.shift[entry]
    step = np.gradient(velocity)
    usable = fit.good[at] & ~fit.cosmic[at]
    free = fit.continuum[at] * (1.0 - others)
    data = np.where(usable, 1.0 - fit.flux[at] / free, line)
    sigma = np.where(usable, fit.sigma[at] / free, 0.0)
    reach = 1.0 * fwhm
    inside = np.clip((reach + 0.5 * step - np.abs(velocity)) / step, 0.0, 1.0)  # part of each pixel within the range
    covered = float(np.sum(inside * step * line))
    total = float(lines.width[entry])
    integrated = float(np.sum(inside * step * data)) + total - covered
    error = float(np.sqrt(np.sum((inside * step * sigma) ** 2)))
    side = np.clip(velocity / step, -0.5, 0.5) * 2.0
    left = float(-np.sum(inside * step * side * data))
    left_error = float(np.sqrt(np.sum((inside * step * side * sigma) ** 2)))
    core = (np.abs(velocity) < reach) & usable
    pull = (data - line)[core] / np.hypot(sigma[core], fit.options.shape_error * np.clip(line + others, 0, 1)[core])
    near = np.abs(velocity) < 0.5 * fwhm
    own_light = float(np.sum(np.where(near, line, 0.0)))
    other_light = float(np.sum(np.where(near, others, 0.0)))
    return {
        "integrated": integrated,
        "integrated_error": error,
        "asymmetry": left,
        "asymmetry_error": left_error,
        "chi2": float(np.mean(pull**2)) if core.any() else float("nan"),
        "bad": bool((~fit.good[at] & (np.abs(velocity) < reach)).any()),
        "cosmic": bool((fit.cosmic[at] & (np.abs(velocity) < reach)).any()),
        "contamination": abs(other_light) / max(abs(own_light), 1e-9),
    }


def depth_alone(fit: Fit, entry: int, low: int, high: int) -> np.ndarray:
    """Depth of one line at the pixels from low to high."""
    at = slice(low, high)
    one = np.array([entry])
    return systems.depth_of(fit.wavelength[at], fit.order[at], fit.lines, fit.shapes, fit.reach, one)


def window_of(fit: Fit, entry: int, level_error: float, fwhm: float) -> Window:
    """Pixels and fit around one line."""
    low, high = pixel_range(fit, entry, WINDOW_FWHM * fwhm)
    at = slice(low, high)
    continuum = fit.continuum[at]
    line = depth_alone(fit, entry, low, high)
    good = fit.good[at]
    return Window(
        wavelength_air=fit.wavelength[at].copy(),
        flux=np.where(good, fit.flux[at] / continuum, np.nan),
        sigma=np.where(good, fit.sigma[at] / continuum, np.nan),
        model=1.0 - fit.depth[at],
        line=1.0 - line,
        neighbours=(1.0 - fit.depth[at]) / (1.0 - line),
        used=good & ~fit.cosmic[at] & (fit.probability[at] > 0.5),
        continuum_error=level_error,
    )


def edge_of_order(fit: Fit, entry: int, distance: float) -> bool:
    """Whether a line's core lies within a distance [km/s] of the end of its order or of a gap in the pixels."""
    order = fit.lines.order[entry]
    low, high = np.searchsorted(fit.order, order), np.searchsorted(fit.order, order, side="right")
    w = fit.wavelength[low:high][fit.good[low:high]]
    part = distance / LIGHT_SPEED_KM_S
    centre = fit.lines.centre[entry]
    return bool(w[0] > centre * (1.0 - part) or w[-1] < centre * (1.0 + part))


def has_found_neighbour(fit: Fit, entry: int, distance: float) -> bool:
    """Whether a line that nobody predicted was found within a distance [km/s] of a line."""
    lines = fit.lines
    found = (lines.source < 0) & (lines.kind == NEIGHBOUR) & (lines.order == lines.order[entry])
    away = np.abs(lines.centre[found] / lines.centre[entry] - 1.0) * LIGHT_SPEED_KM_S
    return bool((away < distance).any())
