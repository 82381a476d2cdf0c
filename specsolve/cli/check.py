"""``specsolve check``: a dry run of ``solve``."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import click
import numpy as np

from specsolve.cli import parsing
from specsolve.cli.inputs import coverage, coverage_message, read_inputs
from specsolve.cli.options import input_options
from specsolve.cli.settings import Settings, common_options
from specsolve.errors import EXIT_SOLVED, EXIT_UNSOLVED
from specsolve.schema import SCHEMA

if TYPE_CHECKING:
    from specsolve.balance.star import Star

LISTED = 6


@click.command(epilog="Exit codes: 0 every star could be solved; 3 no usable input; 4 a star or table could not.")
@click.argument("tables", nargs=-1, required=True, metavar="TABLE...")
@input_options
@common_options()
def check(
    settings: Settings,
    tables: tuple[str, ...],
    grid_path: str | None,
    treatment: str | None,
    columns: Sequence[str],
    ions: Sequence[str],
    units: Sequence[str],
    cuts: Sequence[str],
    fixed: Sequence[str],
) -> int:
    """Dry run: which lines match, which are left out and why, what errors are assumed. Nothing is solved.

    \b
    Examples:
      specsolve check widths.csv
      specsolve check widths.csv --unit equivalent_width=mAngstrom --ion FeI="Fe I"
    """
    fix = parsing.numbers(fixed, "--fix")
    inputs = read_inputs(
        tables,
        settings,
        columns=parsing.column_names(columns),
        ions=parsing.ion_names(ions),
        units=parsing.unit_names(units),
    )
    from specsolve.balance.options import Options
    from specsolve.balance.solve import open_grid

    grid = open_grid(grid_path)
    treatment = grid.treatments_asked(treatment)[-1]  # the cuts of both hardly differ
    options = Options(**parsing.cuts(cuts))
    reports = []
    for name, stars in inputs.files:
        message = coverage_message(name, coverage(stars, grid), grid)
        of_file = [star_report(star, grid, treatment, options, fix) for star in stars]
        reports.append({"table": name, "coverage": message, "stars": of_file})
    if settings.json:
        click.echo(json.dumps({"schema": SCHEMA, "tables": reports}, indent=1))
    else:
        for report in reports:
            click.echo(f"{report['table']}: {len(report['stars'])} stars; {report['coverage']}")
            for star in report["stars"]:
                print_star(star)
    hopeless = [star for report in reports for star in report["stars"] if not star["enough"]]
    return EXIT_UNSOLVED if hopeless or inputs.failed else EXIT_SOLVED


def star_report(star: Star, grid: Any, treatment: str, options: Any, fix: dict[str, float]) -> dict[str, Any]:
    """What a solve would meet in one star, ready for JSON."""
    from specsolve.balance.minima import enough_lines, preliminary_lines, shortage
    from specsolve.balance.problem import Problem
    from specsolve.balance.solve import fixed_outside

    problem = Problem(star=star, grid=grid, treatment=treatment, options=options, outside=fixed_outside(fix))
    allowed = preliminary_lines(problem)
    enough = bool(enough_lines(problem, allowed))
    reasons = Counter(str(reason) for reason in problem.reasons if reason)
    unmatched = [
        f"{ion} {wavelength:.2f}"
        for ion, wavelength, place in zip(star.ion, star.wavelength_air, problem.match.index, strict=True)
        if place < 0
    ]
    ion = problem.star.ion[problem.rows]
    words = [] if enough else [shortage(problem, allowed)[0]]
    if problem.match.looks_like_vacuum:
        words.append("the wavelengths look like vacuum wavelengths: convert them to air")
    return {
        "star": star.name,
        "n_lines": len(star),
        "n_matched": problem.match.n_matched,
        "n_usable": {name: int(np.count_nonzero(allowed & (ion == name))) for name in problem.pair},
        "n_errors_assumed": int(np.count_nonzero(star.error_assumed)),
        "left_out": dict(sorted(reasons.items())),
        "strength_cut": int(np.count_nonzero(~allowed)),
        "unmatched": unmatched,
        "notes": list(star.notes),
        "enough": enough and not problem.match.looks_like_vacuum,
        "trouble": words,
    }


def print_star(report: dict[str, Any]) -> None:
    """The report of one star as text."""
    usable = " + ".join(f"{number} {ion}" for ion, number in report["n_usable"].items())
    click.echo(f"  {report['star']}: {report['n_lines']} lines, {report['n_matched']} in the grid, usable {usable}")
    if report["left_out"]:
        click.echo(
            "    left out: "
            + ", ".join(f"{number} {reason.replace('_', ' ')}" for reason, number in report["left_out"].items())
        )
    if report["strength_cut"]:
        click.echo(f"    {report['strength_cut']} more beyond the strength limits (the final cut acts on predictions)")
    if report["unmatched"]:
        shown = ", ".join(report["unmatched"][:LISTED])
        more = len(report["unmatched"]) - LISTED
        click.echo(f"    not in the grid: {shown}" + (f" and {more} more" if more > 0 else ""))
    if report["n_errors_assumed"]:
        from specsolve.balance.star import ASSUMED_ERROR_FLOOR_MA, ASSUMED_ERROR_FRACTION

        click.echo(
            f"    {report['n_errors_assumed']} widths without an error: {ASSUMED_ERROR_FLOOR_MA:g} mA and "
            f"{100 * ASSUMED_ERROR_FRACTION:g} % of the width are assumed"
        )
    for text in (*report["notes"], *report["trouble"]):
        click.echo(f"    {text}")
