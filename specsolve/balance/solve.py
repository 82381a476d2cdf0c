"""`solve`: from measured lines to parameters; the public way in."""

from __future__ import annotations

import dataclasses
import logging
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import Executor
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.errors import InputError, NotEnoughLinesError, UsageError

from .assemble import solved, unsolved
from .differential import reference_star
from .minima import enough_lines, local_solve, preliminary_lines, search
from .options import Options
from .outside import Outside
from .own_sun import SUN_NAME, SolarLines, solar_lines, solar_star
from .problem import Problem
from .solution import PARAMETER_NAMES, PARAMETER_UNITS, Solution
from .star import Star
from .systematics import systematic_shifts
from .tiebreak import Ranking, rank
from .zero_points import ZeroPoints

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.grid.store import ResponseGrid

log = logging.getLogger(__name__)

OutsideChoice = Outside | Iterable[Outside] | Mapping[str, Any] | Callable[[Star], Any] | None


def solve(
    source: Star | Iterable[Star] | str | Path | Table,
    grid: ResponseGrid | str | Path | None = None,
    *,
    treatment: str | None = None,
    reference: str | Star | None = None,
    reference_parameters: Mapping[str, Any] | None = None,
    reference_errors: Mapping[str, Any] | None = None,
    fix: Mapping[str, Any] | None = None,
    outside: OutsideChoice = None,
    known: Mapping[str, Any] | None = None,
    options: Options | None = None,
    columns: Mapping[str, str] | None = None,
    ions: Mapping[str, str] | None = None,
    executor: Executor | None = None,
) -> Solution | tuple[Solution, ...]:
    """Teff, log g, [Fe/H] and microturbulence of one star or many.

    Parameters
    ----------
    source : Star, iterable of Star, path or `~astropy.table.Table`
        Measured lines. A path is read as ECSV, CSV, FITS or VOTable, with one star or many.
    grid : ResponseGrid or path, optional
        The packaged grid by default.
    treatment : str, optional
        One of the grid's treatments; "nlte" where the grid has it by default.
    reference : str or Star, optional
        Reference star for differential work: a name in `source` (then left out of the result's list), "Sun" for the
        packaged solar
        widths if the table has no such star, or a `Star`.
    reference_parameters : mapping, optional
        Its teff, logg, feh (and vmic, if it shall not be found); not needed for the Sun.
    reference_errors : mapping, optional
        Their errors; they go into the shared covariance.
    fix : mapping, optional
        Parameter name to value (a number in K, dex, dex, km/s, or a Quantity) for all stars.
    outside : optional
        What else is known: an `Outside`, several of them, a mapping from star name to either, or a function of the
        star.
    known : mapping, optional
        The same by name, for all stars: ``{"prior_teff": 5800.0, "prior_teff_error": 60.0}``, a parallax, colours,
        ``alpha`` (`specsolve.balance.outside_known`); a star's own columns go before it.
    options : Options, optional
    columns, ions : mapping, optional
        Other headings and spellings, see `specsolve.star_table.read_stars`.
    executor : concurrent.futures.Executor, optional
        Stars are solved in blocks by its workers; the result does not depend on it.

    Returns
    -------
    Solution, or tuple of Solution
        One for a `Star`, else one for each star in the order of the input.

    Raises
    ------
    SpecsolveError
        If input, grid or reference star cannot be used. A star that cannot be solved is a `Solution` whose status
        says so.

    Examples
    --------
    >>> import specsolve
    >>> solutions = specsolve.solve("widths.ecsv", fix={"logg": 4.44})         # doctest: +SKIP
    """
    from .batch import Setting, solve_many

    if isinstance(source, Star):
        stars, single = [source], True
    else:
        stars, single = _stars(source, columns, ions), False
    grid = open_grid(grid)
    treatment = treatment or grid.default_treatment
    if treatment not in grid.treatments:
        raise UsageError(f"treatment '{treatment}' is not in the grid; it has {', '.join(grid.treatments)}.")
    options = options or Options()
    zero_points = ZeroPoints.solar()
    if reference is not None:
        chosen, stars = _split_reference(reference, stars)
        zero_points = reference_star(
            chosen,
            grid,
            treatment,
            bare_parameters(reference_parameters),
            options,
            parameter_errors=bare_parameters(reference_errors),
        ).zero_points
    setting = Setting(
        treatment=treatment,
        fixed=fixed_outside(fix),
        zero_points=zero_points,
        options=options,
        sun=solar_lines(grid, treatment, options),
        known=dict(known or {}),
    )
    solutions = solve_many(stars, grid, setting, outside=outside, executor=executor)
    return solutions[0] if single else solutions


def solve_problem(problem: Problem, sun: SolarLines | None = None) -> Solution:
    """Search, rank and report one problem; a star that cannot be solved is a `Solution` with a status.

    Parameters
    ----------
    problem : Problem
    sun : SolarLines, optional
        For our own solar zero.
    """
    if problem.match.looks_like_vacuum:
        return unsolved(
            problem, "the wavelengths look like vacuum wavelengths: convert them to air", flags=("vacuum_wavelengths",)
        )
    trouble = _fixed_outside_grid(problem)
    if trouble:
        return unsolved(problem, trouble, status="outside_grid", flags=("outside_grid",))
    try:
        result = search(problem)
    except NotEnoughLinesError as error:
        return unsolved(problem, str(error), flags=("too_few_lines",))
    if not result.found:
        reason = result.failures[0] if result.failures else "no starting point in the whole grid"
        return unsolved(problem, f"no candidate: {reason}", flags=("no_candidate",))
    ranking = rank(problem, result)
    solution = solved(problem, result, ranking, sun)
    shifts, alternatives = systematic_shifts(problem, ranking.found[0], other_fe2_scale(problem, solution.parameters))
    solution = dataclasses.replace(solution, systematics=shifts, alternative_parameters=alternatives)
    return with_extras(problem, ranking, solution)


def with_extras(problem: Problem, ranking: Ranking, solution: Solution) -> Solution:
    """Samples and map, where the options ask for them."""
    options = problem.options
    if options.samples:
        from .samples import joint_samples

        own_stream = np.random.default_rng([options.seed, int(problem.star.identity[:16], 16)])
        samples = joint_samples(problem, ranking.candidates, ranking.found, options.samples, own_stream)
        solution = dataclasses.replace(solution, samples=samples)
    if options.objective_map and {0, 1} <= set(problem.free.tolist()):
        from .objective_map import objective_map

        chart = objective_map(problem, ranking.found[0], ranking.candidates)
        solution = dataclasses.replace(solution, objective_map=chart)
    return solution


def other_fe2_scale(problem: Problem, start: np.ndarray) -> np.ndarray | None:
    """Parameters of the candidate when Fe II log gf come from the other column; None where there is none or it does
    not matter.
    """
    if problem.zero_points.differential or problem.options.fe2_scale != "default":
        return None
    lines, place = problem.grid.lines, problem.line_indices
    second = (lines.ion[place] == problem.pair[1]) & np.isfinite(lines.log_gf_alternative[place])
    if not (second & np.isnan(problem.star.log_gf[problem.rows])).any():
        return None
    other = problem.replace(options=dataclasses.replace(problem.options, fe2_scale="alternative"))
    preliminary = preliminary_lines(other)
    if not enough_lines(other, preliminary):
        return None
    minimum, _ = local_solve(other, start, preliminary)
    if minimum.state is None or not minimum.converged or minimum.at_bound.any():
        return np.full(4, np.nan)
    return minimum.theta


def open_grid(grid: ResponseGrid | str | Path | None) -> ResponseGrid:
    """A grid from a path, or the packaged one."""
    if grid is None or isinstance(grid, (str, Path)):
        from specsolve.grid.store import ResponseGrid

        return ResponseGrid.packaged() if grid is None else ResponseGrid.open(grid)
    return grid


def bare_parameters(values: Mapping[str, Any] | None) -> dict[str, float] | None:
    """Plain numbers of parameters given as numbers or Quantities; None stays None.

    Examples
    --------
    >>> bare_parameters({"teff": 5772})
    {'teff': 5772.0}
    """
    if values is None:
        return None
    units = dict(zip(PARAMETER_NAMES, ("K", None, None, "km/s"), strict=True))
    out = {}
    for name, value in values.items():
        if name not in units:
            raise UsageError(f"'{name}' is not a parameter; there are {', '.join(PARAMETER_NAMES)}.")
        try:
            unit = units[name]
            if getattr(value, "unit", None) is not None:
                value = value.to_value(unit) if unit else getattr(value, "value", value)
            number = float(value)
        except (TypeError, ValueError) as error:
            raise UsageError(
                f"{name} = {value!r} is not a number in {PARAMETER_UNITS[PARAMETER_NAMES.index(name)]}."
            ) from error
        if not np.isfinite(number):
            raise UsageError(f"{name} = {number} is not a finite number.")
        out[name] = number
    return out


def fixed_outside(fix: Mapping[str, Any] | None) -> tuple[Outside, ...]:
    """An `Outside` that fixes the given parameters; empty for none."""
    values = bare_parameters(fix)
    return (Outside.fixed("fixed by the user", **values),) if values else ()


def _stars(source: Any, columns: Mapping[str, str] | None, ions: Mapping[str, str] | None) -> list[Star]:
    if isinstance(source, (str, Path)) or hasattr(source, "colnames"):
        from specsolve.star_table import read_stars

        return read_stars(source, columns=columns, ions=ions)
    stars = list(source)
    if not all(isinstance(star, Star) for star in stars):
        raise InputError("solve wants a table, a path, a Star or an iterable of Stars.")
    return stars


def _split_reference(reference: str | Star, stars: list[Star]) -> tuple[Star, list[Star]]:
    if isinstance(reference, Star):
        return reference, stars
    same = [star for star in stars if star.name == reference]
    if same:
        return same[0], [star for star in stars if star.name != reference]
    if reference.strip().lower() == SUN_NAME.lower():
        return solar_star(), stars
    names = ", ".join(star.name for star in stars[:10])
    raise InputError(
        f"the reference star '{reference}' is not in the table; it has {names}{', ...' if len(stars) > 10 else ''}."
    )


def _fixed_outside_grid(problem: Problem) -> str:
    low, high = problem.bounds
    for name, value in problem.fixed.items():
        place = PARAMETER_NAMES.index(name)
        if not low[place] <= value <= high[place]:
            return f"fixed {name} = {value:g} lies outside the grid ({low[place]:g} to {high[place]:g})"
        elif low[place] == high[place] and value != low[place]:
            return f"the grid has {name} = {low[place]:g} alone: fix it there"
    for place in problem.free:
        if low[place] == high[place]:
            return f"the grid has {PARAMETER_NAMES[place]} = {low[place]:g} alone: fix it there"
    return ""
