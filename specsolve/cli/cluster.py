"""``specsolve cluster``: members of a cluster, ready for age fitting."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

import click

from specsolve.cli.settings import Settings, common_options
from specsolve.errors import EXIT_SOLVED, EXIT_UNSOLVED, UsageError

if TYPE_CHECKING:
    from specsolve.uses.cluster import Cluster


@click.command(
    epilog="Exit codes: 0 done; 3 no usable input, or fewer than two stars; 4 done, but a star is still tied."
)
@click.argument("results", metavar="RESULT.ecsv")
@click.option("--output", metavar="FILE", help="Write the handoff: FILE.ecsv, FILE.fits, FILE_about.txt and more.")
@click.option("--feed-metallicity", is_flag=True, help="Solve members again with the [Fe/H] of the other members.")
@click.option("--sequence", metavar="TABLE", help="A sequence of your own (teff, logg, labels) to be overlaid.")
@click.option(
    "--decide-by-sequence", is_flag=True, help="Let it weigh the candidates of tied stars; the output says so."
)
@click.option("--samples", type=click.IntRange(1), default=400, show_default=True, help="Joint draws a star.")
@click.option("--seed", type=int, default=0, show_default=True, help="Of the draws.")
@click.option("--plots", metavar="DIR", help="Draw the Kiel diagram into this folder.")
@click.option("--plot-format", type=click.Choice(["pdf", "png", "svg"]), default="pdf", show_default=True)
@click.option("--grid", "grid_path", metavar="DIR", help="The grid of the results, if it was not the packaged one.")
@common_options()
def cluster(
    settings: Settings,
    results: str,
    output: str | None,
    feed_metallicity: bool,
    sequence: str | None,
    decide_by_sequence: bool,
    samples: int,
    seed: int,
    plots: str | None,
    plot_format: str,
    grid_path: str | None,
) -> int:
    """Common [Fe/H], membership and a handoff for age fitting from RESULT.ecsv of a solve.

    \b
    Examples:
      specsolve cluster result.ecsv --output members --plots figures
      specsolve cluster result.ecsv --feed-metallicity --output members
      specsolve cluster result.ecsv --sequence my_isochrones.ecsv --plots figures

    Columns: specsolve columns handoff.
    """
    if decide_by_sequence and sequence is None:
        raise UsageError("--decide-by-sequence needs --sequence")
    from specsolve.report.tables import check_writable

    if output is not None:
        check_writable(output)
    from specsolve.cli.progress import counting
    from specsolve.uses.cluster import cluster as prepare
    from specsolve.uses.handoff import handoff_tables, write_handoff
    from specsolve.uses.sequence import read_sequence

    curves = read_sequence(sequence) if sequence is not None else ()
    with counting("stars", quiet=settings.verbosity < 0) as progress:
        found = prepare(
            results,
            grid_path,
            feed_metallicity=feed_metallicity,
            sequence=curves,
            decide_by_sequence=decide_by_sequence,
            progress=progress,
        )
    for note in found.notes:
        settings.say(f"note: {note}")
    if settings.json:
        from specsolve.report.tables import plain
        from specsolve.schema import SCHEMA

        tables = handoff_tables(found, n_samples=1)
        kinds = ("cluster", "handoff", "handoff_candidates")
        rows = {k: [{n: plain(row[n]) for n in tables[k].colnames} for row in tables[k]] for k in kinds}
        click.echo(json.dumps({"schema": SCHEMA, "notes": found.notes} | rows, indent=1, allow_nan=False))
    else:
        click.echo(summary(found))
    if output is not None:
        options = {"sequence": sequence, "samples": samples}
        paths = write_handoff(found, output, seed=seed, n_samples=samples, options=options)
        settings.say("wrote " + ", ".join(str(path) for path in paths.values()))
    if plots is not None:
        from specsolve.report.kiel import kiel, save_all

        tables = handoff_tables(found, n_samples=1)
        figure = kiel(tables["handoff"], tables["handoff_candidates"], curves)
        settings.say(f"drew {save_all([('kiel', figure)], plots, plot_format)[0]}")
    return EXIT_UNSOLVED if found.tied else EXIT_SOLVED


def summary(found: Cluster) -> str:
    """Common values, then a line a star."""
    lines = []
    for treatment, common in found.common.items():
        n = sum(member.treatment == treatment for member in found.members)
        lines.append(
            f"{treatment}: common [Fe/H] {common.feh:+.3f} +- {common.feh_error:.3f} (stars), intrinsic scatter "
            f"{common.scatter:.3f} (95 %: below {common.scatter_limit:.3f}), {common.membership.sum():.1f} of {n} stars members"
        )
    for member in found.members:
        theta = member.point.theta
        text = (
            f"  {member.name} ({member.treatment}): {theta[0]:.0f} K  {theta[1]:.2f}  {theta[2]:+.3f}  {theta[3]:.2f} km/s  "
            f"member {member.probability:.2f}"
        )
        if len(member.candidates) > 1:
            text += f"  {member.status}, {len(member.candidates)} candidates, odds {member.candidates[0].odds:.2f}"
        if member.decided_by:
            text += f"  decided by {member.decided_by}"
        if member.sequence[1]:
            text += f"  {member.sequence[0]:.1f} sigma from {member.sequence[1]}"
        lines.append(text)
    return "\n".join(lines)
