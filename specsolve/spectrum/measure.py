"""Measure the equivalent widths of a list of lines in a spectrum."""

from __future__ import annotations

import numpy as np

from specsolve.errors import SpectrumError
from specsolve.formation.spectral_lines import SpectralLines
from specsolve.lines import LineList

from . import types as t
from .broadening import LIGHT_SPEED_KM_S, Kernel
from .common import Broadening, fit_broadening
from .fit import Fit, assign_shapes, choose_kinds, find_lines, iterate, pixel_range, start_fit
from .flags import SPOILING, flags_of, telluric
from .options import MeasureOptions
from .predict import Prediction, predict
from .results import (
    cross_checks,
    depth_alone,
    edge_of_order,
    errors_of,
    half_width,
    has_found_neighbour,
    unknown_variance,
    window_of,
)
from .types import Measurements, Spectrum

FIRST_MACROTURBULENCE = 3.5
"""Before it is fitted, slow rotation included [km/s]; common practice, no source."""
UNKNOWN_INSTRUMENT = 8.0  # km/s, before the fit
NORMALISED_DEVIATION = 0.02
"""A normalised spectrum whose fitted continuum is off from 1 by more than this, in the median, is told."""


def measure_lines(
    spectrum: Spectrum,
    lines: LineList,
    neighbours: SpectralLines | None = None,
    options: MeasureOptions | None = None,
    *,
    windows: bool = True,
    prediction: Prediction | None = None,
) -> Measurements:
    """Equivalent widths of lines, each fitted together with its neighbours and the local continuum.

    Parameters
    ----------
    spectrum : Spectrum
        In the rest frame of the star.
    lines : LineList
    neighbours : SpectralLines, optional
        Lines of all elements; the packaged table if not given.
    options : MeasureOptions, optional
    windows : bool
        Keep pixels and fits for figures.
    prediction : Prediction, optional
        That of `predict` for the same lines, neighbours and guess; computed if not given.

    Returns
    -------
    Measurements
        In the order of the list; lines that the spectrum does not cover have nan and a flag.

    Raises
    ------
    SpectrumError
        The spectrum covers none of the lines.

    Examples
    --------
    >>> measured = measure_lines(spectrum, default_line_list())  # doctest: +SKIP
    """
    options = MeasureOptions() if options is None else options
    if prediction is None:
        prediction = predict(lines, options.guess, neighbours)
    fit, broadening, offset = fit_spectrum(spectrum, prediction, options)
    return collect(spectrum, lines, prediction, fit, broadening, offset, windows=windows)


def fit_spectrum(spectrum: Spectrum, prediction: Prediction, options: MeasureOptions) -> tuple[Fit, Broadening, float]:
    """The finished fit, the common broadening, and the change of the neighbours' strength [dex]."""
    instrument = LIGHT_SPEED_KM_S / spectrum.resolving_power
    known = np.isfinite(instrument)
    first = Kernel(fwhm=instrument, macroturbulence=FIRST_MACROTURBULENCE) if known else Kernel(fwhm=UNKNOWN_INSTRUMENT)
    fit = start_fit(spectrum, prediction, first, options)
    if fit is None or fit.targets.size == 0:
        raise SpectrumError(
            f"{spectrum.star}: the spectrum covers none of the lines of the list.", path=spectrum.path or spectrum.star
        )
    broadening = _apply(fit, prediction, instrument)
    for _ in range(2):
        iterate(fit, prediction, weigh=False)
    offset = _offset(fit, prediction)
    broadening = _apply(fit, prediction, instrument)
    for round_ in range(3):
        iterate(fit, prediction, weigh=True)
        if round_ < 2:
            find_lines(fit)
    common = float(np.median(fit.lines.shift[fit.targets]))
    fit.lines.shift[fit.lines.own < 0] += common
    broadening = _apply(fit, prediction, instrument)
    for _ in range(2):
        iterate(fit, prediction, weigh=True)
    return fit, broadening, offset


def _apply(fit: Fit, prediction: Prediction, instrument: float) -> Broadening:
    """Fit the common broadening and take it over."""
    broadening = fit_broadening(fit, prediction, instrument)
    fit.kernel = broadening.kernel
    fit.shapes = prediction.broadened(fit.kernel)
    fit.lines.stretch[fit.targets] = 1.0
    fit.update_depth()
    return broadening


def _offset(fit: Fit, prediction: Prediction) -> float:
    """Bring the neighbours to the strength that the lines to measure show [dex]; the guess may be off in metallicity."""
    own = fit.targets
    lines = fit.lines
    ratio = lines.width[own] / lines.prior_width[own]
    sure = (ratio > 0.0) & (lines.width[own] * fit.shapes[lines.row[own], 0] > 0.03)
    if sure.sum() < 8:
        return 0.0
    # by the family's curve of growth, found by halving steps: which dA makes the median ratio one
    low, high = -1.5, 1.5
    source = lines.source[own][sure]
    fitted = lines.width[own][sure] / LIGHT_SPEED_KM_S
    for _ in range(12):
        middle = 0.5 * (low + high)
        if np.median(np.log(fitted / prediction.scaled(middle)[source])) > 0.0:
            low = middle
        else:
            high = middle
    offset = 0.5 * (low + high)
    scaled = prediction.scaled(offset) * LIGHT_SPEED_KM_S
    others = (lines.own < 0) & (lines.source >= 0)
    change = scaled[lines.source[others]] / lines.prior_width[others]
    lines.prior_width[others] *= change
    lines.width[others] *= change
    choose_kinds(fit)
    assign_shapes(lines, prediction)
    fit.update_depth()
    return float(offset)


def collect(
    spectrum: Spectrum,
    lines: LineList,
    prediction: Prediction,
    fit: Fit,
    broadening: Broadening,
    offset: float,
    *,
    windows: bool,
) -> Measurements:
    """Put the finished fit into one entry a line; of several orders the one with the smallest error counts."""
    n = len(lines)
    entries = fit.targets
    errors = errors_of(fit)
    to_ma = 1e3 * fit.lines.centre[entries] / LIGHT_SPEED_KM_S
    total_before = errors["noise"] + errors["continuum"]
    at_edge = np.array([edge_of_order(fit, j, fit.kernel.total) for j in entries], bool)
    best = np.full(n, -1)
    for k in np.lexsort((total_before, at_edge))[::-1]:
        best[fit.lines.own[entries[k]]] = k
    chosen = best[best >= 0]
    columns = {
        name: np.full(n, np.nan)
        for name in (
            "equivalent_width", "equivalent_width_error", "noise_error", "continuum_error", "blend_error", "upper_limit",
            "integrated_width", "depth", "line_fwhm", "line_shift", "chi2",
        )
    }  # fmt: skip
    more = {
        name: np.full(chosen.size, np.nan)
        for name in ("difference_error", "asymmetry", "asymmetry_error", "contamination")
    }
    marks = {name: np.zeros(chosen.size, bool) for name in ("bad", "cosmic")}
    kept: list = [None] * n
    numbers = fit.lines.own[entries[chosen]]
    level_error = _level_errors(fit, entries[chosen])
    for i, k in enumerate(chosen):
        j, line = entries[k], numbers[i]
        scale = to_ma[k]
        shape = (1.0 - fit.lines.share[j]) * fit.shapes[fit.lines.row[j]] + fit.lines.share[j] * fit.shapes[
            fit.lines.row[j] + 1
        ]
        fwhm = half_width(shape) * fit.lines.stretch[j]
        low, high = pixel_range(fit, j, 1.2 * fwhm + 2.0)
        alone = depth_alone(fit, j, low, high)
        others = 1.0 - (1.0 - fit.depth[low:high]) / (1.0 - alone)
        checks = cross_checks(fit, j, alone, others, low, high, fwhm)
        width = fit.lines.width[j]
        unknown = unknown_variance(fit, prediction, j, fit.options.unknown_part)
        noise = errors["noise"][k]
        blend = max(errors["lines"][k] - noise, 0.0) + unknown
        columns["equivalent_width"][line] = width * scale
        columns["noise_error"][line] = np.sqrt(noise) * scale
        columns["continuum_error"][line] = np.sqrt(errors["continuum"][k]) * scale
        columns["blend_error"][line] = np.sqrt(blend) * scale
        columns["equivalent_width_error"][line] = np.sqrt(noise + errors["continuum"][k] + blend) * scale
        columns["integrated_width"][line] = checks["integrated"] * scale
        columns["depth"][line] = width * shape[0] / fit.lines.stretch[j]
        columns["line_fwhm"][line] = fwhm
        columns["line_shift"][line] = fit.lines.shift[j]
        columns["chi2"][line] = checks["chi2"]
        safe = max(abs(width), 1e-6)
        more["difference_error"][i] = checks["integrated_error"] / safe
        more["asymmetry"][i] = checks["asymmetry"] / safe
        more["asymmetry_error"][i] = checks["asymmetry_error"] / safe
        more["contamination"][i] = checks["contamination"]
        found = has_found_neighbour(fit, j, 1.0 * fwhm)
        more["contamination"][i] += 1.0 if found else 0.0
        for name in marks:
            marks[name][i] = checks[name]
        if windows:
            kept[line] = window_of(fit, j, level_error[i], fwhm)
    columns["upper_limit"] = 3.0 * columns["equivalent_width_error"]
    flags = np.full(n, t.FLAG_NOT_COVERED, np.int64)
    j = entries[chosen]
    width = columns["equivalent_width"][numbers]
    flags[numbers] = flags_of(
        width=width,
        error=columns["equivalent_width_error"][numbers],
        noise_error=columns["noise_error"][numbers],
        continuum_error=columns["continuum_error"][numbers],
        neighbour_error=np.sqrt(np.maximum(errors["lines"] - errors["noise"], 0.0))[chosen] * to_ma[chosen],
        relative_width=1e-3 * width / lines.wavelength_air[numbers],
        shift=fit.lines.shift[j] - np.median(fit.lines.shift[j]),
        shift_error=errors["shift"][chosen],
        stretch=np.log(fit.lines.stretch[j]),
        stretch_error=errors["stretch"][chosen],
        difference=(columns["integrated_width"][numbers] - width) / np.maximum(np.abs(width), 1e-3),
        chi2=columns["chi2"][numbers],
        edge=at_edge[chosen],
        telluric=telluric(lines.wavelength_air[numbers], spectrum.velocity),
        **more,
        **marks,
    )
    groups = np.full(n, -1, np.int64)
    groups[numbers] = np.searchsorted(
        fit.knots.wavelength + 1e5 * fit.knots.order, fit.lines.centre[j] + 1e5 * fit.lines.order[j]
    )
    predicted = np.full(n, np.nan)
    of = prediction.lines.own >= 0
    predicted[prediction.lines.own[of]] = 1e3 * (prediction.scaled(offset) * prediction.lines.wavelength_air)[of]
    orders = np.full(n, -1, np.int64)
    orders[numbers] = fit.lines.order[j]
    return Measurements(
        star=spectrum.star,
        wavelength_air=lines.wavelength_air,
        ion=lines.ion,
        excitation_potential=lines.excitation_potential,
        log_gf=lines.log_gf,
        predicted_width=predicted,
        continuum_group=groups,
        order=orders,
        flags=flags,
        use=(flags & SPOILING) == 0,
        windows=tuple(kept) if windows else (),
        broadening=fit.kernel.total,
        broadening_error=broadening.error,
        rotation=fit.kernel.vsini if fit.kernel.vsini > 0.0 else float("nan"),
        notes=notes_of(spectrum, fit, broadening, offset),
        **columns,
    )


def _level_errors(fit: Fit, entries: np.ndarray) -> np.ndarray:
    """Relative error of the continuum at lines: noise of the pixels of a knot's hat that are free of lines."""
    usable = fit.good & ~fit.cosmic
    weight = np.where(
        usable, fit.probability * np.clip(1.0 - fit.depth, 0.0, 1.0) ** 2 / np.where(usable, fit.sigma, 1.0) ** 2, 0.0
    )
    total = np.zeros(len(fit.knots))
    np.add.at(total, fit.knots.left, weight * (1.0 - fit.knots.share))
    np.add.at(total, fit.knots.left + 1, weight * fit.knots.share)
    error = 1.0 / np.sqrt(np.maximum(total, 1e-12))
    place = np.array(
        [
            np.argmin(
                np.abs(fit.knots.wavelength - fit.lines.centre[j]) + 1e5 * (fit.knots.order != fit.lines.order[j])
            )
            for j in entries
        ],
        int,
    )
    return error[place] if entries.size else np.empty(0)


def notes_of(spectrum: Spectrum, fit: Fit, broadening: Broadening, offset: float) -> tuple[str, ...]:
    """What a person should know of the fit, one sentence each."""
    notes = []
    rotating = fit.kernel.vsini > 0.0
    words = f"common broadening {fit.kernel.total:.2f} km/s"
    if rotating:
        words += f" with v sin i {fit.kernel.vsini:.1f} km/s"
    notes.append(f"{words}, from {broadening.n_lines} lines.")
    if fit.kernel.vsini > fit.options.vsini_limit:
        notes.append(
            f"rotation of {fit.kernel.vsini:.0f} km/s: widths are validated up to v sin i {fit.options.vsini_limit:.0f} km/s."
        )
    level = fit.scale * fit.continuum
    if spectrum.normalised:
        deviation = float(np.median(np.abs(level - 1.0)))
        notes.append(
            f"normalised spectrum: local continuum {np.median(level):.4f}, median deviation from 1 {deviation:.4f}."
        )
        if deviation > NORMALISED_DEVIATION:
            notes.append("the continuum of this spectrum is not at 1; the local fit was used.")
    if abs(offset) > 0.3:
        notes.append(
            f"lines are {offset:+.2f} dex from the guess of the star; a better guess predicts neighbours better."
        )
    return tuple(notes)
