"""Figures of a measured spectrum: an overview, and its lines in pages that can be leafed through, worst first.

A panel answers one question: is this area the equivalent width of this line? The area itself is filled; the neighbours
that were taken out, the band in which the continuum may lie, the pixels left out, and the residuals below in sigma show
what could be wrong with it.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.errors import OutputError, UsageError
from specsolve.report.panels import BAND_COLOUR, DROPPED_COLOUR, FAINT, GHOST_COLOUR, INK, ION_COLOURS
from specsolve.spectrum.mean_profile import LIGHT_SPEED_KMS, rough_level
from specsolve.spectrum.types import FLAG_NOT_COVERED, FLAG_SATURATED, words_of_flags

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from specsolve.measuring import Measured
    from specsolve.spectrum.types import Measurements, Window

PAGE_INCHES = (11.69, 8.27)  # A4, landscape
ROWS, COLUMNS = 4, 6
STYLE = {
    "font.size": 6.5,
    "axes.titlesize": 6.5,
    "axes.labelsize": 6.5,
    "axes.linewidth": 0.5,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.labelsize": 5.5,
    "ytick.labelsize": 5.5,
    "legend.fontsize": 6,
    "axes.edgecolor": INK,
    "text.color": INK,
}
DPI = 110
HALF_RANGE = 2.6
"""Half width of a panel in widths of the line."""
RESIDUAL_SHARE = 0.22
"""Part of a panel's height for the residuals."""
RESIDUAL_LIMIT = 4.0  # sigma
ENVELOPE_POINTS = 1500
"""Points across the overview: each holds the extremes of the pixels below it."""
OVERVIEW_ROWS = 3
LONGEST_FLAGS = 44  # letters


def badness(found: Measurements) -> np.ndarray:
    """How much each line deserves a look: misfit, disagreement with integration, relative error, flags; the more the worse.

    Returns
    -------
    ndarray, shape (n_lines,)
        nan where the spectrum does not cover the line.
    """
    width, error = np.abs(found.equivalent_width), found.equivalent_width_error
    with np.errstate(invalid="ignore", divide="ignore"):
        misfit = np.log1p(np.maximum(found.chi2, 0.0))
        apart = np.abs(found.integrated_width - found.equivalent_width) / np.maximum(error, 1e-3)
        relative = np.minimum(error / np.maximum(width, 1e-3), 3.0)
    telling = found.flags & ~FLAG_SATURATED
    count = np.array([bin(bits).count("1") for bits in telling.tolist()], dtype=float)
    score = misfit + 0.3 * np.nan_to_num(apart) + relative + 0.7 * count + np.where(found.use, 0.0, 2.0)
    return np.where((found.flags & FLAG_NOT_COVERED) != 0, np.nan, score)


def line_pages(one: Measured) -> Iterable[Figure]:
    """One figure for every 24 lines, worst lines first."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    found = one.measurements
    score = badness(found)
    order = [int(i) for i in np.argsort(-np.nan_to_num(score, nan=-1.0), kind="stable") if np.isfinite(score[i])]
    order = [i for i in order if i < len(found.windows) and found.windows[i] is not None]
    per_page = ROWS * COLUMNS
    n_pages = max(1, -(-len(order) // per_page))
    for page in range(n_pages):
        with rc_context(STYLE):
            figure = Figure(figsize=PAGE_INCHES)
            figure.text(0.03, 0.975, one.star, fontsize=10, weight="bold", parse_math=False)
            figure.text(
                0.97,
                0.977,
                f"page {page + 1} of {n_pages}, worst lines first; red words: not used   filled: the line   "
                "dotted: neighbours   band: continuum   cross: left out   below: residuals (±4 sigma)",
                ha="right",
                color=FAINT,
                parse_math=False,
            )
            for place, i in enumerate(order[page * per_page : (page + 1) * per_page]):
                row, column = divmod(place, COLUMNS)
                axes = figure.add_axes(
                    (0.03 + column * 0.161, 0.955 - (row + 1) * 0.2345 + 0.022, 0.147, 0.2345 - 0.062)
                )
                draw_line(axes, found, i)
            yield figure


def draw_line(axes: Axes, found: Measurements, i: int) -> None:
    """One line: pixels, fit, neighbours, continuum band, and residuals below."""
    window: Window = found.windows[i]
    velocity = (window.wavelength_air / found.wavelength_air[i] - 1.0) * LIGHT_SPEED_KMS
    colour = ION_COLOURS.get(str(found.ion[i]), INK)
    half = HALF_RANGE * float(found.line_fwhm[i]) if np.isfinite(found.line_fwhm[i]) else 40.0
    near = np.abs(velocity) <= half
    shown = window.flux[near]
    lowest = np.nanmin(np.r_[shown, window.model[near], 0.95]) if near.any() else 0.5
    top = max(1.04, float(np.nanpercentile(np.r_[shown, 1.0], 98)) + 0.02)
    depth = top - max(float(lowest), -0.1)
    bottom = top - depth / (1.0 - RESIDUAL_SHARE) * 1.04
    strip = bottom + 0.5 * RESIDUAL_SHARE * (top - bottom)
    axes.axhspan(1.0 - window.continuum_error, 1.0 + window.continuum_error, color=BAND_COLOUR, alpha=0.45, lw=0)
    axes.axhline(1.0, color=FAINT, lw=0.5)
    axes.fill_between(velocity, window.line, 1.0, color=colour, alpha=0.22, lw=0)
    axes.plot(velocity, window.neighbours, ":", color=GHOST_COLOUR, lw=0.9)
    axes.plot(velocity, window.model, "-", color=colour, lw=0.9)
    used = window.used
    axes.errorbar(
        velocity[used], window.flux[used], window.sigma[used], fmt=".", color=INK, ms=1.6, elinewidth=0.3, zorder=3
    )
    axes.plot(velocity[~used], window.flux[~used], "x", color=DROPPED_COLOUR, ms=2.2, mew=0.4, zorder=2)
    scale = 0.5 * RESIDUAL_SHARE * (top - bottom) / RESIDUAL_LIMIT
    with np.errstate(invalid="ignore", divide="ignore"):
        pull = np.clip((window.flux - window.model) / window.sigma, -RESIDUAL_LIMIT, RESIDUAL_LIMIT)
    axes.axhline(strip, color=FAINT, lw=0.4)
    axes.vlines(velocity, strip, strip + scale * np.nan_to_num(pull), color=INK, lw=0.5)
    axes.axvline(0.0, ymin=RESIDUAL_SHARE, color=colour, lw=0.4, alpha=0.6)
    axes.set_xlim(-half, half)
    axes.set_ylim(bottom, top)
    ticks = [t for t in (0.0, 0.2, 0.4, 0.6, 0.8, 0.9, 1.0) if bottom + RESIDUAL_SHARE * (top - bottom) <= t <= top]
    axes.set_yticks(ticks if len(ticks) > 1 else [1.0])
    axes.tick_params(length=1.5, pad=1)
    axes.set_title(title_of(found, i), loc="left", pad=9, parse_math=False, weight="bold", color=colour)
    flags = words_of_flags(int(found.flags[i])).replace(",", ", ").replace("_", " ")
    words = flags if len(flags) <= LONGEST_FLAGS else flags[: LONGEST_FLAGS - 3].rstrip(", ") + " ..."
    words = words or "good"
    axes.text(
        0.0,
        1.015,
        words,
        transform=axes.transAxes,
        fontsize=5.5,
        color=FAINT if found.use[i] else DROPPED_COLOUR,
        parse_math=False,
    )


def title_of(found: Measurements, i: int) -> str:
    """For example "Fe I 6301.50  80.2 +- 1.1 mA (expected 78)"."""
    text = f"{found.ion[i]} {found.wavelength_air[i]:.2f}  {found.equivalent_width[i]:.1f}±"
    text += f"{found.equivalent_width_error[i]:.1f} mÅ"
    return text + (f" ({found.predicted_width[i]:.0f})" if np.isfinite(found.predicted_width[i]) else "")


def overview(one: Measured) -> Figure:
    """The spectrum at a glance, its velocity, and what the widths look like against the expected ones."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    with rc_context(STYLE):
        figure = Figure(figsize=PAGE_INCHES)
        figure.text(0.05, 0.965, one.star, fontsize=12, weight="bold", parse_math=False)
        figure.text(0.05, 0.928, _headline(one), fontsize=7, linespacing=1.4, parse_math=False)
        covered = one.spectrum.wavelength_air[one.spectrum.good]
        listed = one.measurements.wavelength_air[np.isfinite(one.measurements.equivalent_width)]
        low, high = (listed.min() - 20.0, listed.max() + 20.0) if listed.size else (covered.min(), covered.max())
        edges = np.linspace(max(low, covered.min()), min(high, covered.max()), OVERVIEW_ROWS + 1)
        for row in range(OVERVIEW_ROWS):
            axes = figure.add_axes((0.05, 0.785 - 0.155 * row, 0.92, 0.125))
            draw_piece(axes, one, float(edges[row]), float(edges[row + 1]))
        draw_search(figure.add_axes((0.05, 0.07, 0.2, 0.32)), one)
        draw_drift(figure.add_axes((0.30, 0.07, 0.19, 0.32)), one)
        draw_expected(figure.add_axes((0.545, 0.07, 0.19, 0.32)), one)
        draw_shifts(figure.add_axes((0.79, 0.07, 0.18, 0.32)), one)
    return figure


def draw_piece(axes: Axes, one: Measured, low: float, high: float) -> None:
    """A third of the spectrum: extremes of the pixels, rough level, and a mark for each line by its fate."""
    top, bottom = [], []
    for order in one.spectrum.orders():
        near = (order.wavelength_air >= low) & (order.wavelength_air <= high) & order.good
        if near.sum() < 20:
            continue
        wave, flux = order.wavelength_air[near], order.flux[near]
        level = rough_level(wave, flux, np.ones(wave.size, bool))
        x, least, most = envelope(wave, flux, max(50, int(ENVELOPE_POINTS * (wave[-1] - wave[0]) / (high - low))))
        axes.fill_between(x, least, most, color=INK, lw=0, alpha=0.75)
        axes.plot(wave[:: max(1, wave.size // 300)], level[:: max(1, wave.size // 300)], color=BAND_COLOUR, lw=1.2)
        top.append(np.percentile(flux, 99.5))
        bottom.append(np.percentile(flux, 0.5))
    if not top:
        return
    peak = 1.08 * max(top)
    floor = min(0.0, min(bottom))
    axes.set_ylim(floor, peak + 0.12 * (peak - floor))
    found = one.measurements
    for use, colour in ((True, ION_COLOURS["Fe I"]), (False, DROPPED_COLOUR)):
        of = (found.use == use) & np.isfinite(found.equivalent_width)
        of &= (found.wavelength_air > low) & (found.wavelength_air < high)
        axes.vlines(found.wavelength_air[of], peak, peak + 0.1 * (peak - floor), color=colour, lw=0.6)
    axes.set_xlim(low, high)
    axes.tick_params(length=2, pad=1)


def envelope(x: np.ndarray, y: np.ndarray, n_points: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Middles, lowest and highest values of pieces of a long row of pixels."""
    pieces = np.linspace(0, x.size, min(n_points, x.size) + 1).astype(int)[:-1]
    return x[pieces], np.minimum.reduceat(y, pieces), np.maximum.reduceat(y, pieces)


def draw_search(axes: Axes, one: Measured) -> None:
    """The cross-correlation over the velocities searched, in the frame of the file."""
    velocity = one.velocity
    axes.set_title("Mean depth at the shifted lines", loc="left")
    axes.set_xlabel("velocity [km/s]")
    if velocity.search_velocity.size == 0:
        axes.text(0.05, 0.9, f"{velocity.value:+.2f} km/s was said", transform=axes.transAxes)
        return
    axes.plot(velocity.search_velocity, velocity.search_profile, color=INK, lw=0.7)
    axes.axvline(velocity.value, color=ION_COLOURS["Fe II"], lw=0.8)
    words = f"{velocity.value:+.2f} ± {velocity.error:.2f} km/s\n{velocity.significance:.0f} sigma"
    axes.text(0.03, 0.95, words, transform=axes.transAxes, va="top", color=ION_COLOURS["Fe II"])


def draw_drift(axes: Axes, one: Measured) -> None:
    """Velocity against wavelength, and what air and vacuum mixed up would look like."""
    from specsolve.lines.wavelengths import refractive_index

    velocity = one.velocity
    axes.set_title("Velocity along the spectrum", loc="left")
    axes.set_xlabel("wavelength [Å]")
    axes.set_ylabel("km/s")
    if velocity.group_wavelength.size < 2:
        return
    axes.errorbar(
        velocity.group_wavelength, velocity.group_value, velocity.group_error, fmt="o", color=INK, ms=3, lw=0.7
    )
    axes.axhline(velocity.value, color=ION_COLOURS["Fe II"], lw=0.8)
    wave = np.linspace(velocity.group_wavelength.min(), velocity.group_wavelength.max(), 50)
    mixed = LIGHT_SPEED_KMS * (refractive_index(wave) - 1.0)
    axes.plot(wave, velocity.value + mixed - mixed.mean(), "--", color=GHOST_COLOUR, lw=0.8)
    axes.text(0.03, 0.03, "dashed: if air and vacuum were mixed up", transform=axes.transAxes, color=GHOST_COLOUR)


def draw_expected(axes: Axes, one: Measured) -> None:
    """Measured against expected widths."""
    found = one.measurements
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.log10(found.equivalent_width / found.predicted_width)
    strength = np.log10(np.maximum(found.predicted_width, 1e-3))
    axes.axhline(0.0, color=FAINT, lw=0.6)
    for ion, colour in ION_COLOURS.items():
        of = (found.ion == ion) & np.isfinite(ratio)
        axes.plot(strength[of & found.use], ratio[of & found.use], "o", color=colour, ms=2.2, label=ion)
        axes.plot(strength[of & ~found.use], ratio[of & ~found.use], "x", color=colour, ms=2.5, mew=0.5, alpha=0.6)
    axes.set_ylim(-0.6, 0.6)
    axes.set_title("Measured over expected width (cross: not used)", loc="left")
    axes.set_xlabel("log$_{10}$ of the expected width [mÅ]")
    axes.set_ylabel("dex")
    axes.legend(frameon=False, loc="lower right")


def draw_shifts(axes: Axes, one: Measured) -> None:
    """Broadening of the single lines against their shifts."""
    found = one.measurements
    good = np.isfinite(found.line_shift)
    for ion, colour in ION_COLOURS.items():
        of = good & (found.ion == ion)
        axes.plot(found.line_shift[of & found.use], found.line_fwhm[of & found.use], "o", color=colour, ms=2.2)
        axes.plot(
            found.line_shift[of & ~found.use], found.line_fwhm[of & ~found.use], "x", color=colour, ms=2.5, mew=0.5
        )
    axes.set_title("Position and width of each line", loc="left")
    axes.set_xlabel("shift [km/s]")
    axes.set_ylabel("full width at half depth [km/s]")


def save_pages(measured: Iterable[Measured], folder: str | Path, kind: str = "pdf") -> list[Path]:
    """Save the figures of spectra: STAR_spectrum, and STAR_lines (one file of pages as pdf, else a file a page).

    Raises
    ------
    OutputError
        If the folder cannot be made or written.
    UsageError
        If matplotlib is not installed.
    """
    try:
        import matplotlib  # noqa: F401
        from matplotlib.backends.backend_pdf import PdfPages
    except ImportError as error:
        raise UsageError("figures need matplotlib; install specsolve[plots]") from error
    folder = Path(folder)
    paths: list[Path] = []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for one in measured:
            stem = _stem(one.star, paths)
            paths.append(folder / f"{stem}_spectrum.{kind}")
            overview(one).savefig(paths[-1], dpi=DPI)
            if kind == "pdf":
                paths.append(folder / f"{stem}_lines.pdf")
                with PdfPages(paths[-1]) as pages:
                    for figure in line_pages(one):
                        pages.savefig(figure)
            else:
                for number, figure in enumerate(line_pages(one), start=1):
                    paths.append(folder / f"{stem}_lines_{number:02d}.{kind}")
                    figure.savefig(paths[-1], dpi=DPI)
    except OSError as error:
        raise OutputError(f"cannot write figures into {folder}: {(error.strerror or str(error)).lower()}") from error
    return paths


def _stem(star: str, taken: list[Path]) -> str:
    stem = re.sub(r"[^\w.+-]+", "_", star).strip("._") or "star"
    used = {path.stem for path in taken}
    number, found = 1, stem
    while f"{found}_spectrum" in used:
        number += 1
        found = f"{stem}_{number}"
    return found


def _headline(one: Measured) -> str:
    from specsolve.report.measured import summary

    lines: list[Any] = summary(one)
    return "\n".join(text.strip().removeprefix(f"{one.star}: ") for text in lines[:2])
