"""``specsolve again``: repeat a solve from what it wrote."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

import click
import numpy as np

from specsolve.cli.inputs import Inputs
from specsolve.cli.options import delivery_options
from specsolve.cli.request import Request
from specsolve.cli.settings import Settings, common_options
from specsolve.cli.solve import carry_out
from specsolve.errors import InputError

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.balance.star import Star

NOT_USED = "marked_unused"


@click.command(epilog="Exit codes as for solve.")
@click.argument("result", metavar="RESULT.ecsv")
@click.option("--grid", "grid_path", metavar="DIR", help="The grid of the first run, if it was not the packaged one.")
@delivery_options
@common_options()
def again(settings: Settings, result: str, grid_path: str | None, **delivery: Any) -> int:
    """Repeat an analysis from its own output: RESULT.ecsv holds the options, RESULT_lines.ecsv the widths.

    \b
    Example:
      specsolve again result.ecsv --output second
    """
    from specsolve.report.tables import output_paths, read_table

    paths = output_paths(result)
    stars = read_table(paths["stars"], "stars")
    lines = read_table(paths["lines"], "lines")
    arguments = stars.meta["provenance"].get("options", {})
    if not arguments:
        raise InputError(f"{result} does not say with which options it was made", path=result)
    request = Request.from_arguments(arguments, grid_path=grid_path, **delivery)
    recorded = str(stars["grid_identity"][0]) if len(stars) else ""
    inputs = Inputs(stars=stars_of(lines, stars), files=[])
    return carry_out(settings, inputs, [str(path) for path in (paths["stars"], paths["lines"])], request, recorded)


def stars_of(lines: Table, stars: Table) -> list[Star]:
    """The stars of a result, with the widths and what was known of them as they were given.

    Parameters
    ----------
    lines, stars : Table
        As `specsolve.report.tables.read_table` reads ``X_lines.ecsv`` and ``X.ecsv``.
    """
    from specsolve.balance.star import Star
    from specsolve.star_table import rows_of_each

    known = {str(row["star"]): json.loads(row["known"] or "{}") for row in stars}
    found = []
    for name, places in rows_of_each(np.asarray(lines["star"]).astype(str)):
        rows = lines[places]
        rows = rows[np.asarray(rows["treatment"]) == rows["treatment"][0]]
        assumed = np.asarray(rows["error_assumed"], bool)
        error = _plain(rows["equivalent_width_error"])
        found.append(
            Star.from_arrays(
                name,
                _plain(rows["wavelength_air"]),
                np.asarray(rows["ion"]),
                _plain(rows["equivalent_width"]),
                np.where(assumed, np.nan, error),
                excitation_potential=_plain(rows["excitation_potential"]),
                log_gf=_plain(rows["log_gf"]),
                log_gf_error=_plain(rows["log_gf_error"]),
                use=np.asarray(rows["reason"]) != NOT_USED,
                known=known.get(name),
            )
        )
    return found


def _plain(column: Any) -> np.ndarray:
    return np.ma.filled(np.ma.asarray(column).astype(float), np.nan)
