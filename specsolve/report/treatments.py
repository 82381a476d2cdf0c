"""NLTE minus LTE of each star that was solved in both: ``X_differences.ecsv``.

The error of a difference is not that of either solve: both use the same widths, whose errors move both alike. It is a
jackknife over the lines: with t_i the change of a parameter when line i is left out (first order, from the table of lines),
variance = (n - 1)/n sum (t_i(NLTE) - t_i(LTE))^2. A line that has weight in one treatment only counts in full.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.report.tables import make_table, output_paths, plain, read_table, tables_of, write_table
from specsolve.schema import columns_of
from specsolve.schema_parts import PARAMETERS, RESIDUALS

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.balance.solution import Solution

ENDING = "_differences.ecsv"
PAIR = ("lte", "nlte")
SHOWN = (("teff", "Teff", 0, " K"), ("logg", "log g", 2, ""), ("feh", "[Fe/H]", 3, ""), ("vmic", "vmic", 2, " km/s"))
IONS = (("fe1", "Fe I"), ("fe2", "Fe II"))


def difference_table(stars: Table, lines: Table, provenance: Mapping[str, Any] | None = None) -> Table:
    """Differences of the stars that have a row in both treatments, from the tables of stars and of lines.

    Numbers are nan where one of the two is not known.
    """
    place = {key: i for i, key in enumerate(zip(_texts(stars["star"]), _texts(stars["treatment"]), strict=True))}
    of_lines: dict[tuple[str, str], list[int]] = {}
    for row, key in enumerate(zip(_texts(lines["star"]), _texts(lines["treatment"]), strict=True)):
        of_lines.setdefault(key, []).append(row)
    rows = []
    for star in dict.fromkeys(_texts(stars["star"])):
        if not all((star, name) in place for name in PAIR):
            continue
        lte, nlte = (stars[place[star, name]] for name in PAIR)
        shifts = [_influences(lines, of_lines.get((star, name), [])) for name in PAIR]
        errors = difference_errors(*shifts)
        row: dict[str, Any] = {"star": star, "lte_status": str(lte["status"]), "nlte_status": str(nlte["status"])}
        for k, (name, _, _) in enumerate(PARAMETERS):
            row[f"{name}_difference"] = float(nlte[name]) - float(lte[name])
            row[f"{name}_difference_error"] = errors[k]
        for name in (*(name for name, _, _ in RESIDUALS), *(f"{key}_abundance" for key, _ in IONS)):
            row[f"{name}_difference"] = float(nlte[name]) - float(lte[name])
        row["n_common_lines"] = len(shifts[0].keys() & shifts[1].keys())
        rows.append(row)
    columns = {column.name: [row[column.name] for row in rows] for column in columns_of("differences")}
    return make_table("differences", columns, provenance)


def difference_errors(lte: Mapping[str, np.ndarray], nlte: Mapping[str, np.ndarray]) -> np.ndarray:
    """Jackknife errors of the four differences; nan with fewer than two lines.

    Parameters
    ----------
    lte, nlte : mapping
        Line -> change of (teff, logg, feh, vmic) when it is left out.

    Examples
    --------
    >>> difference_errors({"a": np.ones(4), "b": -np.ones(4)}, {"a": np.ones(4), "b": -np.ones(4)}).tolist()
    [0.0, 0.0, 0.0, 0.0]
    """
    names = sorted(lte.keys() | nlte.keys())
    if len(names) < 2:
        return np.full(4, np.nan)
    nothing = np.zeros(4)
    change = np.array([nlte.get(name, nothing) - lte.get(name, nothing) for name in names])
    return np.sqrt((len(names) - 1) / len(names) * (change**2).sum(axis=0))


def write_differences(output: str | Path, provenance: Mapping[str, Any] | None = None) -> Path:
    """Write ``X_differences.ecsv`` from the tables of a solve that are on disk."""
    paths = output_paths(output)
    table = difference_table(read_table(paths["stars"], "stars"), read_table(paths["lines"], "lines"), provenance)
    path = paths["stars"]
    return write_table(table, path.with_name(path.name.removesuffix(".ecsv") + ENDING))


def of_solutions(solutions: Sequence[Solution]) -> Table:
    """Differences of solutions in memory."""
    made = tables_of(solutions)
    return difference_table(made["stars"], made["lines"])


def words(solutions: Sequence[Solution]) -> list[str]:
    """Differences of solutions in memory, a line a star."""
    out = ["NLTE minus LTE, error from the lines"]
    for row in of_solutions(solutions):
        parts = [
            f"{label} {row[f'{name}_difference']:+.{digits}f} +- {row[f'{name}_difference_error']:.{digits}f}{unit}"
            for name, label, digits, unit in SHOWN
        ]
        parts += [f"A({ion}) {row[f'{key}_abundance_difference']:+.3f}" for key, ion in IONS]
        out.append(f"  {row['star']}: " + "  ".join(parts))
    return out


def rows_for_json(solutions: Sequence[Solution]) -> list[dict[str, Any]]:
    """Differences of solutions in memory, a mapping a star."""
    table = of_solutions(solutions)
    return [{name: plain(row[name]) for name in table.colnames} for row in table]


def _influences(lines: Table, rows: Sequence[int]) -> dict[str, np.ndarray]:
    part = lines[list(rows)]
    values = np.stack([_numbers(part[f"influence_{name}"]) for name, _, _ in PARAMETERS], axis=1)
    used = np.asarray(part["used"], bool) & np.isfinite(values).all(axis=1)
    return {key: value for key, value, good in zip(_texts(part["key"]), values, used, strict=True) if good}


def _texts(column: Any) -> list[str]:
    return np.ma.filled(np.ma.asarray(column).astype(str), "").tolist()


def _numbers(column: Any) -> np.ndarray:
    return np.ma.filled(np.ma.asarray(column).astype(float), np.nan)
