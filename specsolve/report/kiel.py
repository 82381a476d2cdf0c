"""Stars of a cluster in the Kiel diagram: covariance ellipses, other candidates, and the way from LTE to NLTE."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.errors import OutputError, UsageError
from specsolve.report.panels import FAINT, GHOST_COLOUR, INK

if TYPE_CHECKING:
    from astropy.table import Table
    from matplotlib.figure import Figure

WIDTH, HEIGHT = 7.2, 6.4  # inch
ONE_SIGMA_2D = 1.515  # radius that holds 68.3 % of a two-dimensional normal distribution
MEMBER_COLOUR, FIELD_COLOUR, LIST_COLOUR = "#2a7f62", "#b08d57", "#8fa3b5"
DPI = 140
MARGIN_TEFF, MARGIN_LOGG = 150.0, 0.25
POINTS = 90


def kiel(handoff: Table, candidates: Table, curves: Sequence[Any] = (), title: str = "") -> Figure:
    """The diagram of a handoff.

    The ellipse holds 68 % by the star's own errors; a thin bar through it is what the line list adds, the same way for
    all. Field stars are drawn open. An arrow leads from LTE to NLTE, a dotted line to other candidates with their odds.

    Parameters
    ----------
    handoff, candidates : Table
        Kinds handoff and handoff_candidates.
    curves : sequence, optional
        With `teff`, `logg` and `labels`.
    title : str

    Raises
    ------
    UsageError
        If matplotlib is not installed.
    """
    figure, axes = new_figure(WIDTH, HEIGHT)
    for k, curve in enumerate(curves):
        axes.plot(curve.teff, curve.logg, color=FAINT, lw=0.8, zorder=1)
        if k in (0, len(curves) - 1):
            axes.annotate(curve.labels, (curve.teff[0], curve.logg[0]), fontsize=6, color=FAINT)
    places: dict[str, dict[str, np.ndarray]] = {}
    for row in handoff:
        at = np.array([row["teff"], row["logg"]])
        places.setdefault(str(row["star"]), {})[str(row["treatment"])] = at
        member = not row["member_probability"] < 0.5
        colour = MEMBER_COLOUR if member else FIELD_COLOUR
        nlte = str(row["treatment"]) != "lte"
        outline = at + ellipse(np.asarray(row["cov_star"])[:2, :2])
        axes.fill(*outline.T, facecolor=colour if member else "none", alpha=0.22 if not nlte else 0.45, lw=0, zorder=2)
        axes.plot(*outline.T, color=colour, lw=0.8, ls="-" if not nlte else "--", zorder=3)
        modes = np.asarray(row["list_modes"])[:2]
        strongest = modes[:, int(np.argmax(np.sum((modes / [[100.0], [0.1]]) ** 2, axis=0)))]
        axes.plot(*np.array([at - strongest, at + strongest]).T, color=LIST_COLOUR, lw=1.2, zorder=2)
        axes.plot(*at, "o", ms=3.2, mfc=colour if member else "white", mec=colour, zorder=4)
    for by_treatment in places.values():
        if {"lte", "nlte"} <= set(by_treatment):
            axes.annotate(
                "", by_treatment["nlte"], by_treatment["lte"], arrowprops={"arrowstyle": "->", "color": INK, "lw": 0.7}
            )
    for row in candidates:
        key = str(row["star"]), str(row["treatment"])
        at = np.array([row["teff"], row["logg"]])
        reported = places[key[0]][key[1]]
        if np.allclose(at, reported):
            continue
        axes.plot(*np.array([reported, at]).T, color=GHOST_COLOUR, lw=0.8, ls=":", zorder=2)
        axes.plot(*at, "s", ms=3.5, mfc="white", mec=GHOST_COLOUR, zorder=4)
        axes.annotate(f"{100 * row['odds']:.0f} %", at, fontsize=6, color=GHOST_COLOUR)
    axes.set_xlabel("effective temperature  [K]")
    axes.set_ylabel("log g  [cgs]")
    axes.set_title(
        title or "shaded: members, 68 % by own errors; bar: line list, common to all", fontsize=8, loc="left"
    )
    _limits(axes, handoff)
    return figure


def ellipse(covariance: np.ndarray) -> np.ndarray:
    """Outline that holds 68 % of a normal distribution, shape (n_points, 2), about zero."""
    values, vectors = np.linalg.eigh(covariance)
    angle = np.linspace(0.0, 2.0 * np.pi, POINTS)
    circle = np.column_stack([np.cos(angle), np.sin(angle)]) * ONE_SIGMA_2D
    return circle * np.sqrt(np.maximum(values, 0.0)) @ vectors.T


def _limits(axes: Any, handoff: Table) -> None:
    teff, logg = np.asarray(handoff["teff"], float), np.asarray(handoff["logg"], float)
    axes.set_xlim(teff.max() + MARGIN_TEFF, teff.min() - MARGIN_TEFF)  # hot stars on the left, as in the trade
    axes.set_ylim(logg.max() + MARGIN_LOGG, logg.min() - MARGIN_LOGG)


def new_figure(width: float, height: float, rows: int = 1, columns: int = 1) -> tuple[Figure, Any]:
    """A figure with axes in the style of this package.

    Raises
    ------
    UsageError
        If matplotlib is not installed.
    """
    try:
        from matplotlib.figure import Figure
    except ImportError as error:
        raise UsageError("figures need matplotlib; install specsolve[plots]") from error
    figure = Figure(figsize=(width, height), layout="constrained")
    axes = figure.subplots(rows, columns)
    for one in np.ravel(axes):
        one.tick_params(labelsize=7, color=FAINT)
        one.xaxis.label.set_size(8)
        one.yaxis.label.set_size(8)
        for side in ("top", "right"):
            one.spines[side].set_visible(False)
    return figure, axes


def save(figure: Figure, path: str | Path) -> Path:
    """Save a figure; the suffix says as what.

    Raises
    ------
    OutputError
    """
    path = Path(path)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        figure.savefig(path, dpi=DPI)
    except OSError as error:
        raise OutputError(f"cannot write {path}: {(error.strerror or str(error)).lower()}", path=path) from error
    return path


def save_all(figures: Iterable[tuple[str, Figure]], folder: str | Path, kind: str) -> list[Path]:
    """Save named figures into a folder."""
    return [save(figure, Path(folder) / f"{name}.{kind}") for name, figure in figures]
