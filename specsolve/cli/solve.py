"""``specsolve solve``: the main job."""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from specsolve.cli import bulk, parsing
from specsolve.cli.bulk import make_executor as make_executor
from specsolve.cli.inputs import Inputs, coverage, coverage_message, read_inputs, shared_notes
from specsolve.cli.outside import (
    known_of_all,
    measured_values,
    outside_options,
    priors,
    reference_parameters,
    said,
    with_outside,
)
from specsolve.cli.settings import Settings, common_options, wants_colour
from specsolve.errors import EXIT_INTERRUPTED, EXIT_SOLVED, EXIT_UNSOLVED, InputError, UsageError

if TYPE_CHECKING:
    from specsolve.balance.solution import Solution
    from specsolve.balance.star import Star

STDOUT = "-"
REFERENCE_FLAG = "reference_star"
LISTED_AT_MOST = 20


@dataclass(frozen=True, kw_only=True)
class Request:
    """What a solve was asked for, as plain values; its `arguments` go into the output.

    Attributes
    ----------
    treatment : str or None
        lte, nlte or both; None for the grid's default.
    loss : str
    columns, ions, units : dict
        Headings, spellings and units of the tables.
    limits : dict
        Line cuts by option name.
    reference : str or None
    at : dict or None
        Parameters of the reference star.
    fix : dict
        Parameter to value.
    at_errors : dict
        Their errors, where given.
    known : dict
        Parameter to (value, error).
    measured : dict
        Parallax, numax, colours, ... with their errors, by name.
    colour_scale : str or None
    alpha : float or None
        [alpha/Fe].
    outside : str or None
        Table of what is known of each star.
    wanted : tuple of str
        Names of stars; empty for all.
    grid_path, output, plots, plot_format, sheets, workers, scheduler
        Where things come from and go to.
    samples : int
        Joint samples a star.
    seed : int or None
        Of the samples.
    """

    treatment: str | None = None
    loss: str = "huber"
    columns: Mapping[str, str] = field(default_factory=dict)
    ions: Mapping[str, str] = field(default_factory=dict)
    units: Mapping[str, str] = field(default_factory=dict)
    limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    reference: str | None = None
    at: Mapping[str, float] | None = None
    fix: Mapping[str, float] = field(default_factory=dict)
    at_errors: Mapping[str, float] = field(default_factory=dict)
    known: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    measured: Mapping[str, float] = field(default_factory=dict)
    colour_scale: str | None = None
    alpha: float | None = None
    outside: str | None = None
    wanted: tuple[str, ...] = ()
    grid_path: str | None = None
    output: str | None = None
    plots: str | None = None
    plot_format: str = "pdf"
    sheets: bool | None = None
    workers: int = 1
    scheduler: str | None = None
    samples: int = 0
    seed: int | None = None

    def arguments(self) -> dict[str, Any]:
        """What decides the numbers, ready for JSON."""
        return {
            "treatment": self.treatment,
            "loss": self.loss,
            "columns": dict(self.columns),
            "ions": dict(self.ions),
            "units": dict(self.units),
            "limits": {name: list(pair) for name, pair in self.limits.items()},
            "reference": self.reference,
            "reference_parameters": dict(self.at) if self.at else None,
            "reference_errors": dict(self.at_errors),
            "fix": dict(self.fix),
            "known": {name: list(pair) for name, pair in self.known.items()},
            "measured": dict(self.measured),
            "colour_scale": self.colour_scale,
            "alpha": self.alpha,
            "stars": list(self.wanted),
            "samples": self.samples,
            "seed": self.seed,
        }

    @classmethod
    def from_arguments(cls, arguments: Mapping[str, Any], **delivery: Any) -> Request:
        """Inverse of `arguments`; headings and units of the first tables are not needed again."""
        return cls(
            treatment=arguments["treatment"],
            loss=arguments["loss"],
            limits={name: tuple(pair) for name, pair in arguments["limits"].items()},
            reference=arguments["reference"],
            at=arguments["reference_parameters"],
            at_errors=arguments["reference_errors"],
            measured=arguments["measured"],
            colour_scale=arguments["colour_scale"],
            alpha=arguments["alpha"],
            fix=arguments["fix"],
            known={name: tuple(pair) for name, pair in arguments["known"].items()},
            samples=arguments.get("samples", 0),
            seed=arguments.get("seed"),
            **delivery,
        )


def input_options(function: Any) -> Any:
    """Options that say how to read the tables; ``solve`` and ``check`` share them."""
    for option in (
        click.option("--fix", "fixed", multiple=True, metavar="NAME=VALUE", help="Hold teff, logg, feh or vmic."),
        click.option(
            "--cut",
            "cuts",
            multiple=True,
            metavar="NAME=LOW:HIGH",
            help="Lines kept: reduced_width (predicted), excitation [eV], wavelength [Angstrom].",
        ),
        click.option("--unit", "units", multiple=True, metavar="OURS=UNIT", help="Unit of a column without one."),
        click.option("--ion", "ions", multiple=True, metavar='THEIRS="Fe I"', help="Another spelling of an ion."),
        click.option("--column", "columns", multiple=True, metavar="OURS=THEIRS", help="Another column heading."),
        click.option(
            "--treatment",
            type=click.Choice(["lte", "nlte", "both"]),
            help="Line formation; both gives a row each and the differences. Default: nlte if the grid has it.",
        ),
        click.option("--grid", "grid_path", metavar="DIR", help="A response grid of your own."),
    ):
        function = option(function)
    return function


def delivery_options(function: Any) -> Any:
    """Options that say where the result goes."""
    for option in (
        click.option(
            "--sheets/--overview", default=None, help="A sheet a star, or a line a star; default sheets up to three."
        ),
        click.option("--plot-format", type=click.Choice(["pdf", "png", "svg"]), default="pdf", show_default=True),
        click.option("--plots", metavar="DIR", help="Draw one page a star into this folder."),
        click.option(
            "--output", metavar="FILE", help="Write FILE.ecsv and its lines, candidates, decisions; - for stdout."
        ),
    ):
        function = option(function)
    return function


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


def prepare(stars: list[Star], grid: Any, request: Request, options: Any) -> tuple[list[Star], Any, list[Solution]]:
    """The stars to solve, what they share, and the reference star's own solution if there is one.

    Raises
    ------
    InputError
        If the reference star is not in the tables, or its parameters are not known.
    """
    from specsolve.balance.batch import Setting, solve_star
    from specsolve.balance.differential import reference_star
    from specsolve.balance.outside_known import ALPHA
    from specsolve.balance.own_sun import solar_lines
    from specsolve.balance.solution import PARAMETER_NAMES
    from specsolve.balance.solve import fixed_outside
    from specsolve.grid.perturbed import perturbed_grid

    shared = {"treatment": request.treatment, "options": options}
    setting = Setting(**shared, known=known_of_all(request), sun=solar_lines(grid, request.treatment, options))
    chosen = reference_of(stars, request)
    if chosen is None:
        return with_outside(stars, request.outside), setting, []
    others = [star for star in stars if star.name != chosen.name]
    moved = perturbed_grid(grid, chosen.known.get(ALPHA))
    found = reference_star(chosen, moved, request.treatment, request.at, options, parameter_errors=request.at_errors)
    at = dict(zip(PARAMETER_NAMES, found.theta.tolist(), strict=True))
    bare = replace(chosen, known={name: value for name, value in chosen.known.items() if name == ALPHA})
    own = solve_star(bare, grid, Setting(**shared, fixed=fixed_outside(at), sun=setting.sun))
    own = replace(own, flags=(REFERENCE_FLAG, *own.flags), cov_list=found.covariance, notes=(*own.notes, found.note))
    return with_outside(others, request.outside), replace(setting, zero_points=found.zero_points), [own]


def reference_of(stars: list[Star], request: Request) -> Star | None:
    """The reference star: one of the tables, the one of another table, or the packaged Sun; None without one.

    Raises
    ------
    InputError
        If there is no such star, or the other table has several.
    """
    from specsolve.balance.own_sun import SUN_NAME, solar_star

    if request.reference is None:
        return None
    same = [star for star in stars if star.name == request.reference]
    if same:
        return same[0]
    path = Path(request.reference)
    if path.is_file():
        from specsolve.star_table import read_stars

        found = read_stars(path, columns=request.columns, ions=request.ions, units=request.units)
        if len(found) != 1:
            raise InputError(f"{path} has {len(found)} stars; a table of the reference star has one", path=path)
        return found[0]
    if request.reference.strip().lower() == SUN_NAME.lower():
        return solar_star()
    raise InputError(f"the reference star '{request.reference}' is neither in the tables nor a file")


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
