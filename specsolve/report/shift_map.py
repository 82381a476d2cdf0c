"""Two figures of a rehearsal: shifts over the Kiel diagram, and a sequence before and after."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from specsolve.report.kiel import MARGIN_LOGG, MARGIN_TEFF, new_figure
from specsolve.report.panels import DROPPED_COLOUR, FAINT, GHOST_COLOUR, INK

if TYPE_CHECKING:
    from astropy.table import Table
    from matplotlib.figure import Figure

PANELS = (("teff", "K"), ("logg", "dex"), ("feh", "dex"))
AREA_SMALL, AREA_LARGE = 12.0, 90.0  # square points: scatter from the smallest to the largest of the set


def shift_map(table: Table) -> Figure:
    """Shift of teff, logg and feh over (teff, logg): colour is the bias, the size of a point its scatter; a cross marks a
    point that was not rehearsed, a ring one where the linear fit fails.
    """
    figure, axes = new_figure(11.0, 4.2, 1, 3)
    teff, logg = np.asarray(table["teff"], float), np.asarray(table["logg"], float)
    good = np.asarray(table["n_good"], int) > 0
    for axis, (name, unit) in zip(axes, PANELS, strict=True):
        bias, scatter = np.asarray(table[f"bias_{name}"], float), np.asarray(table[f"scatter_{name}"], float)
        largest = float(np.nanmax(np.abs(bias[good]))) if good.any() else 1.0
        span = np.nan_to_num(scatter[good], nan=0.0)
        share = (span - span.min()) / max(np.ptp(span), 1e-12) if span.size else span
        image = axis.scatter(
            teff[good], logg[good], c=bias[good], s=AREA_SMALL + (AREA_LARGE - AREA_SMALL) * share, cmap="PuOr_r",
            vmin=-largest, vmax=largest, lw=0.3, edgecolor=INK,
        )  # fmt: skip
        axis.plot(teff[~good], logg[~good], "x", color=DROPPED_COLOUR, ms=4)
        off = good & np.asarray(table["linear_fails"], bool)
        axis.scatter(teff[off], logg[off], s=140, facecolor="none", edgecolor=GHOST_COLOUR, lw=0.8)
        axis.set_xlim(teff.max() + MARGIN_TEFF, teff.min() - MARGIN_TEFF)
        axis.set_ylim(logg.max() + MARGIN_LOGG, logg.min() - MARGIN_LOGG)
        axis.set_xlabel("true effective temperature  [K]")
        figure.colorbar(image, ax=axis, label=f"shift of {name}  [{unit}]", shrink=0.85)
    axes[0].set_ylabel("true log g  [cgs]")
    axes[0].set_title("size: scatter; cross: not rehearsed; ring: off the linear fit", fontsize=7, loc="left")
    return figure


def sequence_before_and_after(table: Table) -> Figure:
    """The points as they are and as they would be found, with the scatter of one observation."""
    figure, axes = new_figure(6.4, 6.0)
    good = np.asarray(table["n_good"], int) > 0
    before = np.column_stack([np.asarray(table[name], float) for name in ("teff", "logg")])
    after = np.column_stack([np.asarray(table[f"recovered_{name}"], float) for name in ("teff", "logg")])
    axes.plot(*before.T, "o-", color=FAINT, ms=3, lw=0.8, label="before: true")
    axes.errorbar(
        after[good, 0], after[good, 1],
        xerr=np.asarray(table["scatter_teff"], float)[good], yerr=np.asarray(table["scatter_logg"], float)[good],
        fmt="s", color=DROPPED_COLOUR, ms=3, lw=0.6, label="after: as analysed",
    )  # fmt: skip
    for a, b in zip(before[good], after[good], strict=True):
        axes.annotate("", b, a, arrowprops={"arrowstyle": "->", "color": INK, "lw": 0.5})
    axes.set_xlim(before[:, 0].max() + MARGIN_TEFF, before[:, 0].min() - MARGIN_TEFF)
    axes.set_ylim(before[:, 1].max() + MARGIN_LOGG, before[:, 1].min() - MARGIN_LOGG)
    axes.set_xlabel("effective temperature  [K]")
    axes.set_ylabel("log g  [cgs]")
    axes.legend(fontsize=7, frameon=False)
    treatments = str(table["truth_treatment"][0]), str(table["treatment"][0])
    axes.set_title(f"truth {treatments[0]}, analysis {treatments[1]}", fontsize=8, loc="left")
    return figure
