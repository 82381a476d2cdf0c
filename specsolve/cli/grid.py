"""``specsolve grid``: build, describe and check response grids."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
import numpy as np

from specsolve.cli import parsing
from specsolve.cli.settings import Settings, common_options
from specsolve.errors import UsageError

if TYPE_CHECKING:
    from specsolve.grid.engine import Engine
    from specsolve.grid.plan import Plan
    from specsolve.grid.store import ResponseGrid
    from specsolve.lines import LineList

JSON_SCHEMA = 1
FOLDER = click.Path(path_type=Path, file_okay=False)


@click.group()
def grid() -> None:
    """Build, describe and check response grids: widths of a line list over stellar parameters."""


@grid.command()
@click.argument("linelist", type=click.Path(path_type=Path, dir_okay=False))
@click.option("--output", "directory", type=FOLDER, required=True, help="Folder of the grid, new or to be extended.")
@click.option("--teff", help="Nodes in K: START:STOP:STEP, A,B,C or one number. Default: all of the atmospheres.")
@click.option("--logg", help="Nodes in dex.")
@click.option("--mh", help="Nodes in dex.")
@click.option("--vmic", help="Nodes in km/s. Default 0:3.5:0.5.")
@click.option("--atmospheres", type=FOLDER, help="A store of your own; default the packaged one.")
@click.option("--treatment", type=click.Choice(["lte", "nlte", "both"]), default="lte", show_default=True,
              help="Line formation.")  # fmt: skip
@click.option("--departures", type=FOLDER, help="Departures of your own, for nlte; default the packaged ones.")
@click.option("--reuse", "others", multiple=True, type=FOLDER, help="Take lines over from this grid too.")
@click.option("--from-scratch", is_flag=True, help="Take no lines over, not even from the packaged grid.")
@click.option("--workers", type=click.IntRange(1), default=1, show_default=True, help="Processes.")
@click.option("--column", "columns", multiple=True, metavar="OURS=THEIRS", help="Another column heading.")
@click.option("--ion", "ions", multiple=True, metavar='THEIRS="Fe I"', help="Another spelling of an ion.")
@click.option("--unit", "units", multiple=True, metavar="OURS=UNIT", help="Unit of a column without one.")
@click.option("--dry-run", is_flag=True, help="Say what would be computed, and how long it takes.")
@common_options()
def build(
    settings: Settings,
    linelist: Path,
    directory: Path,
    teff: str | None,
    logg: str | None,
    mh: str | None,
    vmic: str | None,
    atmospheres: Path | None,
    treatment: str,
    departures: Path | None,
    others: tuple[Path, ...],
    from_scratch: bool,
    workers: int,
    columns: Sequence[str],
    ions: Sequence[str],
    units: Sequence[str],
    dry_run: bool,
) -> None:
    """Compute a response grid for the lines of LINELIST, a line list or a table of stars.

    \b
    Examples:
      specsolve grid build my_lines.ecsv --output my_grid
      specsolve grid build widths.ecsv --output my_grid --workers 4
      specsolve grid build my_lines.ecsv --output small --teff 5000:6000:250 --logg 4:5:0.5 --mh 0
      specsolve grid build my_lines.ecsv --output my_grid --treatment both

    Lines that the packaged grid or the grid in the output folder has are not computed again. An interrupted build goes
    on when the same command is given again.
    """
    from specsolve.atmosphere.store import AtmosphereStore
    from specsolve.cli.progress import counting
    from specsolve.grid.axes import parse_axis_subset
    from specsolve.grid.build import build_grid
    from specsolve.grid.plan import plan_build

    texts = {"teff": teff, "logg": logg, "mh": mh, "vmic": vmic}
    axes = {name: None if text is None else parse_axis_subset(text) for name, text in texts.items()}
    store = AtmosphereStore.packaged() if atmospheres is None else AtmosphereStore.open(atmospheres)
    lines = read_lines(linelist, columns, ions, units)
    sources = [] if from_scratch else other_grids(others)
    treatments = ("lte", "nlte") if treatment == "both" else (treatment,)
    if departures is not None and "nlte" not in treatments:
        raise UsageError("--departures is for --treatment nlte or both")
    if dry_run:
        contents, words = [], []
        for name in treatments:
            plan = plan_build(lines, directory, store, axes, name, sources, engine_of(name, departures))
            for remark in plan.remarks:
                settings.say(remark)
            contents.append({"treatment": name, **plan_content(plan, workers)})
            words.append(f"{name}: {plan_words(plan, workers)}")
        report(settings, contents[0] if len(contents) == 1 else {"treatments": contents}, "\n".join(words))
        return

    def announce(plan: Plan) -> None:
        for remark in plan.remarks:
            settings.say(remark)
        settings.say(f"{plan.treatment}: {plan_words(plan, workers)}")
        if plan.treatment == "nlte":
            say_approximate(settings, plan.new_lines)

    for name in treatments:
        with counting("nodes", quiet=settings.verbosity < 0) as progress:
            made = build_grid(
                lines, directory, atmospheres=store, **axes, treatment=name, others=sources, workers=workers,
                engine=engine_of(name, departures), progress=progress, announce=announce,
            )  # fmt: skip
    report(settings, content_of(made), f"{made.directory}: {len(made.lines)} lines, identity {made.identity[:12]}")


def say_approximate(settings: Settings, lines: LineList) -> None:
    """Name the lines whose levels are not in the model atom."""
    from specsolve.nlte.line_levels import line_levels

    names = lines.key[line_levels(lines).approximate].tolist() if len(lines) else []
    if names:
        settings.say(
            f"{len(names)} lines have a level that the model atom lacks; the nearest of its parity stands for it: "
            + ", ".join(names)
        )


def engine_of(treatment: str, departures: Path | None) -> Engine:
    """What computes the widths of a treatment; with departures of one's own if given."""
    from specsolve.grid.engine import ENGINES, nlte_engine
    from specsolve.nlte.departures import DepartureStore

    if treatment == "nlte" and departures is not None:
        return nlte_engine(DepartureStore.open(departures))
    return ENGINES[treatment]()


@grid.command()
@click.argument("directory", type=FOLDER, required=False)
@click.option("--lines", "list_lines", is_flag=True, help="List the lines too.")
@common_options()
def info(settings: Settings, directory: Path | None, list_lines: bool) -> None:
    """Describe the grid in DIRECTORY, or the packaged one.

    \b
    Examples:
      specsolve grid info
      specsolve grid info my_grid --lines
    """
    opened = open_grid(directory)
    words = info_words(opened)
    if list_lines:
        rows = zip(opened.lines.key.tolist(), opened.lines.log_gf.tolist(), strict=True)
        words += "\n" + "\n".join(f"  {key:<28} log gf {log_gf:+.3f}" for key, log_gf in rows)
    report(settings, content_of(opened, list_lines), words)


@grid.command()
@click.argument("directory", type=FOLDER, required=False)
@click.option("--points", "n_points", type=click.IntRange(1), default=20, show_default=True, help="Points.")
@click.option("--metallicities", type=click.IntRange(0), default=2, show_default=True,
              help="Different [M/H] of the points, a minute each for opacity tables. 0: on nodes.")  # fmt: skip
@click.option("--treatment", default="lte", show_default=True, help="Line formation.")
@click.option("--atmospheres", type=FOLDER, help="The store that the grid was built on; default the packaged one.")
@click.option("--parameters/--no-parameters", default=True, show_default=True, help="Solve each point as a star.")
@click.option("--seed", type=int, default=1, show_default=True, help="Of the choice of points.")
@common_options()
def check(
    settings: Settings,
    directory: Path | None,
    n_points: int,
    metallicities: int,
    treatment: str,
    atmospheres: Path | None,
    parameters: bool,
    seed: int,
) -> None:
    """Compare the grid in DIRECTORY, or the packaged one, with the full engine at random points between nodes.

    At every point an atmosphere is converged and the widths of all lines are computed; the error is that of the
    abundances, and of the parameters, that the grid gives for these widths.

    \b
    Examples:
      specsolve grid check
      specsolve grid check my_grid --points 100 --metallicities 5 --seed 7
    """
    from functools import partial

    from specsolve.atmosphere.store import AtmosphereStore
    from specsolve.cli.progress import counting
    from specsolve.errors import InputError
    from specsolve.grid.check import check_points, converged_atmosphere, random_points
    from specsolve.grid.engine import ENGINES, solved_engine

    opened = open_grid(directory)
    store = AtmosphereStore.packaged() if atmospheres is None else AtmosphereStore.open(atmospheres)
    if store.identity != opened.atmospheres_identity:
        raise InputError("the grid was built on other atmospheres; name their folder with --atmospheres")
    engine = solved_engine() if treatment == "nlte" else ENGINES[treatment]()
    points = random_points(opened, treatment, n_points, np.random.default_rng(seed), metallicities)
    points = points[np.argsort(points[:, 2], kind="stable")]  # one opacity table after the other
    with counting("points", quiet=settings.verbosity < 0) as progress:
        result = check_points(
            opened,
            points,
            partial(converged_atmosphere, store),
            engine,
            treatment,
            progress=progress,
        )
    content: dict[str, Any] = {"grid": opened.identity, "seed": seed, "abundance_error": result.summary()}
    words = check_words(result.summary())
    if parameters:
        errors = parameter_errors(opened, result, treatment)
        content["parameter_error"] = parameter_summary(errors)
        words += "\n" + parameter_words(content["parameter_error"])
    report(settings, content, words)


def read_lines(path: Path, columns: Sequence[str], ions: Sequence[str], units: Sequence[str]) -> LineList:
    """Lines of a line list or star table, with the options of ``solve`` for other headings, spellings and units."""
    from specsolve.lines import line_list_from_table
    from specsolve.lines.reading import read_table

    names = parsing.column_names(columns)
    table = read_table(path)
    for ours, unit in parsing.unit_names(units).items():
        theirs = names.get(ours, ours)
        if theirs in table.colnames and table[theirs].unit is None:
            table[theirs].unit = unit
    return line_list_from_table(table, columns=names, ions=parsing.ion_names(ions), path=path)


def other_grids(directories: Sequence[Path]) -> list[ResponseGrid]:
    """The grids to take lines over from: the named ones and the packaged one, if there is one."""
    from specsolve.grid.store import HEADER_NAME, PACKAGED, ResponseGrid

    named = [ResponseGrid.open(directory) for directory in directories]
    return [*named, ResponseGrid.packaged()] if (PACKAGED / HEADER_NAME).exists() else named


def open_grid(directory: Path | None) -> ResponseGrid:
    """The grid in a folder, or the packaged one."""
    from specsolve.grid.store import ResponseGrid

    return ResponseGrid.packaged() if directory is None else ResponseGrid.open(directory)


def plan_content(plan: Plan, workers: int) -> dict[str, Any]:
    """What a build will do, for JSON."""
    from specsolve.grid.engine import estimated_seconds

    return {
        "lines": len(plan.lines),
        "present": plan.covered,
        "taken_over": len(plan.taken),
        "computed": int(plan.computed.size),
        "nodes": len(plan.nodes),
        "missing_nodes": len(plan.missing),
        "seconds": round(estimated_seconds(plan.computed.size, len(plan.nodes), plan.n_widths, workers)),
    }


def plan_words(plan: Plan, workers: int) -> str:
    """What a build will do, in a line."""
    content = plan_content(plan, workers)
    seconds = content["seconds"]
    time = f"{seconds} s" if seconds < 100 else f"{round(seconds / 60)} min"
    there = f"{content['present']} lines are there, " if content["present"] else ""
    taken = f"{content['taken_over']} are taken over, " if content["taken_over"] else ""
    return (
        f"{there}{taken}{content['computed']} lines to compute at {content['nodes']} nodes "
        f"({content['missing_nodes']} have no atmosphere), about {time}"
    )


def content_of(opened: ResponseGrid, with_lines: bool = False) -> dict[str, Any]:
    """A grid, for JSON."""
    content: dict[str, Any] = {
        "directory": str(opened.directory),
        "description": opened.description,
        "identity": opened.identity,
        "atmospheres_identity": opened.atmospheres_identity,
        "axes": {name: values.tolist() for name, values in opened.axes.items()},
        "n_lines": len(opened.lines),
        "treatments": {
            name: {"nodes": int(opened.node_valid(name).sum()), "missing": len(opened.missing(name))}
            for name in opened.treatments
        },
        "builds": opened.header["builds"],
    }
    if with_lines:
        content["lines"] = opened.lines.to_columns()
    return content


def info_words(opened: ResponseGrid) -> str:
    """A grid, in words."""
    ions, counts = np.unique(opened.lines.ion, return_counts=True)
    size = sum((opened.directory / block.file).stat().st_size for block in opened.blocks) / 1e6
    rows = [
        str(opened.directory),
        opened.description,
        f"identity {opened.identity}",
        f"atmospheres {opened.atmospheres_identity}",
        f"lines {len(opened.lines)}: " + ", ".join(f"{n} {ion}" for ion, n in zip(ions, counts, strict=True)),
        f"wavelengths {opened.lines.wavelength_air.min():.1f} to {opened.lines.wavelength_air.max():.1f} Angstrom, air",
    ]
    for axis in (*opened.node_axes, *opened.line_axes):
        rows.append(f"{axis.name:<5} [{axis.unit}] " + " ".join(f"{v:g}" for v in axis.values))
    for name in opened.treatments:
        missing = opened.missing(name)
        rows.append(f"{name}: {int(opened.node_valid(name).sum())} nodes, {len(missing)} missing, {size:.1f} MB")
        reasons = [reason.split(";")[0].rstrip(")") + ")" * (reason.count("(") > 0) for reason in missing.values()]
        rows += [f"  {reasons.count(reason)} missing: {reason}" for reason in sorted(set(reasons))]
    return "\n".join(rows)


def check_words(summary: dict[str, dict[str, float]]) -> str:
    """Errors of abundances, a line a kind of cell."""
    rows = ["error of line abundances, grid against full engine [dex]"]
    for name, row in summary.items():
        sizes = f"median {row['median']:.4f}  99 % {row['percentile_99']:.4f}  worst {row['worst']:.4f}"
        sizes += f"  (log W: 99 % {row['width_percentile_99']:.4f})"
        rows.append(
            f"  {name.replace('_', ' '):<20} {row['points']:4d} points {row['pairs']:6d} widths"
            + (f"  {sizes}" if row["pairs"] else "")
        )
    return "\n".join(rows)


def parameter_errors(opened: ResponseGrid, result: Any, treatment: str) -> np.ndarray:
    """Solved minus true teff, logg, feh, vmic of every point taken as a star without noise; nan if it is not solved."""
    from specsolve.balance.solve import solve
    from specsolve.balance.star import Star
    from specsolve.grid.check import USABLE

    lines = opened.lines
    errors = []
    for theta, log_widths in zip(result.points, result.log_widths, strict=True):
        usable = (log_widths > USABLE[0]) & (log_widths < USABLE[1])
        width = 1e3 * lines.wavelength_air[usable] * 10.0 ** log_widths[usable]  # mA
        star = Star.from_arrays(
            "point", lines.wavelength_air[usable], lines.ion[usable], width, 0.01 * width,
            excitation_potential=lines.excitation_potential[usable],
        )  # fmt: skip
        solution = solve(star, opened, treatment=treatment)
        found = np.array(solution.parameters, dtype=float)
        errors.append(found - theta if solution.status == "solved" else np.full(4, np.nan))
    return np.array(errors)


def parameter_summary(errors: np.ndarray) -> dict[str, Any]:
    """Median and worst absolute error of each parameter, and how many points were solved."""
    solved = np.isfinite(errors).all(axis=1)
    out: dict[str, Any] = {"points": len(errors), "solved": int(solved.sum())}
    for k, name in enumerate(("teff", "logg", "feh", "vmic")):
        good = np.abs(errors[solved, k])
        out[name] = {"median": float(np.median(good)), "worst": float(good.max())} if good.size else None
    return out


def parameter_words(summary: dict[str, Any]) -> str:
    """Errors of parameters, in a line."""
    names = {"teff": "K", "logg": "dex", "feh": "dex", "vmic": "km/s"}
    parts = [
        f"{name} {summary[name]['median']:.3g} / {summary[name]['worst']:.3g} {unit}"
        for name, unit in names.items()
        if summary[name] is not None
    ]
    return f"error of parameters, median / worst of {summary['solved']} of {summary['points']} points: " + ", ".join(
        parts
    )


def report(settings: Settings, content: dict[str, Any], words: str) -> None:
    """Data to stdout: JSON if asked for, else words."""
    if settings.json:
        click.echo(json.dumps({"schema": JSON_SCHEMA, **without_nan(content)}, indent=1, allow_nan=False))
    else:
        click.echo(words)


def without_nan(value: Any) -> Any:
    """The same with None for nan, which JSON does not know."""
    if isinstance(value, dict):
        return {key: without_nan(inner) for key, inner in value.items()}
    if isinstance(value, list):
        return [without_nan(inner) for inner in value]
    return None if isinstance(value, float) and np.isnan(value) else value
