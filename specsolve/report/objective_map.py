"""One look at one star: is the answer unique? The objective over temperature and gravity, with every candidate.

Shades say how well the residuals can be met at a temperature and gravity, whatever the metallicity and the microturbulence;
along one curve the lines agree on a temperature, along the other on a gravity. A unique answer is one dark basin with
one crossing; a second basin of the same depth is a second answer, marked with its place in the candidates table.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.errors import OutputError, UsageError
from specsolve.report.panels import FAINT, INK, headlines
from specsolve.report.sheet import DECIMALS, NAMES, headline

if TYPE_CHECKING:
    from collections.abc import Iterable

    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from specsolve.balance.solution import Candidate, Solution

SIZE_INCHES = (8.6, 5.4)
DPI = 130
# 68.3, 95.4 and 99.7 % of chi2 with two degrees of freedom, then factors of about 2.5.
LEVELS = (0.0, 2.30, 6.18, 11.83, 30.0, 75.0, 200.0, 500.0)
ELLIPSE = 2.30  # the first of them
ELLIPSE_POINTS = 90
SHADES = "bone"
EXCITATION_COLOUR, IONIZATION_COLOUR, CHOSEN_COLOUR = "#c8553d", "#1b6ca8", "#e0a100"
LISTED = 9


def map_figure(one: Solution) -> Figure:
    """The picture as a matplotlib figure.

    Parameters
    ----------
    one : Solution
        With its `objective_map`.

    Raises
    ------
    UsageError
        If matplotlib is not installed, or the solution has no map.
    """
    try:
        from matplotlib.figure import Figure
    except ImportError as error:
        raise UsageError("figures need matplotlib; install specsolve[plots]") from error
    if one.objective_map is None:
        raise UsageError(f"{one.star}: no map was made; solve with Options(objective_map=True)")
    figure = Figure(figsize=SIZE_INCHES)
    axes = figure.add_axes((0.085, 0.11, 0.53, 0.76))
    shades = draw_objective(axes, one)
    if shades is not None:
        bar = figure.colorbar(shades, cax=figure.add_axes((0.625, 0.11, 0.013, 0.76)))
        bar.ax.tick_params(labelsize=6)
        bar.ax.set_title("objective", fontsize=6.5, loc="left")
    draw_candidates(axes, one)
    title, parameters, _ = headlines(one)
    figure.text(0.03, 0.95, title, fontsize=10, weight="bold", parse_math=False)
    figure.text(0.03, 0.91, parameters, fontsize=7.5, parse_math=False)
    figure.text(0.97, 0.965, headline(one), fontsize=5.5, color=FAINT, ha="right", parse_math=False)
    figure.text(0.70, 0.85, _words(one), fontsize=6.5, va="top", linespacing=1.35, parse_math=False)
    return figure


def draw_objective(axes: Axes, one: Solution) -> object:
    """Shades of the objective and the two curves along which a residual vanishes; the shades, or None without a value."""
    from matplotlib.colors import BoundaryNorm

    chart = one.objective_map
    shades = None
    if np.isfinite(chart.objective).any():
        shades = axes.contourf(
            chart.teff,
            chart.logg,
            np.ma.masked_invalid(chart.objective).T,
            levels=LEVELS,
            norm=BoundaryNorm(LEVELS, 256),
            cmap=SHADES,
            extend="max",
        )
        axes.contour(
            chart.teff, chart.logg, np.ma.masked_invalid(chart.objective).T, levels=LEVELS[1:4],
            colors="white", linewidths=0.5, alpha=0.7,
        )  # fmt: skip
    for values, colour, style, words in (
        (chart.excitation_slope, EXCITATION_COLOUR, "-", "no slope with excitation"),
        (chart.ionization_offset, IONIZATION_COLOUR, "--", "Fe I = Fe II"),
    ):
        known = values[np.isfinite(values)]
        if known.size and known.min() < 0.0 < known.max():
            axes.contour(
                chart.teff, chart.logg, np.ma.masked_invalid(values).T, levels=[0.0], colors=[colour],
                linestyles=[style], linewidths=1.6,
            )  # fmt: skip
            axes.plot([], [], color=colour, linestyle=style, label=words)
    axes.set_xlim(chart.teff[-1], chart.teff[0])  # hot to the left, low gravity up, as such diagrams run
    axes.set_ylim(chart.logg[-1], chart.logg[0])
    axes.set_xlabel("effective temperature [K]", fontsize=8)
    axes.set_ylabel("log g", fontsize=8)
    axes.tick_params(labelsize=7)
    return shades


def draw_candidates(axes: Axes, one: Solution) -> None:
    """Every candidate with its place and its 68 % ellipse; the reported one filled, those set aside as crosses."""
    from matplotlib.patheffects import withStroke

    halo = [withStroke(linewidth=2.2, foreground="white")]
    for item in one.candidates:
        teff, logg = item.parameters[:2]
        colour = CHOSEN_COLOUR if item.index == 0 else INK
        if item.set_aside:
            axes.plot([teff], [logg], "x", color=INK, markersize=6, path_effects=halo)
        else:
            fill = CHOSEN_COLOUR if item.index == 0 else "none"
            axes.plot([teff], [logg], "o", color=colour, markerfacecolor=fill, markeredgecolor=INK, markersize=7)
            ring = ellipse(item)
            axes.plot(ring[0], ring[1], color=colour, linewidth=1.3, path_effects=halo, zorder=4)
        axes.annotate(
            str(item.index), (teff, logg), xytext=(6, 5), textcoords="offset points", fontsize=8, color=INK,
            path_effects=halo, annotation_clip=True,
        )  # fmt: skip
    axes.plot([], [], color=CHOSEN_COLOUR, label="68 % of star and list")
    legend = axes.legend(loc="upper left", fontsize=6, framealpha=0.85)
    legend.set_zorder(6)


def ellipse(item: Candidate) -> np.ndarray:
    """Outline of the joint 68 % region in (teff, logg), shape (2, n); nan where the covariance is undefined."""
    block = item.covariance[:2, :2]
    angle = np.linspace(0.0, 2.0 * np.pi, ELLIPSE_POINTS)
    circle = np.sqrt(ELLIPSE) * np.array([np.cos(angle), np.sin(angle)])
    if not np.isfinite(block).all():
        return np.full((2, ELLIPSE_POINTS), np.nan)
    values, vectors = np.linalg.eigh(block)
    return item.parameters[:2, None] + vectors @ (np.sqrt(np.maximum(values, 0.0))[:, None] * circle)


def save_maps(solutions: Iterable[Solution], folder: str | Path, stems: Iterable[str], kind: str = "pdf") -> list[Path]:
    """Save the picture of each solution that has a map as ``STEM_map.KIND``.

    Raises
    ------
    OutputError
        If the folder cannot be written.
    """
    paths = []
    try:
        Path(folder).mkdir(parents=True, exist_ok=True)
        for one, stem in zip(solutions, stems, strict=True):
            if one.objective_map is not None:
                path = Path(folder) / f"{stem}_map.{kind}"
                map_figure(one).savefig(path, dpi=DPI)
                paths.append(path)
    except OSError as error:
        raise OutputError(f"cannot write figures into {folder}: {(error.strerror or str(error)).lower()}") from error
    return paths


def _words(one: Solution) -> str:
    alive = [item for item in one.candidates if not item.set_aside]
    near = [item for item in alive if np.isfinite(item.odds)]
    if len(alive) == 1:
        rows = ["one minimum in the whole grid", ""]
    else:
        rows = [f"{len(alive)} minima, {len(near)} near-equal", ""]
    for item in one.candidates[:LISTED]:
        place = ", ".join(f"{item.parameters[i]:.{DECIMALS[name]}f}" for i, name in enumerate(NAMES))
        if item.set_aside:
            fate = "set aside: " + item.set_aside
        else:
            odds = f", odds {item.odds:.2f}" if np.isfinite(item.odds) else ""
            fate = f"2 d ln L {item.delta:.1f}{odds}"
        rows += [f"{item.index}: {place}", f"    {_folded(fate)}"]
    if len(one.candidates) > LISTED:
        rows.append(f"and {len(one.candidates) - LISTED} more")
    rows += ["", "Teff, log g, [Fe/H], vmic; the other", "parameters are fitted at every point."]
    return "\n".join(rows)


def _folded(text: str, width: int = 44) -> str:
    import textwrap

    return "\n    ".join(textwrap.wrap(text, width))
