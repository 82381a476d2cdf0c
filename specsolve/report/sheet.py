"""What the terminal shows: one sheet a star, one line a star for many."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.report.line_fates import cut_counts, fate, worth_a_look

if TYPE_CHECKING:
    from rich.console import Console

    from specsolve.balance.solution import Solution

DECIMALS = {"teff": 0, "logg": 2, "feh": 3, "vmic": 2}
NAMES = {"teff": "Teff", "logg": "log g", "feh": "[Fe/H]", "vmic": "vmic"}
UNITS = {"teff": "K", "logg": "", "feh": "", "vmic": "km/s"}
RESIDUAL_WORDS = (
    ("excitation slope", "dex/eV", 4),
    ("ionization offset", "dex", 3),
    ("metallicity offset", "dex", 3),
    ("strength slope", "dex/dex", 3),
)
STATUS_STYLE = {"solved": "green", "tied": "yellow", "outside_grid": "red", "unsolved": "red"}
LISTED_LINES = 8
LEAST_SHARE = 0.005  # of a parameter from elsewhere, that is worth a word
LISTED_INFLUENCES = 4
SHEETS_AT_MOST = 3


def headline(solution: Solution) -> str:
    """First line of every sheet: treatment, solar iron, grid."""
    identity = f" {solution.grid_identity[:12]}" if solution.grid_identity else ""
    return (
        f"treatment {solution.treatment} | solar iron {solution.solar_iron:.2f} | "
        f"grid {solution.grid_description or 'unnamed'}{identity}"
    )


def print_solutions(solutions: Sequence[Solution], console: Console, *, full: bool | None = None) -> None:
    """Print the solutions of one run.

    Parameters
    ----------
    solutions : sequence of Solution
    console : rich.console.Console
    full : bool, optional
        One sheet a star, or one line a star; by default sheets for up to three stars.
    """
    if not solutions:
        return
    if full is None:
        full = len(solutions) <= SHEETS_AT_MOST
    heads = dict.fromkeys(headline(solution) for solution in solutions)
    for head in heads:
        console.print(head, style="bold", markup=False)
    if full:
        for solution in solutions:
            console.print()
            print_sheet(solution, console, named=len(heads) > 1)
    else:
        print_overview(solutions, console)


def print_overview(solutions: Sequence[Solution], console: Console) -> None:
    """One line a star: parameters with star and list errors, lines, scatter, status and flags."""
    table = _table(
        "star",
        "Teff",
        "log g",
        "[Fe/H]",
        "vmic",
        "A(Fe I)",
        "A(Fe II)",
        "lines",
        "scatter",
        "status",
        right=range(1, 9),
    )
    mixed = len({one.treatment for one in solutions}) > 1
    for one in solutions:
        status = one.status if one.status == "solved" else f"{one.status}: {one.reason}"
        words = "; ".join([status, *one.flags])
        table.add_row(
            f"{one.star} {one.treatment}" if mixed else one.star,
            *(_with_error(one, name) for name in NAMES),
            _number(one.fe1.abundance, 2),
            _number(one.fe2.abundance, 2),
            f"{one.fe1.n_lines} + {one.fe2.n_lines}",
            _number(one.line_scatter, 3),
            _styled(words, STATUS_STYLE.get(one.status, "")),
        )
    console.print(table)
    console.print(
        "Errors: the star's own widths and line scatter / shared by all stars on this list. f = fixed. "
        "lines = Fe I + Fe II with weight.",
        style="dim",
    )
    notes: dict[str, list[str]] = {}
    for one in solutions:
        for note in remarks(one):
            notes.setdefault(note, []).append(one.star)
    for note, stars in notes.items():
        whom = "all stars" if len(stars) == len(solutions) else ", ".join(dict.fromkeys(stars))
        console.print(f"- {note} ({whom})", style="dim", markup=False)


def outside_words(one: Solution) -> str:
    """Which part of each free parameter comes from elsewhere, and a given [alpha/Fe]; empty where nothing does."""
    parts = [
        f"{NAMES[name]} {100 * share:.0f} %"
        for name, share in zip(NAMES, one.outside_share, strict=True)
        if name not in one.fixed and share > LEAST_SHARE
    ]
    words = [f"share from elsewhere: {', '.join(parts)}; the rest comes from the lines"] if parts else []
    if one.alpha_given:
        words.append(f"[alpha/Fe] {one.alpha:+.2f} as given")
    return "; ".join(words)


def remarks(one: Solution) -> list[str]:
    """Limits and notes of a star, without the count of lines (shown anyway) and without tracebacks (in the table)."""
    return [
        text
        for text in (*one.validity, *one.notes)
        if not text.endswith("lines are in the grid") and not text.startswith("Traceback")
    ]


def print_sheet(one: Solution, console: Console, named: bool = False) -> None:
    """The sheet of one star; `named` says the treatment beside its name."""
    name = f"{one.star} ({one.treatment})" if named else one.star
    console.print(_styled(f"{name}: {one.status}", "bold " + STATUS_STYLE.get(one.status, "")))
    if one.reason:
        console.print(f"  {one.reason}", markup=False)
    if not np.all(np.isnan(one.parameters)):
        console.print(_parameter_table(one))
    if np.isfinite(one.fe1.abundance) or np.isfinite(one.fe2.abundance):
        console.print(_iron_table(one))
        console.print(_residual_table(one))
    if one.sensitivities:
        console.print(_sensitivity_table(one))
    _print_lines(one, console)
    _print_candidates(one, console)
    if one.alternative_parameters:
        _print_alternatives(one, console)
    for entry in one.outside:
        if entry.get("name") in one.fixed:
            continue  # its row says "fixed"
        words = ", ".join(f"{key} {_short(value)}" for key, value in entry.items())
        console.print(f"  from elsewhere: {words}", markup=False)
    shared = outside_words(one)
    if shared:
        console.print(f"  {shared}", markup=False)
    for name, shift in one.systematics.items():
        if not np.any(shift):
            continue  # everything is fixed
        words = ", ".join(
            f"{NAMES[key]} {signed(value, DECIMALS[key])}" for key, value in zip(NAMES, shift, strict=True)
        )
        console.print(f"  systematic {name.replace('_', ' ')}: {words}", markup=False)
    if one.flags:
        console.print(f"  flags: {', '.join(one.flags)}", markup=False)
    for text in remarks(one):
        console.print(f"  - {text}", style="dim", markup=False)


def _parameter_table(one: Solution) -> Any:
    table = _table("", "value", "error (star)", "error (list)", "", right=range(1, 4))
    for i, name in enumerate(NAMES):
        digits = DECIMALS[name]
        fixed = name in one.fixed
        table.add_row(
            NAMES[name],
            _number(one.parameters[i], digits),
            "" if fixed else _number(one.errors_star[i], digits),
            "" if fixed else _number(one.errors_list[i], digits),
            UNITS[name] + (" fixed" if fixed else ""),
        )
    return table


def _iron_table(one: Solution) -> Any:
    table = _table("", "A(Fe)", "error", "scatter", "lines", "[Fe/H]", "own Sun", "[Fe/H] own", right=range(1, 8))
    for ion in (one.fe1, one.fe2):
        table.add_row(
            ion.ion,
            _number(ion.abundance, 3),
            _number(float(np.hypot(ion.error_star, ion.error_list)), 3),
            _number(ion.scatter, 3),
            str(ion.n_lines),
            _number(ion.feh, 3),
            _number(ion.own_sun, 3),
            _number(ion.feh_own_sun, 3),
        )
    return table


def _residual_table(one: Solution) -> Any:
    table = _table("residual", "value", "error", "", "", right=range(1, 3))
    errors = np.sqrt(np.clip(np.diag(one.residual_covariance), 0, None))
    names = ("excitation_slope", "ionization_offset", "metallicity_offset", "strength_slope")
    for name, (words, unit, digits), value, error in zip(names, RESIDUAL_WORDS, one.residuals, errors, strict=True):
        removed = name in one.removed_residuals
        table.add_row(
            words,
            signed(value, digits),
            _number(error, digits),
            unit,
            "reported, not used" if removed else "",
        )
    return table


def _sensitivity_table(one: Solution) -> Any:
    table = _table("if", "A(Fe I)", "A(Fe II)", right=range(1, 3))
    for item in one.sensitivities:
        unit = UNITS[item.parameter]
        table.add_row(
            f"{NAMES[item.parameter]} {item.shift:+g}{' ' + unit if unit else ''}",
            signed(item.d_fe1, 3),
            signed(item.d_fe2, 3),
        )
    return table


def _print_lines(one: Solution, console: Console) -> None:
    lines = one.lines
    console.print(
        f"  {one.n_input} lines in the input, {one.n_matched} in the grid, {one.n_used} used; "
        f"scatter {_number(one.line_scatter, 3)} dex; Fe II log gf: {one.fe2_scale or 'as given'}",
        markup=False,
    )
    if cut := cut_counts(one):
        console.print(f"    left out by the cuts: {cut}", style="dim", markup=False)
    concerned = worth_a_look(one)
    for i in concerned[:LISTED_LINES]:
        console.print(f"    {_line_name(one, i)}  {fate(one, i)}", style="dim", markup=False)
    if concerned.size > LISTED_LINES:
        console.print(f"    and {concerned.size - LISTED_LINES} more, all in the lines table (--output)", style="dim")
    for i in most_influential(one)[:LISTED_INFLUENCES]:
        shifts = ", ".join(
            f"{NAMES[name]} {signed(lines.influence[i, j], DECIMALS[name])}" for j, name in enumerate(NAMES)
        )
        console.print(f"    without {_line_name(one, i)}: {shifts}", style="dim", markup=False)


def most_influential(one: Solution) -> np.ndarray:
    """Indices of the used lines, the one whose loss moves the star most (in its own errors) first."""
    sigma = np.where(one.errors_star > 0, one.errors_star, np.inf)
    sigma = np.where(np.isfinite(one.errors_star), sigma, np.inf)
    size = np.nanmax(np.abs(np.nan_to_num(one.lines.influence)) / sigma, axis=1, initial=0.0)
    order = np.argsort(-size, kind="stable")
    return order[one.lines.used[order] & (size[order] > 0)]


def _print_candidates(one: Solution, console: Console) -> None:
    if len(one.candidates) < 2:
        return
    console.print(f"  {len(one.candidates)} minima found:", markup=False)
    for item in one.candidates:
        place = ", ".join(
            f"{NAMES[name]} {value:.{DECIMALS[name]}f}" for name, value in zip(NAMES, item.parameters, strict=True)
        )
        words = [f"2 d ln L {item.delta:.1f}"]
        if np.isfinite(item.odds):
            words.append(f"odds {item.odds:.3g}")
        words += [*item.flags, *([f"set aside: {item.set_aside}"] if item.set_aside else [])]
        console.print(f"    {item.index}: {place}; {'; '.join(words)}", style="dim", markup=False)


def _print_alternatives(one: Solution, console: Console) -> None:
    for name, place in one.alternative_parameters.items():
        words = ", ".join(f"{NAMES[key]} {value:.{DECIMALS[key]}f}" for key, value in zip(NAMES, place, strict=True))
        console.print(f"  under {name.replace('_', ' ')}: {words}", markup=False)


def _line_name(one: Solution, i: int) -> str:
    return f"{one.lines.ion[i]:<5} {one.lines.wavelength_air[i]:.2f}"


def _with_error(one: Solution, name: str) -> str:
    i = list(NAMES).index(name)
    digits = DECIMALS[name]
    if not np.isfinite(one.parameters[i]):
        return "-"
    value = f"{one.parameters[i]:.{digits}f}"
    if name in one.fixed:
        return f"{value} f"
    return f"{value} ± {_number(one.errors_star[i], digits)}/{_number(one.errors_list[i], digits)}"


def _number(value: float, digits: int) -> str:
    return f"{value:.{digits}f}" if np.isfinite(value) else "-"


def signed(value: float, digits: int) -> str:
    """A number with its sign; a zero never gets a minus.

    Examples
    --------
    >>> signed(-1e-9, 3)
    '+0.000'
    """
    return f"{round(float(value), digits) + 0.0:+.{digits}f}" if np.isfinite(value) else "-"


def _short(value: Any) -> str:
    return f"{value:g}" if isinstance(value, float) else str(value)


def _styled(text: str, style: str) -> Any:
    from rich.text import Text

    return Text(text, style=style.strip())


def _table(*headings: str, right: Any = ()) -> Any:
    from rich.table import Table

    table = Table(box=None, pad_edge=False, padding=(0, 1), header_style="dim")
    for i, heading in enumerate(headings):
        last = i == len(headings) - 1 and i not in right
        table.add_column(heading, justify="right" if i in right else "left", overflow="fold", no_wrap=not last)
    return table
