"""Results of ``solve`` read back, and the problems behind them rebuilt, so that a "what if" is one replace and one
solve.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.balance.differential import reference_star
from specsolve.balance.options import Options
from specsolve.balance.outside import Outside
from specsolve.balance.outside_known import outside_from_known
from specsolve.balance.problem import Problem
from specsolve.balance.solution import PARAMETER_NAMES, SOLVED, TIED, Solution
from specsolve.balance.star import Star, nearest_lines
from specsolve.balance.zero_points import ZeroPoints
from specsolve.errors import InputError, StoreError
from specsolve.grid.perturbed import perturbed_grid
from specsolve.report.tables import output_paths, read_table, tables_of

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.grid.store import ResponseGrid

REFERENCE_FLAG = "reference_star"
# Reasons that a line was left out for beforehand: what the rebuilt star must leave out too.
NOT_USED, GRADE_CUT = "marked_unused", "grade_cut"
SAME_LOG_GF = 1e-6  # dex; closer to the list's value it is the list's value


@dataclass(frozen=True, eq=False)
class Results:
    """The tables of one ``solve``.

    Attributes
    ----------
    stars, lines, candidates, decisions : Table
        As `specsolve.report.tables.tables_of` makes them.
    paths : tuple of Path
        Files they came from; empty for solutions in memory.

    Examples
    --------
    >>> results = Results.of("result.ecsv")                                    # doctest: +SKIP
    """

    stars: Table
    lines: Table
    candidates: Table
    decisions: Table
    paths: tuple[Path, ...] = ()

    @classmethod
    def of(cls, source: Results | Solution | Iterable[Solution] | str | Path) -> Results:
        """Results from the path of ``X.ecsv``, or from solutions in memory.

        Raises
        ------
        InputError, StoreError, ColumnError
            A file is missing, is not what it should be, or is of another schema.
        """
        if isinstance(source, Results):
            return source
        if isinstance(source, (str, Path)):
            paths = output_paths(source)
            tables = {kind: read_table(path, kind) for kind, path in paths.items()}
            found = cls(**tables, paths=tuple(paths.values()))
        else:
            solutions = [source] if isinstance(source, Solution) else list(source)
            found = cls(**tables_of(solutions))
        found._check()
        return found

    def _check(self) -> None:
        where = f"{self.paths[0]}: " if self.paths else ""
        if len(self.stars) == 0:
            raise InputError(f"{where}there is no star in these results")
        pairs = list(zip(self.stars["star"].tolist(), self.stars["treatment"].tolist(), strict=True))
        for pair in pairs:
            if pairs.count(pair) > 1:
                raise InputError(f"{where}the star '{pair[0]}' ({pair[1]}) is there twice")

    @cached_property
    def theta(self) -> np.ndarray:
        """Reported parameters, shape (n_rows, 4); nan where unsolved."""
        return np.column_stack([filled(self.stars[name]) for name in PARAMETER_NAMES])

    @cached_property
    def solved(self) -> np.ndarray:
        """Rows with parameters, tied ones among them; reference stars are not results. Bool, shape (n_rows,)."""
        status = np.isin(np.asarray(self.stars["status"]), (SOLVED, TIED))
        reference = np.array([REFERENCE_FLAG in flags.split(", ") for flags in self.stars["flags"].tolist()])
        known = np.isfinite(np.asarray(filled(self.stars["cov_star"]))).all(axis=(1, 2))
        return status & ~reference & known & np.isfinite(self.theta).all(axis=1)

    @property
    def grid_identity(self) -> str:
        """Of the response grid that was used."""
        return str(self.stars["grid_identity"][0])

    def rows_of(self, table: Table, row: int) -> Table:
        """The rows of another table that belong to a row of `stars`."""
        star, treatment = self.stars["star"][row], self.stars["treatment"][row]
        return table[(np.asarray(table["star"]) == star) & (np.asarray(table["treatment"]) == treatment)]


def filled(column: Any) -> np.ndarray:
    """Plain floats of a table column, nan where masked."""
    return np.ma.filled(np.ma.asarray(column).astype(float), np.nan)


def star_of(lines: Table, name: str, grid: ResponseGrid) -> Star:
    """A star from its rows of a lines table, as it went into the solve.

    A log gf that equals the grid's is the grid's, so that grades, errors and the scale of Fe II act as before.
    """
    wavelength, ion = filled(lines["wavelength_air"]), np.asarray(lines["ion"])
    energy, log_gf, error = (filled(lines[name]) for name in ("excitation_potential", "log_gf", "log_gf_error"))
    index = nearest_lines(
        wavelength, ion, energy, grid.lines.wavelength_air, grid.lines.ion, grid.lines.excitation_potential
    )
    place = np.where(index >= 0, index, 0)
    own = np.zeros(len(lines), bool)
    for values in (grid.lines.log_gf, grid.lines.log_gf_alternative):
        own |= (index >= 0) & (np.abs(log_gf - values[place]) < SAME_LOG_GF)
    width_error = np.where(np.asarray(lines["error_assumed"], bool), np.nan, filled(lines["equivalent_width_error"]))
    reason = np.asarray(lines["reason"])
    return Star.from_arrays(
        name,
        wavelength,
        ion,
        filled(lines["equivalent_width"]),
        width_error,
        excitation_potential=energy,
        log_gf=np.where(own, np.nan, log_gf),
        log_gf_error=np.where(own, np.nan, error),
        use=(reason != NOT_USED) & (reason != GRADE_CUT),
    )


def outside_of_row(text: str, known: str = "") -> tuple[Outside, ...]:
    """The outside knowledge that a row of ``X.ecsv`` records.

    Parameters
    ----------
    text : str
        Column `outside`, as JSON.
    known : str
        Column `known`, as JSON: what the input said of the star. Terms that follow the parameters (a parallax, colours)
        come back as such from it; of others that do so the value at the solution is kept.
    """
    terms = list(outside_from_known(json.loads(known or "{}")))
    followed = {(name, term.source) for term in terms for name in term.names}
    for entry in json.loads(text or "[]"):
        name, mean, sigma, source = (entry[key] for key in ("name", "mean", "sigma", "source"))
        if mean is None or sigma is None or (name, source) in followed:
            continue
        fixed = sigma == 0.0
        terms.append(
            Outside.fixed(source, **{name: mean}) if fixed else Outside.gaussian(source, **{name: (mean, sigma)})
        )
    return tuple(terms)


def check_grid(results: Results, grid: ResponseGrid) -> None:
    """The results must come from this grid.

    Raises
    ------
    StoreError
    """
    if results.grid_identity != grid.identity:
        raise StoreError(
            f"these results were made with another grid ({results.grid_identity[:12]}; this one is "
            f"{grid.identity[:12]}): name it with --grid, or solve again",
            path=grid.directory,
        )


def rebuild(results: Results, grid: ResponseGrid, rows: Sequence[int] | None = None, compiled: bool = False) -> list:
    """The problems behind rows of results.

    Parameters
    ----------
    results : Results
    grid : ResponseGrid
        The one that they were made with.
    rows : sequence of int, optional
        Places in ``results.stars``; all solved ones by default.
    compiled : bool
        Problems that use the compiled kernels.

    Returns
    -------
    list of Problem

    Raises
    ------
    StoreError
        If the results come from another grid.
    """
    check_grid(results, grid)
    rows = np.flatnonzero(results.solved) if rows is None else rows
    zero_points: dict[str, ZeroPoints] = {}
    problems = []
    for row in rows:
        entry = results.stars[int(row)]
        options = Options.from_dict(json.loads(entry["configuration"] or "{}"))
        treatment = str(entry["treatment"])
        if treatment not in zero_points:
            zero_points[treatment] = _zero_points(results, grid, treatment, options)
        moved = perturbed_grid(grid, float(entry["alpha"])) if bool(entry["alpha_given"]) else grid
        problems.append(
            Problem(
                star=star_of(results.rows_of(results.lines, int(row)), str(entry["star"]), grid),
                grid=moved,
                treatment=treatment,
                outside=outside_of_row(
                    str(entry["outside"]), str(entry["known"]) if "known" in results.stars.colnames else ""
                ),
                zero_points=zero_points[treatment],
                options=options,
                compiled=compiled,
            )
        )
    return problems


def _zero_points(results: Results, grid: ResponseGrid, treatment: str, options: Options) -> ZeroPoints:
    """Solar iron, or the reference star that stands in the results."""
    for row, flags in enumerate(results.stars["flags"].tolist()):
        if REFERENCE_FLAG in flags.split(", ") and results.stars["treatment"][row] == treatment:
            star = star_of(results.rows_of(results.lines, row), str(results.stars["star"][row]), grid)
            # Its vmic is found again, so that the errors of the zero points hold that of the vmic.
            at = dict(zip(PARAMETER_NAMES[:3], results.theta[row].tolist()[:3], strict=True))
            return reference_star(star, grid, treatment, at, options).zero_points
    if not str(results.stars["zero_point_source"][0]).startswith("solar iron"):
        raise InputError(
            "these results are relative to a reference star that is not among them; keep its row in the table"
        )
    return ZeroPoints.solar()


def used_lines(results: Results, row: int, problem: Problem) -> np.ndarray:
    """Lines of a problem that carried weight in the results; bool, shape (n_lines,)."""
    lines = results.rows_of(results.lines, row)
    return np.isin(problem.keys, np.asarray(lines["key"])[np.asarray(lines["used"], bool)])
