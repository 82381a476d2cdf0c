"""``specsolve solve``: the main job."""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from specsolve.cli import bulk, parsing
from specsolve.cli.bulk import make_executor as make_executor
from specsolve.cli.inputs import Inputs, coverage, coverage_message, read_inputs, shared_notes
from specsolve.cli.options import delivery_options, input_options
from specsolve.cli.outside import (
    measured_values,
    outside_options,
    priors,
    reference_parameters,
    said,
)
from specsolve.cli.reference import prepare
from specsolve.cli.request import Request
from specsolve.cli.settings import Settings, common_options, wants_colour
from specsolve.errors import EXIT_INTERRUPTED, EXIT_SOLVED, EXIT_UNSOLVED, InputError, UsageError

if TYPE_CHECKING:
    from specsolve.balance.solution import Solution
    from specsolve.balance.star import Star

STDOUT = "-"
LISTED_AT_MOST = 20


@click.command(
    epilog="Exit codes: 0 all solved; 3 no usable input; 4 a star or table unsolved, tied or outside the grid.",
)
@click.argument("tables", nargs=-1, required=True, metavar="TABLE...")
@delivery_options
@input_options
@click.option(
    "--reference", metavar="STAR", help="Work relative to this star of the tables, that of another table, or the Sun."
)
@click.option(
    "--reference-parameters",
    multiple=True,
    metavar="NAME=VALUE",
    help="Its teff, logg, feh; with errors as teff=5777+-10.",
)
@outside_options
@click.option(
    "--loss",
    type=click.Choice(["huber", "student", "none"]),
    default="huber",
    show_default=True,
    help="Robust weights of discordant lines.",
)
@click.option("--star", "wanted", multiple=True, metavar="STAR", help="Only this star (may be repeated).")
@click.option("--workers", type=click.IntRange(1), default=1, show_default=True, help="Processes, for many stars.")
@click.option("--scheduler", metavar="ADDRESS", help="Let the workers of a dask.distributed scheduler do it.")
@click.option(
    "--samples", type=click.IntRange(0), default=0, metavar="N", help="Also N joint samples a star, FILE_samples.ecsv."
)
@click.option("--seed", type=click.IntRange(0), help="Of the samples; nothing else is random.")
@common_options()
def solve(settings: Settings, tables: tuple[str, ...], **chosen: Any) -> int:
    """Teff, log g, [Fe/H] and microturbulence of the stars in one or more tables of equivalent widths.

    \b
    Examples:
      specsolve solve widths.ecsv
      specsolve solve widths.ecsv --output result --plots figures
      specsolve solve widths.csv --column equivalent_width=EW --unit equivalent_width=mAngstrom
      specsolve solve widths.ecsv --fix logg=2.45 --prior teff=4810+-60
      specsolve solve widths.ecsv --outside known.ecsv --alpha 0.3
      specsolve solve widths.ecsv --reference Sun --json

    Columns: specsolve columns input. A TABLE of - is read from standard input.
    """
    at, at_errors = reference_parameters(chosen.pop("reference_parameters"))
    request = Request(
        columns=parsing.column_names(chosen.pop("columns")),
        ions=parsing.ion_names(chosen.pop("ions")),
        units=parsing.unit_names(chosen.pop("units")),
        limits=parsing.cuts(chosen.pop("cuts")),
        fix=parsing.numbers(chosen.pop("fixed"), "--fix"),
        known=priors(chosen.pop("known")),
        measured=measured_values(chosen.pop("measured")),
        at=at,
        at_errors=at_errors,
        **chosen,
    )
    parsing.disjoint(request.fix, request.known)
    if request.samples and (settings.json or request.output in (None, STDOUT)):
        raise UsageError("--samples needs --output: the samples are a table of their own")
    if request.at and request.reference is None:
        raise UsageError("--reference-parameters needs --reference")
    if request.scheduler is not None and request.workers != 1:
        raise UsageError("--workers is for this computer, --scheduler for a cluster: give one of them")
    before(settings, request)
    inputs = read_inputs(tables, settings, columns=request.columns, ions=request.ions, units=request.units)
    return carry_out(settings, inputs, tables, request)


def before(settings: Settings, request: Request) -> None:
    """What can be refused before any work."""
    if settings.json and request.output == STDOUT:
        raise UsageError("--json and --output - both want standard output")
    if request.output not in (None, STDOUT):
        from specsolve.report.tables import check_writable

        check_writable(request.output)


def carry_out(
    settings: Settings, inputs: Inputs, tables: Sequence[str], request: Request, grid_identity: str = ""
) -> int:
    """Solve the stars of the inputs, deliver, and return the exit code.

    Parameters
    ----------
    settings : Settings
    inputs : Inputs
    tables : sequence of str
        Their file names, for the provenance.
    request : Request
    grid_identity : str
        Of the grid that ought to be used; a difference is said.
    """
    before(settings, request)
    stars = chosen_stars(inputs, request.wanted, request.reference)

    from specsolve.balance.options import Options
    from specsolve.balance.solve import open_grid
    from specsolve.provenance import collect

    grid = open_grid(request.grid_path)
    if grid_identity and grid_identity != grid.identity:
        settings.warn(
            f"specsolve: this grid ({grid.identity[:12]}) is not that of the first run ({grid_identity[:12]})"
        )
    treatments = grid.treatments_asked(request.treatment)
    request = replace(request, treatment="both" if len(treatments) > 1 else treatments[0])
    settings.detail(f"grid {grid.directory}: {len(grid.lines)} lines, {grid.description}, identity {grid.identity}")
    for name, of_file in inputs.files:
        settings.say(f"{name}: {coverage_message(name, coverage(of_file, grid), grid)}")
    for note, whom in shared_notes(stars).items():
        settings.say(f"{note} ({whom})")
    provenance = collect(
        inputs=tables,
        options=request.arguments(),
        seed=request.seed,
        grid={
            "identity": grid.identity,
            "atmospheres_identity": grid.atmospheres_identity,
            "description": grid.description,
        },
    )
    options = Options(
        loss=request.loss,
        samples=request.samples,
        seed=request.seed or 0,
        objective_map=request.plots is not None,
        **request.limits,
    )
    runs = []
    for name in treatments:
        others, setting, first = prepare(stars, grid, replace(request, treatment=name), options)
        runs.append(bulk.Run(setting, tuple(first)))
    stars = others
    if any(star.known for star in stars):
        settings.say(said(stars))
    if streams(settings, request, len(stars)):
        outcome = bulk.solve_to_files(settings, stars, grid, runs, request, provenance)
        click.echo(outcome.summary())
        status = list(outcome.status.values())
    else:
        solutions, outcome = solve_all(settings, stars, grid, runs, request)
        solutions = [solution.with_provenance(provenance) for solution in solutions]
        deliver(settings, solutions, provenance, request)
        status = [(one.star, one.status, one.reason) for one in solutions]
    if outcome.interrupted:
        kept, left = len(outcome.status), outcome.n_stars - len(outcome.status)
        settings.warn(f"specsolve: interrupted; {kept} stars are finished and kept, {left} are not")
        return EXIT_INTERRUPTED
    bad = [one for one in status if one[1] != "solved"]
    for star, word, reason in bad[:LISTED_AT_MOST]:
        settings.warn(f"specsolve: {star}: {word}: {reason}")
    if len(bad) > LISTED_AT_MOST:
        settings.warn(f"specsolve: {len(bad) - LISTED_AT_MOST} more are not solved; the table says why")
    return EXIT_UNSOLVED if bad or inputs.failed else EXIT_SOLVED


def streams(settings: Settings, request: Request, n_stars: int) -> bool:
    """Whether finished stars go straight into files, with a journal; no figure, sheet or JSON is asked for then."""
    return (
        request.output not in (None, STDOUT)
        and n_stars >= bulk.JOURNAL_FROM
        and not (settings.json or request.plots is not None or request.sheets or request.samples)
    )


def chosen_stars(inputs: Inputs, wanted: Sequence[str], reference: str | None) -> list[Star]:
    """The stars to solve: all, or the wanted ones and the reference star."""
    if not wanted:
        return inputs.stars
    names = [star.name for star in inputs.stars]
    for name in wanted:
        if name not in names:
            shown = ", ".join(names[:10]) + (", ..." if len(names) > 10 else "")
            raise InputError(f"no star '{name}' in the tables; they have {shown}")
    return [star for star in inputs.stars if star.name in wanted or star.name == reference]


def solve_all(
    settings: Settings, stars: list[Star], grid: Any, runs: Sequence[bulk.Run], request: Request
) -> tuple[list[Solution], bulk.Outcome]:
    """Solve the stars in memory; on Ctrl-C the finished ones are kept.

    Returns
    -------
    solutions : list of Solution
        Those of reference stars, then those of the stars in the order of the input, treatments beside each other.
    outcome : Outcome
    """
    from specsolve.cli.progress import counting

    done: dict[int, Solution] = {}
    interrupted = False
    total = len(stars) * len(runs)
    try:
        with (
            bulk.executor_for(request.workers, request.scheduler) as executor,
            counting("stars", quiet=settings.verbosity < 0 or total < 3) as progress,
        ):
            for place, solution in bulk.stream(stars, grid, runs, executor=executor):
                done[place] = solution
                settings.detail(f"{solution.star}: {solution.status}, {len(solution.candidates)} minima")
                if progress:
                    progress(len(done), total)
    except KeyboardInterrupt:
        interrupted = True
    first = [one for run in runs for one in run.first]
    solutions = first + [done[place] for place in sorted(done)]
    status = {place: (one.star, one.status, one.reason) for place, one in enumerate(solutions)}
    return solutions, bulk.Outcome(status, interrupted, len(first) + total)


def deliver(settings: Settings, solutions: Sequence[Solution], provenance: Mapping[str, Any], request: Request) -> None:
    """Write tables and figures, print sheets or JSON."""
    from specsolve.report import tables, treatments
    from specsolve.report.extras import write_extras

    if request.output == STDOUT:
        tables.tables_of(solutions, provenance)["stars"].write(sys.stdout, format="ascii.ecsv", delimiter=",")
    elif settings.json:
        content = tables.to_json(solutions, provenance)
        if request.treatment == "both":
            content["differences"] = treatments.rows_for_json(solutions)
        click.echo(json.dumps(content, indent=1, allow_nan=False))
    else:
        print_sheets(solutions, True if request.sheets is None and settings.verbosity > 0 else request.sheets)
        if request.treatment == "both":
            click.echo("\n".join(treatments.words(solutions)))
    if request.output not in (None, STDOUT) and solutions:
        paths = tables.write_solutions(solutions, request.output, provenance)
        if request.treatment == "both":
            paths["differences"] = treatments.write_differences(request.output, provenance)
        paths |= write_extras(solutions, request.output, provenance)
        settings.say("wrote " + ", ".join(str(path) for path in paths.values()))
    if request.plots is not None:
        from specsolve.report.figures import save_pages
        from specsolve.report.objective_map import save_maps

        pages = save_pages(solutions, Path(request.plots), request.plot_format)
        maps = save_maps(solutions, request.plots, [path.stem for path in pages], request.plot_format)
        drawn = f"{len(pages)} page{'s' if len(pages) != 1 else ''} and {len(maps)} map{'s' if len(maps) != 1 else ''}"
        settings.say(f"drew {drawn} into {request.plots}")


def print_sheets(solutions: Sequence[Solution], sheets: bool | None) -> None:
    """Sheets on stdout, coloured if it is a terminal and NO_COLOR is not set."""
    from rich.console import Console

    from specsolve.report.sheet import print_solutions

    terminal = sys.stdout.isatty()
    console = Console(
        no_color=not wants_colour(sys.stdout), highlight=False, width=None if terminal else 160, soft_wrap=not terminal
    )
    print_solutions(solutions, console, full=sheets)
