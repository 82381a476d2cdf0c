"""``specsolve correction``: non-LTE corrections of line abundances."""

from __future__ import annotations

import itertools
import json
from pathlib import Path
from typing import Any

import click
import numpy as np

from specsolve.cli.settings import Settings, common_options
from specsolve.errors import UsageError

RANGE_AT_MOST = 30  # points with a systematic range: some seconds each


@click.command(
    context_settings={"ignore_unknown_options": True},  # so that -2.5 is a metallicity
    epilog="Exit codes: 0; 2 usage; 3 no usable input; 4 no departures at a point.",
)
@click.argument("teff")
@click.argument("logg")
@click.argument("feh")
@click.argument("vmic")
@click.option("--lines", "list_path", type=click.Path(path_type=Path, dir_okay=False),
              help="A line list or one star's table of widths; default the lines of the packaged grid.")  # fmt: skip
@click.option("--at", type=click.Choice(["width", "abundance"]), default="width", show_default=True,
              help="What both treatments share: the width, or the abundance that makes it.")  # fmt: skip
@click.option("--abundance", type=float, help="A(Fe); default solar iron plus FEH.")
@click.option("--stored/--solved", default=None,
              help="Departures of the packaged store, between its nodes, or solved; default solved for one point.")  # fmt: skip
@click.option("--range/--no-range", "with_range", default=None, help="With S_H x 3 and / 3; default for one point.")
@click.option("--output", type=click.Path(path_type=Path, dir_okay=False), help="Write an ECSV table.")
@common_options()
def correction(
    settings: Settings,
    teff: str,
    logg: str,
    feh: str,
    vmic: str,
    list_path: Path | None,
    at: str,
    abundance: float | None,
    stored: bool | None,
    with_range: bool | None,
    output: Path | None,
) -> None:
    """NLTE minus LTE abundance of lines at TEFF LOGG FEH VMIC; each may be START:STOP:STEP or A,B,C for a table.

    \b
    Examples:
      specsolve correction 5777 4.44 0 1
      specsolve correction 4650 1.4 -2.5 1.9 --lines widths.ecsv
      specsolve correction 5000:6500:250 2:4.5:0.5 -3:0:0.5 1,2 --output corrections.ecsv
    """
    from specsolve.cli.progress import counting
    from specsolve.grid.axes import parse_axis_subset
    from specsolve.nlte.correction_table import correction_table, lines_and_widths
    from specsolve.nlte.departures import DepartureStore
    from specsolve.provenance import collect

    axes = [parse_axis_subset(text) for text in (teff, logg, feh, vmic)]
    points = np.array(list(itertools.product(*axes)), dtype=float)
    single = len(points) == 1
    with_range = single if with_range is None else with_range
    stored = not single if stored is None else stored
    if with_range and len(points) > RANGE_AT_MOST:
        raise UsageError(f"--range takes some seconds a point: at most {RANGE_AT_MOST} points, not {len(points)}")
    lines, widths = lines_and_widths(list_path)
    if widths is not None and (at == "abundance" or abundance is not None):
        raise UsageError("the table gives widths: --at abundance and --abundance make no sense with them")
    inputs = [] if list_path is None else [str(list_path)]
    with counting("points", quiet=settings.verbosity < 0 or single) as progress:
        table = correction_table(
            points, lines, reduced_width=widths, at=at, abundance=abundance, with_range=with_range,
            departures=DepartureStore.packaged() if stored else None, progress=progress,
        )  # fmt: skip
    table.meta["provenance"] = collect(inputs=inputs)
    if output is not None:
        from specsolve.report.tables import write_table

        write_table(table, output)
        settings.say(f"wrote {output}")
    if settings.json:
        click.echo(json.dumps(json_of(table), indent=1, allow_nan=False))
    elif output is None:
        click.echo(words_of(table, single))


def json_of(table: Any) -> dict[str, Any]:
    """The table for JSON; undefined numbers are null."""
    rows = [{name: _plain(row[name]) for name in table.colnames} for row in table]
    return {"schema": 1, **{key: value for key, value in table.meta.items() if key != "provenance"}, "lines": rows}


def _plain(value: Any) -> Any:
    value = value.item() if hasattr(value, "item") else value
    return None if isinstance(value, float) and not np.isfinite(value) else value


def words_of(table: Any, single: bool) -> str:
    """The table as text, after a head; without the parameters' columns for one point."""
    shown = table.copy()
    head = [
        f"NLTE minus LTE abundance at fixed {table.meta['at']}; S_H = {table.meta['hydrogen_factor']:g}, range S_H / and x "
        f"{table.meta['range_factor']:g}; departures {table.meta['departures']}"
    ]
    if single and len(table):
        first = table[0]
        head.append(
            f"Teff {first['teff']:g} K  log g {first['logg']:g}  [Fe/H] {first['feh']:+g}  vmic {first['vmic']:g} km/s"
        )
        shown.remove_columns(["teff", "logg", "feh", "vmic"])
    for name in (
        "reduced_width",
        "abundance_lte",
        "abundance_nlte",
        "correction",
        "weak_collisions",
        "strong_collisions",
    ):
        shown[name].info.format = ".3f"
    flags = sorted({flag for text in table["flags"] for flag in str(text).split(", ") if flag})
    tail = [f"flags: {', '.join(flags)}"] if flags else []
    used = np.isfinite(table["correction"])
    for ion in ("Fe I", "Fe II"):
        of = used & (np.asarray(table["ion"]) == ion)
        if of.any():
            value = np.asarray(table["correction"])[of]
            tail.append(
                f"{ion}: {of.sum()} lines, mean {value.mean():+.3f}, from {value.min():+.3f} to {value.max():+.3f} dex"
            )
    return "\n".join([*head, *shown.pformat(max_lines=-1, max_width=-1), *tail])
