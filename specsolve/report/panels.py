"""The panels of a star's page; each draws one question into one axes.

The map answers how well the lines tell excitation from strength and where the weight sits; the trends beside and below
it share its axes and answer whether a slope is there, how sure that is, and how much temperature or microturbulence
would have to move to make one; the ladder answers whether the two ions agree; the lever answers which single lines
carry the result.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from specsolve.balance.residuals import plane_operator
from specsolve.report.line_fates import cut_by_rule
from specsolve.report.sheet import DECIMALS, NAMES, most_influential, signed

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from specsolve.balance.solution import Solution, Trend

INK, FAINT = "#22303c", "#9aa5b1"
ION_COLOURS = {"Fe I": "#1b6ca8", "Fe II": "#c8553d"}
BAND_COLOUR = "#7fb7be"
GHOST_COLOUR = "#8a6fb0"
DROPPED_COLOUR = "#b3261e"
DEVIATION_MAP = "PuOr_r"
DEVIATION_LIMIT = 3.0  # standard deviations at the ends of the colour scale
AREA_PER_SHARE, AREA_LEAST = 2600.0, 9.0  # square points for the whole weight; least that is still seen
TEFF_STEP, VMIC_STEP, LOGG_STEP = 100.0, 0.2, 0.3  # K, km/s, dex: the steps of the sensitivity table
KERNEL_POINTS = 300
ROOM_FOR_WORDS = 0.22  # of the ladder's width
LEVER_LINES = 7


def fe1_used(one: Solution) -> np.ndarray:
    """Mask of the Fe I lines that carry weight."""
    return one.lines.used & (one.lines.ion == "Fe I") & (one.lines.weight > 0)


def leverage(one: Solution) -> np.ndarray:
    """Share of each line in the weight of the plane through Fe I (hat values over their sum); zero for other lines.

    Returns
    -------
    ndarray, shape (n_lines,)
    """
    lines, mask = one.lines, fe1_used(one)
    share = np.zeros(len(lines))
    if mask.sum() < 3:
        return share
    w = lines.weight[mask]
    design = np.column_stack([np.ones(mask.sum()), lines.excitation_potential[mask], lines.strength[mask]])
    q, _ = np.linalg.qr(design * np.sqrt(w)[:, None])
    hat = (q**2).sum(axis=1)
    share[mask] = hat / hat.sum()
    return share


def counterfactual_slope(one: Solution, axis: str, parameter: int, step: float) -> float:
    """Slope of A(Fe I) against an axis if one parameter were moved by a step and all else stayed.

    Parameters
    ----------
    one : Solution
    axis : str
        "excitation_potential" or "strength".
    parameter : int
        Place in (teff, logg, mh, vmic).
    step : float
        In the parameter's unit.

    Returns
    -------
    float
        [dex/eV] or [dex/dex]; nan if the plane cannot be formed.
    """
    lines, mask = one.lines, fe1_used(one)
    operator = plane_operator(lines.excitation_potential[mask], lines.strength[mask], lines.weight[mask])
    row = operator[1 if axis == "excitation_potential" else 2]
    return float(row @ (lines.relative_abundance[mask] + step * lines.d_abundance[mask, parameter]))


def draw_map(axes: Axes, one: Solution, numbers: dict[int, int]) -> object:
    """Lines by excitation and strength: area = leverage, colour = deviation; cut lines are crosses, odd ones numbered."""
    lines, share = one.lines, leverage(one)
    shown = fe1_used(one)
    points = axes.scatter(
        lines.excitation_potential[shown],
        lines.strength[shown],
        s=np.maximum(AREA_PER_SHARE * share[shown], AREA_LEAST),
        c=lines.standardized[shown],
        cmap=DEVIATION_MAP,
        vmin=-DEVIATION_LIMIT,
        vmax=DEVIATION_LIMIT,
        edgecolors=INK,
        linewidths=0.5,
        zorder=3,
    )
    cut = cut_by_rule(one) & (lines.ion == "Fe I")
    height = np.where(np.isfinite(lines.strength), lines.strength, lines.reduced_width)
    axes.plot(lines.excitation_potential[cut], height[cut], "x", color=FAINT, markersize=3, markeredgewidth=0.6)
    for i, number in numbers.items():
        if lines.ion[i] == "Fe I" and np.isfinite(height[i]) and np.isfinite(lines.excitation_potential[i]):
            axes.annotate(
                str(number),
                (lines.excitation_potential[i], height[i]),
                fontsize=7,
                color=DROPPED_COLOUR,
                xytext=(5, 4),
                textcoords="offset points",
                annotation_clip=True,
            )
    axes.set_ylabel("strength, log$_{10}$(W/$\\lambda$)")
    axes.set_title("Where the weight of Fe I sits (area: leverage; cross: cut)", loc="left")
    axes.tick_params(labelbottom=False)
    return points


def draw_trend(axes: Axes, one: Solution, axis: str, *, upright: bool) -> None:
    """A trend of Fe I with its 1 and 2 sigma band and the slopes that a moved parameter would make.

    Parameters
    ----------
    axes : Axes
    one : Solution
    axis : str
        "excitation_potential" or "strength".
    upright : bool
        The line property runs upwards and the abundance to the right (beside the map).
    """
    lines, mask = one.lines, fe1_used(one)
    x_lines = getattr(lines, axis)[mask]
    trend = next((item for item in one.trends if item.axis == axis and item.ion == "Fe I"), None)
    if trend is None or mask.sum() < 3:
        axes.text(0.5, 0.5, "no trend", ha="center", va="center", transform=axes.transAxes, color=FAINT)
        return
    centre = float(np.average(lines.relative_abundance[mask], weights=lines.weight[mask]))
    y_lines = centre + lines.deviation[mask] + trend.slope * (x_lines - trend.pivot)
    errors = lines.abundance_error[mask]
    low, high = x_lines.min(), x_lines.max()
    margin = 0.05 * (high - low)
    x = np.linspace(low - margin, high + margin, 60)
    y = centre + trend.slope * (x - trend.pivot)
    sigma = band_sigma(trend, x)
    swap = (lambda a, b: (b, a)) if upright else (lambda a, b: (a, b))
    for width, alpha in ((2.0, 0.25), (1.0, 0.45)):
        fill = axes.fill_betweenx if upright else axes.fill_between
        fill(x, y - width * sigma, y + width * sigma, color=BAND_COLOUR, alpha=alpha, linewidth=0)
    axes.plot(*swap(x, y), color=INK, linewidth=1.2)
    bars = {"xerr": errors} if upright else {"yerr": errors}
    axes.errorbar(
        *swap(x_lines, y_lines),
        **bars,
        fmt="o",
        markersize=3,
        color=ION_COLOURS["Fe I"],
        ecolor=FAINT,
        elinewidth=0.5,
        zorder=3,
    )
    parameter, step, label = (0, TEFF_STEP, "Teff {:+.0f} K") if axis != "strength" else (3, VMIC_STEP, "vmic {:+.1f}")
    for sign, style in ((1, "--"), (-1, ":")):
        slope = counterfactual_slope(one, axis, parameter, sign * step)
        if np.isfinite(slope):
            axes.plot(
                *swap(x, centre + slope * (x - trend.pivot)),
                linestyle=style,
                color=GHOST_COLOUR,
                linewidth=1,
                label="if " + label.format(sign * step),
            )
    axes.legend(loc="best", frameon=False, fontsize=6)
    unit = "dex/eV" if axis != "strength" else "dex/dex"
    digits = 4 if axis != "strength" else 3
    text = f"slope {signed(trend.slope, digits)} ± {trend.slope_error:.{digits}f} {unit}"
    axes.set_title(text, loc="left")
    name = "[Fe/H] of the line"
    if upright:
        axes.set_xlabel(name)
        axes.tick_params(labelleft=False)
    else:
        axes.set_ylabel(name)
        axes.set_xlabel("lower excitation potential [eV]")


def band_sigma(trend: Trend, x: np.ndarray) -> np.ndarray:
    """One standard deviation of a trend's line at x, shape of x."""
    away = x - trend.pivot
    variance = trend.covariance[0, 0] + 2 * away * trend.covariance[0, 1] + away**2 * trend.covariance[1, 1]
    return np.sqrt(np.maximum(variance, 0.0))


def draw_ladder(axes: Axes, one: Solution) -> None:
    """Both ions, one above the other: lines, their density, the mean with its error, and where log g would move it."""
    lines = one.lines
    for level, ion in ((1.0, one.fe1), (0.0, one.fe2)):
        mask = lines.used & (lines.ion == ion.ion) & (lines.weight > 0)
        colour = ION_COLOURS[ion.ion]
        axes.axhline(level, color=FAINT, linewidth=0.5)
        if not mask.any():
            axes.text(
                0.5, level + 0.15, f"no {ion.ion}", transform=axes.get_yaxis_transform(), color=colour, ha="center"
            )
            continue
        values, weights, errors = lines.relative_abundance[mask], lines.weight[mask], lines.abundance_error[mask]
        axes.plot(values, np.full(values.shape, level - 0.06), "|", color=colour, markersize=5, markeredgewidth=0.7)
        x = np.linspace(values.min() - 0.15, values.max() + 0.15, KERNEL_POINTS)
        density = (weights * np.exp(-0.5 * ((x[:, None] - values) / errors) ** 2) / errors).sum(axis=1)
        axes.fill_between(x, level, level + 0.55 * density / density.max(), color=colour, alpha=0.25, linewidth=0)
        mean, error = ion.feh, float(np.hypot(ion.error_star, ion.error_list))
        axes.errorbar(
            [mean], [level + 0.28], xerr=[error], fmt="o", color=colour, markersize=5, capsize=3, elinewidth=1.6
        )
        for sign, mark in ((1, ">"), (-1, "<")):
            shift = _logg_shift(one, ion.ion, sign)
            if np.isfinite(shift):
                axes.plot([mean + shift], [level + 0.28], mark, color=GHOST_COLOUR, markersize=4, fillstyle="none")
        axes.text(
            0.01,
            level + 0.42,
            f"{ion.ion}\n{mean:+.3f} ± {error:.3f}\n{ion.n_lines} lines",
            transform=axes.get_yaxis_transform(),
            color=colour,
            fontsize=6.5,
            va="center",
        )
    low, high = axes.get_xlim()
    axes.set_xlim(low - ROOM_FOR_WORDS * (high - low), high)
    axes.set_ylim(-0.18, 1.72)
    axes.set_yticks([])
    axes.set_xlabel("[Fe/H] of the line")
    offset, error = one.residuals[1], float(np.sqrt(max(one.residual_covariance[1, 1], 0.0)))
    note = f"Fe I - Fe II: {signed(offset, 3)} ± {error:.3f} dex" if np.isfinite(offset) else "ionization not measured"
    axes.set_title(f"{note}   (> <: log g +{LOGG_STEP} and -{LOGG_STEP})", loc="left")


def draw_lever(axes: Axes, one: Solution) -> None:
    """What the loss of one line does to each parameter, in units of the star's own error."""
    order = most_influential(one)[:LEVER_LINES]
    sigma = np.where(one.errors_star > 0, one.errors_star, np.nan)
    marks = (("o", "#1b6ca8"), ("s", "#c8553d"), ("D", "#4b8b3b"), ("^", "#8a6fb0"))
    if order.size == 0:
        axes.text(0.5, 0.5, "no influence of single lines", ha="center", va="center", transform=axes.transAxes)
    rows = np.arange(order.size)[::-1]
    for j, (name, (mark, colour)) in enumerate(zip(NAMES, marks, strict=True)):
        shift = one.lines.influence[order, j] / sigma[j]
        if np.isfinite(shift).any():
            axes.plot(shift, rows, mark, color=colour, markersize=4, label=NAMES[name])
    axes.axvline(0, color=FAINT, linewidth=0.6)
    axes.set_yticks(rows)
    axes.set_yticklabels(
        [
            f"{one.lines.ion[i]} {one.lines.wavelength_air[i]:.2f}  {one.lines.excitation_potential[i]:.1f} eV"
            for i in order
        ]
    )
    axes.set_ylim(-0.6, max(order.size, 1) - 0.4)
    axes.set_xlabel("change in units of the star's error")
    axes.set_title("Without this one line", loc="left")
    if order.size:
        axes.legend(loc="upper center", bbox_to_anchor=(0.4, -0.24), ncols=4, frameon=False, handletextpad=0.1)


def headlines(one: Solution) -> tuple[str, str, str]:
    """Name with status; the parameters with both errors; the small print."""
    parts = []
    for i, name in enumerate(NAMES):
        digits = DECIMALS[name]
        if not np.isfinite(one.parameters[i]):
            continue
        value = f"{NAMES[name]} {one.parameters[i]:.{digits}f}"
        if name in one.fixed:
            parts.append(f"{value} (fixed)")
        else:
            parts.append(f"{value} ± {one.errors_star[i]:.{digits}f} ± {one.errors_list[i]:.{digits}f}")
    small = f"errors: star, list | scatter {one.line_scatter:.3f} dex | zero point: {one.zero_point_source}"
    if one.flags:
        small += " | " + ", ".join(one.flags)
    title = f"{one.star}   {one.status}" + (f": {one.reason}" if one.reason else "")
    return title, "      ".join(parts) or "no parameters", small


def _logg_shift(one: Solution, ion: str, sign: int) -> float:
    for item in one.sensitivities:
        if item.parameter == "logg" and np.sign(item.shift) == sign:
            return item.d_fe1 if ion == "Fe I" else item.d_fe2
    return float("nan")
