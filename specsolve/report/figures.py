"""One page a star: can this temperature, gravity, metallicity and microturbulence be believed?"""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING

from specsolve.errors import OutputError, UsageError
from specsolve.report import panels
from specsolve.report.line_fates import cut_counts, fate, worth_a_look
from specsolve.report.sheet import headline

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from specsolve.balance.solution import Candidate, Solution

PAGE_INCHES = (11.69, 8.27)  # A4, landscape
STYLE = {
    "font.size": 7.5,
    "axes.titlesize": 7.5,
    "axes.labelsize": 7.5,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "legend.fontsize": 6.5,
    "xtick.labelsize": 6.5,
    "ytick.labelsize": 6.5,
    "axes.edgecolor": panels.INK,
    "text.color": panels.INK,
}
LISTED = 16
LISTED_CANDIDATES = 4
LIST_WIDTH = 62
DPI = 130
FORMATS = ("pdf", "png", "svg")


def page(one: Solution) -> Figure:
    """The page of one star as a matplotlib figure.

    Parameters
    ----------
    one : Solution
        Solved or not; without parameters the page lists what happened to the lines.

    Raises
    ------
    UsageError
        If matplotlib is not installed.
    """
    try:
        from matplotlib import rc_context
        from matplotlib.figure import Figure
    except ImportError as error:
        raise UsageError("figures need matplotlib; install specsolve[plots]") from error
    with rc_context(STYLE):
        figure = Figure(figsize=PAGE_INCHES)
        title, parameters, small = panels.headlines(one)
        figure.text(0.05, 0.965, title, fontsize=12, weight="bold", parse_math=False)
        figure.text(0.05, 0.935, parameters, fontsize=9.5, parse_math=False)
        figure.text(0.05, 0.912, small, fontsize=6.5, color=panels.FAINT, parse_math=False)
        figure.text(0.95, 0.965, headline(one), fontsize=6.5, color=panels.FAINT, ha="right", parse_math=False)
        numbers = numbered(one)
        if panels.fe1_used(one).sum() >= 3:
            _draw(figure, one, numbers)
        _write_list(figure, one, numbers)
        if one.validity:
            figure.text(
                0.05,
                0.018,
                "Limits: " + " ".join(one.validity),
                fontsize=6,
                color=panels.INK,
                wrap=True,
                parse_math=False,
            )
    return figure


def numbered(one: Solution) -> dict[int, int]:
    """Number on the page, from 1, of each line that is worth a look (`line_fates.worth_a_look`)."""
    return {int(i): number for number, i in enumerate(worth_a_look(one), start=1)}


def save_pages(solutions: Iterable[Solution], folder: str | Path, kind: str = "pdf") -> list[Path]:
    """Save one page a star into a folder, which is made if need be.

    Parameters
    ----------
    solutions : iterable of Solution
    folder : path-like
    kind : str
        "pdf", "png" or "svg".

    Raises
    ------
    OutputError
        If the folder cannot be made or written.
    """
    folder = Path(folder)
    paths: list[Path] = []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for one in solutions:
            path = folder / f"{file_stem(one, taken=paths)}.{kind}"
            page(one).savefig(path, dpi=DPI)
            paths.append(path)
    except OSError as error:
        raise OutputError(f"cannot write figures into {folder}: {(error.strerror or str(error)).lower()}") from error
    return paths


def file_stem(one: Solution, taken: Iterable[Path] = ()) -> str:
    """A file name for a star: letters, digits, dots, dashes; made unique among those taken."""
    stem = re.sub(r"[^\w.+-]+", "_", f"{one.star}_{one.treatment}").strip("._") or "star"
    used = {path.stem for path in taken}
    name, count = stem, 1
    while name in used:
        count += 1
        name = f"{stem}_{count}"
    return name


def _draw(figure: Figure, one: Solution, numbers: dict[int, int]) -> None:
    left = figure.add_gridspec(
        2,
        2,
        left=0.06,
        right=0.60,
        top=0.875,
        bottom=0.09,
        width_ratios=(2.1, 1),
        height_ratios=(1.45, 1),
        wspace=0.06,
        hspace=0.16,
    )
    where = figure.add_subplot(left[0, 0])
    strength = figure.add_subplot(left[0, 1], sharey=where)
    excitation = figure.add_subplot(left[1, 0], sharex=where)
    points = panels.draw_map(where, one, numbers)
    panels.draw_trend(strength, one, "strength", upright=True)
    panels.draw_trend(excitation, one, "excitation_potential", upright=False)
    scale = figure.add_axes((0.45, 0.33, 0.13, 0.012))
    figure.colorbar(points, cax=scale, orientation="horizontal", extend="both")
    scale.set_title("deviation of the line / its error", fontsize=6.5, loc="left")
    panels.draw_ladder(figure.add_axes((0.655, 0.66, 0.315, 0.215)), one)
    panels.draw_lever(figure.add_axes((0.765, 0.395, 0.205, 0.19)), one)


def _write_list(figure: Figure, one: Solution, numbers: dict[int, int]) -> None:
    lines = one.lines
    rows = []
    if cut := cut_counts(one):
        rows += [*textwrap.wrap(f"crosses, left out by the cuts: {cut}", LIST_WIDTH + 20), ""]
    for i, number in list(numbers.items())[:LISTED]:
        text = f"{number:>3} {lines.ion[i]:<5} {lines.wavelength_air[i]:8.2f}  {fate(one, i)}"
        rows.append(textwrap.shorten(text.replace("  ", "\u00a0 "), LIST_WIDTH + 20, placeholder=" ..."))
    if len(numbers) > LISTED:
        rows.append(f"    and {len(numbers) - LISTED} more in the lines table")
    if len(one.candidates) > 1:
        rows += ["", "other minima:"] + [_candidate_words(item) for item in one.candidates[1 : 1 + LISTED_CANDIDATES]]
    head = f"{one.n_input} lines in the input, {one.n_matched} in the grid, {one.n_used} used"
    figure.text(0.655, 0.295, head, fontsize=7.5, va="top", parse_math=False)
    figure.text(
        0.655,
        0.277,
        "\n".join(rows) or "no line was dropped",
        fontsize=5.8,
        family="monospace",
        va="top",
        parse_math=False,
        linespacing=1.25,
    )


def _candidate_words(item: Candidate) -> str:
    place = " ".join(
        f"{panels.NAMES[name]} {value:.{panels.DECIMALS[name]}f}"
        for name, value in zip(panels.NAMES, item.parameters, strict=True)
    )
    fate = f"set aside: {item.set_aside}" if item.set_aside else f"2 d ln L {item.delta:.1f}"
    return textwrap.shorten(f"{place}; {fate}", LIST_WIDTH + 20, placeholder=" ...")
