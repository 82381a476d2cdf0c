"""Two figures of a cross-check: where the published values lie from ours, and which balance breaks there."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from specsolve.report.kiel import new_figure
from specsolve.report.panels import DROPPED_COLOUR, FAINT, INK
from specsolve.schema import PARAMETERS, RESIDUALS

if TYPE_CHECKING:
    from astropy.table import Table
    from matplotlib.figure import Figure

CAUSE_COLOURS = ("#1b6ca8", "#c8553d", "#2a7f62", "#8a6fb0", "#b08d57", "#5f6b76", "#c06c9c")
SHOWN_STARS = 40
LARGEST_SIGMA = 8.0
BAR = 0.6


def splits(stars: Table, causes: Table, treatment: str) -> Figure:
    """One row of bars a star and parameter: shares of the named causes stacked, and the remainder with its error.

    Parameters
    ----------
    stars, causes : Table
        Kinds crosscheck and crosscheck_causes.
    treatment : str
    """
    stars = stars[np.asarray(stars["treatment"]) == treatment]
    order = np.argsort(-np.nan_to_num(np.asarray(stars["significance"], float)), kind="stable")[:SHOWN_STARS]
    stars = stars[np.sort(order)]
    causes = causes[(np.asarray(causes["treatment"]) == treatment) & np.asarray(causes["named"], bool)]
    names = list(dict.fromkeys(np.asarray(causes["cause"]).tolist()))
    figure, axes = new_figure(10.5, 1.6 + 0.22 * len(stars), 1, 4)
    y = np.arange(len(stars))[::-1]
    for k, (name, unit, _) in enumerate(PARAMETERS):
        axis = axes[k]
        positive, negative = np.zeros(len(stars)), np.zeros(len(stars))
        for colour, cause in zip(CAUSE_COLOURS, names, strict=False):
            of = {str(row["star"]): float(row[f"share_{name}"]) for row in causes if row["cause"] == cause}
            share = np.nan_to_num([of.get(str(star), 0.0) for star in stars["star"]])
            left = np.where(share >= 0.0, positive, negative)
            axis.barh(y, share, left=left, height=BAR, color=colour, label=cause if k == 0 else None)
            positive, negative = positive + np.maximum(share, 0.0), negative + np.minimum(share, 0.0)
        axis.errorbar(
            np.asarray(stars[f"d_{name}"], float), y, xerr=np.asarray(stars[f"d_{name}_error"], float),
            fmt="o", ms=3, color=INK, lw=0.7, label="published - ours" if k == 0 else None,
        )  # fmt: skip
        axis.axvline(0.0, color=FAINT, lw=0.6)
        axis.set_xlabel(f"{name}, published - ours" + (f"  [{unit}]" if unit else ""))
        axis.set_yticks(y, [str(star) for star in stars["star"]] if k == 0 else [""] * len(y), fontsize=6)
    axes[0].legend(fontsize=6, loc="lower left", bbox_to_anchor=(0.0, 1.0), ncol=4, frameon=False)
    return figure


def broken_balances(stars: Table, treatment: str) -> Figure:
    """Each star's four residuals at the published parameters, in their errors, as a matrix of shades and numbers."""
    stars = stars[np.asarray(stars["treatment"]) == treatment][:SHOWN_STARS]
    names = [name for name, _, _ in RESIDUALS]
    values = np.array([[float(row[f"their_{name}_sigma"]) for name in names] for row in stars])
    figure, axes = new_figure(6.0, 1.5 + 0.2 * len(stars))
    image = axes.imshow(values, cmap="PuOr_r", vmin=-LARGEST_SIGMA, vmax=LARGEST_SIGMA, aspect="auto")
    for i, j in np.ndindex(values.shape):
        if np.isfinite(values[i, j]):
            strong = abs(values[i, j]) > 3.0
            axes.text(j, i, f"{values[i, j]:+.1f}", ha="center", va="center", fontsize=6,
                      color=DROPPED_COLOUR if strong else INK, weight="bold" if strong else "normal")  # fmt: skip
    axes.set_xticks(range(len(names)), [name.replace("_", "\n") for name in names], fontsize=7)
    axes.set_yticks(range(len(stars)), [str(star) for star in stars["star"]], fontsize=6)
    figure.colorbar(image, ax=axes, label="our lines at their parameters, in sigma", shrink=0.8)
    return figure
