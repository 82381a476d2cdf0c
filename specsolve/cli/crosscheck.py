"""``specsolve crosscheck``: why do the published values differ from mine?"""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from specsolve.cli import parsing
from specsolve.cli.settings import Settings, common_options
from specsolve.errors import EXIT_SOLVED, UsageError

if TYPE_CHECKING:
    from specsolve.uses.crosscheck import CrossCheck

ENDINGS = {
    "crosscheck": "",
    "crosscheck_causes": "_causes",
    "crosscheck_set": "_set",
    "crosscheck_verdicts": "_verdicts",
}
ALL = "all"
PLACES = {"teff": 0, "logg": 2, "feh": 3, "vmic": 2}


@click.command(epilog="Exit codes: 0 compared; 2 usage; 3 no usable input, no common star, or another grid.")
@click.argument("results", metavar="RESULT.ecsv")
@click.argument("published", metavar="PUBLISHED")
@click.option("--output", metavar="FILE", help="Write FILE.ecsv and its causes, set, verdicts.")
@click.option("--plots", metavar="DIR", help="Draw the splits and the broken balances into this folder.")
@click.option("--plot-format", type=click.Choice(["pdf", "png", "svg"]), default="pdf", show_default=True)
@click.option(
    "--column", "columns", multiple=True, metavar="OURS=THEIRS", help="Another heading of the published table."
)
@click.option("--same-lines", is_flag=True, help="They used our lines and log gf: errors of the list cancel.")
@click.option(
    "--cause", "causes", multiple=True, metavar="CAUSE", help="Split by this instead; may be repeated, or all."
)
@click.option("--grid", "grid_path", metavar="DIR", help="The grid of the results, if it was not the packaged one.")
@common_options()
def crosscheck(
    settings: Settings,
    results: str,
    published: str,
    output: str | None,
    plots: str | None,
    plot_format: str,
    columns: tuple[str, ...],
    same_lines: bool,
    causes: tuple[str, ...],
    grid_path: str | None,
) -> int:
    """Compare RESULT.ecsv of a solve with published parameters, and split the differences into causes.

    \b
    Examples:
      specsolve crosscheck result.ecsv paper.ecsv --output against_paper --plots figures
      specsolve crosscheck result.ecsv paper.csv --column teff=Teff --column vmic=xi
      specsolve crosscheck result.ecsv paper.ecsv --cause held_teff --cause held_logg

    Columns: specsolve columns published, specsolve columns crosscheck.
    """
    from specsolve.report.tables import check_writable, write_table
    from specsolve.schema_uses import CAUSES

    for cause in causes:
        if cause not in (*CAUSES, ALL):
            raise UsageError(f"--cause {cause}: there are {', '.join(CAUSES)}, or {ALL}")
    wanted = tuple(CAUSES) if ALL in causes else causes
    names = parsing.pairs(columns, "--column", "teff=Teff")
    if output is not None:
        check_writable(output)

    from specsolve.cli.progress import counting
    from specsolve.uses.crosscheck import crosscheck as compare

    with counting("stars", quiet=settings.verbosity < 0) as progress:
        found = compare(
            results,
            published,
            grid_path,
            columns=names,
            same_lines=same_lines,
            causes=wanted or None,
            progress=progress,
        )
    for note in found.notes:
        settings.say(f"note: {note}")
    if found.unmatched_ours:
        settings.say(f"not in the published table: {', '.join(found.unmatched_ours)}")
    if found.unmatched_theirs:
        settings.say(f"not in the results: {', '.join(found.unmatched_theirs)}")
    if settings.json:
        click.echo(json.dumps(as_json(found), indent=1, allow_nan=False))
    else:
        click.echo(summary(found))
    if output is not None:
        path = Path(output)
        name = path.name.removesuffix(".ecsv")
        for kind in reversed(ENDINGS):
            write_table(found.tables[kind], path.parent / f"{name}{ENDINGS[kind]}.ecsv")
        settings.say(f"wrote {path.parent / name}.ecsv and its {', '.join(e[1:] for e in ENDINGS.values() if e)}")
    if plots is not None:
        from specsolve.report.differences import broken_balances, splits
        from specsolve.report.kiel import save_all

        stars, of_causes = found.tables["crosscheck"], found.tables["crosscheck_causes"]
        figures = [(f"splits_{treatment}", splits(stars, of_causes, treatment)) for treatment in found.sets]
        figures += [(f"broken_balances_{treatment}", broken_balances(stars, treatment)) for treatment in found.sets]
        settings.say(f"drew {len(save_all(figures, plots, plot_format))} figures into {plots}")
    return EXIT_SOLVED


def as_json(found: CrossCheck) -> dict[str, Any]:
    """All tables as JSON, by kind."""
    from specsolve.report.tables import plain
    from specsolve.schema import SCHEMA

    tables = {
        kind: [{name: plain(row[name]) for name in table.colnames} for row in table]
        for kind, table in found.tables.items()
    }
    return {
        "schema": SCHEMA,
        "unmatched_ours": found.unmatched_ours,
        "unmatched_theirs": found.unmatched_theirs,
    } | tables


def summary(found: CrossCheck) -> str:
    """The set in a few lines: zero points, then the causes, then the stars."""
    lines = []
    for treatment in found.sets:
        lines.append(f"{treatment}: published minus ours")
        for row in found.tables["crosscheck_set"]:
            if row["treatment"] != treatment:
                continue
            places = PLACES[row["parameter"]]
            lines.append(
                f"  {row['parameter']:<5} {row['quantity']:<10} {row['zero_point']:+.{places}f} "
                f"+- {row['zero_point_error']:.{places}f} (stars) +- {row['zero_point_error_list']:.{places}f} (list), "
                f"beyond the errors {row['scatter_beyond']:.{places}f}, {row['n_stars']} stars"
            )
        for row in found.tables["crosscheck_verdicts"]:
            if row["treatment"] == treatment and row["outcome"] in ("named", "stated", "rival"):
                amount = (
                    f", {row['amount']:+.3f} +- {row['amount_error']:.3f}" if row["amount"] == row["amount"] else ""
                )
                lines.append(f"  {row['outcome']}: {row['words']}{amount}")
        for row in found.tables["crosscheck"]:
            if row["treatment"] == treatment:
                broken = f"; at theirs {row['broken']} breaks" if row["broken"] else ""
                lines.append(
                    f"  {row['star']}: {row['d_teff']:+.0f} K {row['d_logg']:+.2f} {row['d_feh']:+.3f} "
                    f"{row['d_vmic']:+.2f} km/s, "
                    f"{row['significance']:.1f} sigma{broken} ({row['balance_significance']:.1f} sigma)"
                )
    return "\n".join(lines)
