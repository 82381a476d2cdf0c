"""``specsolve rehearse``: what would I get?"""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

import click

from specsolve.cli import parsing
from specsolve.cli.settings import Settings, common_options
from specsolve.errors import EXIT_NO_INPUT, EXIT_SOLVED, EXIT_UNSOLVED, UsageError

if TYPE_CHECKING:
    from specsolve.uses.noise import Noise
    from specsolve.uses.rehearsal import Rehearsal


@click.command(
    epilog="Exit codes: 0 every point rehearsed; 2 usage; 3 no usable input; 4 some points lie outside the grid or at a "
    "missing node, or had no solved trial.",
)
@click.argument("points", metavar="POINTS")
@click.option("--lines", metavar="LIST", help="Line list; all lines of the grid by default.")
@click.option("--signal-to-noise", type=float, metavar="S", help="Per pixel, where the table gives none.")
@click.option("--resolving-power", type=float, metavar="R", help="lambda / FWHM of the spectrograph.")
@click.option("--pixels", type=float, default=3.0, show_default=True, help="Pixels in a FWHM.")
@click.option("--width-errors", metavar="MA+FRACTION", help="Error law instead, for example 0.8+0.02 (in quadrature).")
@click.option("--bad-lines", type=float, default=0.0, show_default=True, help="Fraction of spoiled widths.")
@click.option("--truth", default="lte", show_default=True, help="Line formation that makes the widths.")
@click.option("--analysis", default="lte", show_default=True, help="Line formation of their analysis.")
@click.option("--gf-errors", type=click.Choice(["each", "once", "none"]), default="each", show_default=True,
              help="Errors of log gf: new in each trial, one draw for all, or none.")  # fmt: skip
@click.option("--want", multiple=True, metavar="NAME=ERROR", help="A wanted error, for the S/N that it needs.")
@click.option("--trials", type=click.IntRange(2), default=20, show_default=True)
@click.option("--near", is_flag=True, help="Start every trial at the truth: faster, but ties are not seen.")
@click.option(
    "--column", "columns", multiple=True, metavar="OURS=THEIRS", help="Another heading of the table of points."
)
@click.option("--output", metavar="FILE", help="Write FILE.ecsv.")
@click.option("--plots", metavar="DIR", help="Draw the shift map and the sequence into this folder.")
@click.option("--plot-format", type=click.Choice(["pdf", "png", "svg"]), default="pdf", show_default=True)
@click.option("--workers", type=click.IntRange(1), default=1, show_default=True, help="Processes.")
@click.option("--seed", type=int, default=0, show_default=True)
@click.option("--grid", "grid_path", metavar="DIR", help="A response grid of your own.")
@common_options()
def rehearse(
    settings: Settings,
    points: str,
    lines: str | None,
    signal_to_noise: float | None,
    resolving_power: float | None,
    pixels: float,
    width_errors: str | None,
    bad_lines: float,
    truth: str,
    analysis: str,
    gf_errors: str,
    want: tuple[str, ...],
    trials: int,
    near: bool,
    columns: tuple[str, ...],
    output: str | None,
    plots: str | None,
    plot_format: str,
    workers: int,
    seed: int,
    grid_path: str | None,
) -> int:
    """Bias, scatter and failures that an observation of POINTS (teff, logg, feh, vmic) would give.

    \b
    Examples:
      specsolve rehearse targets.ecsv --signal-to-noise 80 --resolving-power 30000 --want teff=50 --want logg=0.1
      specsolve rehearse targets.ecsv --lines my_lines.ecsv --width-errors 0.8+0.02 --bad-lines 0.05
      specsolve rehearse sequence.ecsv --truth nlte --analysis lte --signal-to-noise 100 --resolving-power 40000

    Columns: specsolve columns points, specsolve columns rehearsal.
    """
    from specsolve.report.tables import check_writable, write_table

    noise = noise_of(signal_to_noise, resolving_power, pixels, width_errors, bad_lines)
    wanted = wishes(want)
    names = parsing.pairs(columns, "--column", "teff=Teff")
    if output is not None:
        check_writable(output)

    from specsolve.cli.progress import counting
    from specsolve.cli.solve import make_executor
    from specsolve.uses.rehearsal import rehearse as carry_out

    executor = make_executor(workers)
    try:
        with counting("points", quiet=settings.verbosity < 0) as progress:
            found = carry_out(
                points,
                grid_path,
                noise=noise,
                lines=lines,
                truth=truth,
                analysis=analysis,
                trials=trials,
                seed=seed,
                gf_errors=gf_errors,
                wanted=wanted,
                columns=names,
                full_search=not near,
                executor=executor,
                progress=progress,
            )
    finally:
        if executor is not None:
            executor.shutdown(cancel_futures=True)
    for note in found.notes:
        settings.say(f"note: {note}")
    if settings.json:
        from specsolve.report.tables import plain
        from specsolve.schema import SCHEMA

        rows = [{name: plain(row[name]) for name in found.table.colnames} for row in found.table]
        click.echo(json.dumps({"schema": SCHEMA, "notes": found.notes, "rehearsal": rows}, indent=1, allow_nan=False))
    else:
        click.echo(summary(found))
    if output is not None:
        path = output if output.endswith(".ecsv") else f"{output}.ecsv"
        settings.say(f"wrote {write_table(found.table, path)}")
    if plots is not None:
        from specsolve.report.kiel import save_all
        from specsolve.report.shift_map import sequence_before_and_after, shift_map

        figures = [("shift_map", shift_map(found.table)), ("sequence", sequence_before_and_after(found.table))]
        settings.say(f"drew {len(save_all(figures, plots, plot_format))} figures into {plots}")
    n_good = int((found.table["n_good"] > 0).sum())
    return EXIT_NO_INPUT if n_good == 0 else EXIT_SOLVED if n_good == len(found.table) else EXIT_UNSOLVED


def noise_of(
    signal_to_noise: float | None, resolving_power: float | None, pixels: float, law: str | None, bad_lines: float
) -> Noise:
    """The noise that the options describe.

    Raises
    ------
    UsageError
    """
    from specsolve.uses.noise import Noise

    nan = float("nan")
    if law is not None:
        if resolving_power is not None or signal_to_noise is not None:
            raise UsageError("--width-errors excludes --signal-to-noise and --resolving-power")
        floor, plus, fraction = law.partition("+")
        try:
            values = float(floor), float(fraction) if plus else 0.0
        except ValueError:
            raise UsageError(f"--width-errors {law}: write it as --width-errors 0.8+0.02 (mA, fraction)") from None
        return Noise(floor_ma=values[0], fraction=values[1], bad_lines=bad_lines)
    if resolving_power is None:
        raise UsageError(
            "say how well widths are measured: --signal-to-noise with --resolving-power, or --width-errors"
        )
    if signal_to_noise is not None and not signal_to_noise > 0.0:
        raise UsageError(f"--signal-to-noise {signal_to_noise:g} must be positive")
    return Noise(
        signal_to_noise=nan if signal_to_noise is None else signal_to_noise,
        resolving_power=resolving_power,
        pixels_per_fwhm=pixels,
        bad_lines=bad_lines,
    )


def wishes(texts: tuple[str, ...]) -> dict[str, float]:
    """Wanted errors, such as ``teff=50``."""
    found = {}
    for name, text in parsing.pairs(texts, "--want", "teff=50").items():
        try:
            value = float(text)
        except ValueError:
            value = float("nan")
        if name not in parsing.NAMES or not value > 0.0:
            raise UsageError(
                f"--want {name}={text}: give a parameter ({', '.join(parsing.NAMES)}) and a positive error"
            )
        found[name] = value
    return found


def summary(found: Rehearsal) -> str:
    """A line a point."""
    lines = []
    for row in found.table:
        at = f"{row['point']}: {row['teff']:.0f} K {row['logg']:.2f} {row['feh']:+.2f}"
        if row["n_good"] == 0:
            lines.append(f"{at}: {row['status']}: {row['reason'] or 'no trial was solved'}")
            continue
        lines.append(
            f"{at}: bias {row['bias_teff']:+.0f} K {row['bias_logg']:+.3f} {row['bias_feh']:+.3f}, scatter "
            f"{row['scatter_teff']:.0f} K {row['scatter_logg']:.3f} {row['scatter_feh']:.3f}, reported errors "
            f"{row['error_teff']:.0f} K {row['error_logg']:.3f} {row['error_feh']:.3f}; "
            f"solved {row['n_good']} of {row['n_trials']}"
        )
        needed = [f"{name} {row[f'needed_{name}']:.0f}" for name in parsing.NAMES if row[f"needed_{name}"] > 0.0]
        if needed:
            lines[-1] += f"; S/N needed: {', '.join(needed)}"
    return "\n".join(lines)
