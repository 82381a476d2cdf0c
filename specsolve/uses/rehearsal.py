"""What would I get? Points with known parameters observed and analysed many times on paper.

Widths of the truth are those of the response grid in the truth's line formation, with errors of log gf drawn as the list
states them; the analysis is the full search and the rule of ``solve``, in its own line formation.
"""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping
from concurrent.futures import Executor, as_completed
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.balance.options import Options
from specsolve.balance.problem import Problem
from specsolve.balance.solution import OUTSIDE_GRID, PARAMETER_NAMES
from specsolve.balance.solve import open_grid
from specsolve.balance.star import Star, nearest_lines
from specsolve.constants import SOLAR_IRON
from specsolve.errors import InputError, OutOfGridError, UsageError
from specsolve.grid.interpolate import Interpolator
from specsolve.lines.reading import read_line_list
from specsolve.provenance import collect
from specsolve.report.tables import make_table
from specsolve.schema import columns_of

from .local import solve_blind, solve_near
from .noise import Noise
from .points import NO_VMIC, Points, read_points
from .rehearsal_statistics import EACH, NONE, ONCE, trial_statistics
from .shift_fit import ShiftFit, fit_shift

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.grid.store import ResponseGrid

log = logging.getLogger(__name__)

UNKNOWN_LOG_GF_ERROR = 0.08  # dex, for lines whose source gives none (invented; as in the demo cluster)
REHEARSED, MISSING_NODE, TOO_FEW, NO_TRUE_VMIC = "rehearsed", "missing_node", "too_few_lines", "no_vmic"
STRENGTH_MARGIN = 0.3  # dex beyond the cut on reduced width, within which lines are measured
FEWEST_LINES = 8
COMPILED_FROM = 40  # trials in all; below it the compiled kernels cost more than they spare
POINTS_PER_BLOCK = 4
Progress = Callable[[int, int], None]


@dataclass(frozen=True, eq=False)
class Plan:
    """What a rehearsal does at every point.

    Attributes
    ----------
    truth, analysis : str
        Line formation.
    noise : Noise
    n_trials : int
    seed : int
    gf_errors : str
        "each": every trial has a list of its own errors, which the reported total errors ought to cover; "once": one
        draw for all, which leaves a bias as a real list does; "none".
    line_indices : ndarray of int
        Lines of the grid that are observed.
    options : Options
    wanted : mapping of str to float
        Errors that are wished for.
    full_search : bool
        Search the whole grid in every trial; else each starts at the truth, and ties are not seen.
    compiled : bool
    """

    truth: str
    analysis: str
    noise: Noise
    n_trials: int
    seed: int
    gf_errors: str
    line_indices: np.ndarray
    options: Options
    wanted: Mapping[str, float] = field(default_factory=dict)
    full_search: bool = True
    compiled: bool = False


@dataclass(frozen=True, eq=False)
class Rehearsal:
    """Result of a rehearsal.

    Attributes
    ----------
    table : Table
        Kind rehearsal.
    fits : tuple of ShiftFit
    notes : tuple of str
    """

    table: Table
    fits: tuple[ShiftFit, ...]
    notes: tuple[str, ...]


def rehearse(
    points: Points | str | Path | Table,
    grid: ResponseGrid | str | Path | None = None,
    *,
    noise: Noise,
    lines: str | Path | None = None,
    truth: str = "lte",
    analysis: str = "lte",
    trials: int = 20,
    seed: int = 0,
    gf_errors: str = EACH,
    wanted: Mapping[str, float] | None = None,
    options: Options | None = None,
    columns: Mapping[str, str] | None = None,
    full_search: bool = True,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> Rehearsal:
    """Rehearse points.

    Parameters
    ----------
    points : Points, table or path
        See `read_points`.
    grid : ResponseGrid or path, optional
        The packaged one by default.
    noise : Noise
    lines : path, optional
        Line list; all lines of the grid by default.
    truth, analysis : str
        Line formation of the widths and of their analysis.
    trials, seed : int
        The result depends on the seed alone, not on the executor.
    gf_errors : str
        "each", "once" or "none", see `Plan`.
    wanted : mapping, optional
        Parameter to wanted error, for the S/N that it needs.
    options : Options, optional
    columns : mapping, optional
        Headings of the table of points.
    full_search : bool
    executor : concurrent.futures.Executor, optional
    progress : callable, optional
        Called with (done, total) points.

    Raises
    ------
    SpecsolveError

    Examples
    --------
    >>> import specsolve
    >>> from specsolve.uses.noise import Noise
    >>> noise = Noise(signal_to_noise=80.0, resolving_power=30000.0)
    >>> found = specsolve.rehearse("targets.ecsv", noise=noise)                # doctest: +SKIP
    """
    if not isinstance(points, Points):
        points = read_points(points, columns)
    grid = open_grid(grid)
    for name in (truth, analysis):
        if name not in grid.treatments:
            raise UsageError(f"treatment '{name}' is not in the grid; it has {', '.join(grid.treatments)}")
    if trials < 2:
        raise UsageError(f"{trials} trial{'s' if trials != 1 else ''}: a scatter needs two or more")
    if gf_errors not in (EACH, ONCE, NONE):
        raise UsageError(f"errors of log gf can be drawn {EACH}, {ONCE} or {NONE}, not '{gf_errors}'")
    snr = np.where(np.isfinite(points.signal_to_noise), points.signal_to_noise, noise.signal_to_noise)
    if np.isfinite(noise.resolving_power) and not (snr > 0.0).all():
        bad = points.names[int(np.flatnonzero(~(snr > 0.0))[0])]
        raise UsageError(f"{bad} has no positive signal to noise: give it in the table or for all points")
    index, notes = chosen_lines(grid, lines)
    plan = Plan(
        truth=truth,
        analysis=analysis,
        noise=noise,
        n_trials=trials,
        seed=seed,
        gf_errors=gf_errors,
        line_indices=index,
        options=options or Options(),
        wanted=dict(wanted or {}),
        full_search=full_search,
        compiled=len(points.names) * trials >= COMPILED_FROM,
    )
    if points.from_relation:
        notes.append(f"vmic of {points.from_relation} points is that of a published relation")
    rows = list(_rows(points, snr, grid, plan, executor, progress))
    table_rows = {c.name: np.array([row[c.name] for row in rows]) for c in columns_of("rehearsal")}
    fits = _fits(points.theta, table_rows)
    provenance = collect(
        inputs=[path for path in (points.path, Path(lines) if lines else None) if path],
        options={
            "truth": truth, "analysis": analysis, "trials": trials, "gf_errors": gf_errors, "noise": vars(noise),
            "wanted": plan.wanted, "full_search": full_search, "options": plan.options.as_dict(),
        },
        seed=seed,
        grid={"identity": grid.identity, "description": grid.description},
    )  # fmt: skip
    table = make_table("rehearsal", table_rows, provenance)
    notes += [fit.words for fit in fits]
    table.meta["notes"] = notes
    return Rehearsal(table, fits, tuple(notes))


def chosen_lines(grid: ResponseGrid, lines: str | Path | None) -> tuple[np.ndarray, list[str]]:
    """Places in the grid of the lines of a list, and a note of those that it lacks."""
    if lines is None:
        return np.arange(len(grid.lines)), ["all lines of the grid"]
    asked = read_line_list(lines)
    index = nearest_lines(
        asked.wavelength_air,
        asked.ion,
        asked.excitation_potential,
        grid.lines.wavelength_air,
        grid.lines.ion,
        grid.lines.excitation_potential,
    )
    found = np.unique(index[index >= 0])
    if found.size == 0:
        raise InputError(
            f"{lines}: none of its lines is in the grid; build one: specsolve grid build {lines} --output my_grid"
        )
    notes = [f"{found.size} of {len(asked)} lines of the list are in the grid"]
    if found.size < len(asked):
        notes[0] += f"; `specsolve grid build {lines} --output my_grid` adds the others"
    return found, notes


def _rows(points, snr, grid, plan, executor, progress):
    """Rows in the order of the points; each point has random numbers of its own."""
    seeds = np.random.SeedSequence(plan.seed).spawn(len(points.names) + 1)
    shared = np.random.default_rng(seeds[-1]).standard_normal(len(grid.lines))
    jobs = [(points.names[i], points.theta[i], float(snr[i]), seeds[i]) for i in range(len(points.names))]
    if executor is None:
        for i, job in enumerate(jobs):
            yield rehearse_point(grid, plan, shared, *job)
            if progress:
                progress(i + 1, len(jobs))
        return
    done: dict[int, list] = {}
    blocks = {
        executor.submit(_block, grid, plan, shared, jobs[first : first + POINTS_PER_BLOCK]): first
        for first in range(0, len(jobs), POINTS_PER_BLOCK)
    }
    finished = 0
    try:
        for future in as_completed(blocks):
            done[blocks[future]] = future.result()
            finished += len(done[blocks[future]])
            if progress:
                progress(finished, len(jobs))
    except BaseException:
        for future in blocks:
            future.cancel()
        raise
    for first in sorted(done):
        yield from done[first]


def _block(grid, plan, shared, jobs) -> list[dict[str, Any]]:
    return [rehearse_point(grid, plan, shared, *job) for job in jobs]


def true_log_widths(grid, plan: Plan, theta: np.ndarray, gf_error: np.ndarray, interpolator=None) -> np.ndarray:
    """log10(W/lambda) of the observed lines when their log gf are wrong by gf_error; nan where the grid has none."""
    interpolator = interpolator or Interpolator(grid, plan.truth, plan.line_indices, compiled=plan.compiled)
    return interpolator.widths(theta, SOLAR_IRON + theta[2] + gf_error)


def rehearse_point(
    grid: ResponseGrid,
    plan: Plan,
    shared: np.ndarray,
    name: str,
    theta: np.ndarray,
    snr: float,
    seed: np.random.SeedSequence,
) -> dict[str, Any]:
    """The row of one point.

    Parameters
    ----------
    grid, plan
    shared : ndarray, shape (n_grid_lines,)
        Unit normal numbers of the errors of log gf that all points share ("once").
    name, theta, snr
    seed : numpy.random.SeedSequence
        Of this point.
    """
    row = _blank(plan, name, theta, snr)
    if not np.isfinite(theta[3]):
        return row | {"status": NO_TRUE_VMIC, "reason": NO_VMIC}
    lines = grid.lines
    sigma_gf = np.where(np.isnan(lines.log_gf_error), UNKNOWN_LOG_GF_ERROR, lines.log_gf_error)[plan.line_indices]
    try:
        interpolator = Interpolator(grid, plan.truth, plan.line_indices, compiled=plan.compiled)
        plain = true_log_widths(grid, plan, theta, np.zeros(sigma_gf.size), interpolator)
    except OutOfGridError as error:
        return row | {"status": OUTSIDE_GRID, "reason": str(error)}
    if not np.isfinite(plain).any():
        return row | {"status": MISSING_NODE, "reason": "a node of the grid beside this point is missing; not bridged"}
    low, high = plan.options.reduced_width_range
    if np.sum((plain > low) & (plain < high)) < FEWEST_LINES:
        return row | {"status": TOO_FEW, "reason": f"fewer than {FEWEST_LINES} lines of useful strength"}
    rng = np.random.default_rng(seed)
    found, n_lines = [], []
    for _ in range(plan.n_trials):
        own = rng.standard_normal(sigma_gf.size)
        unit = {EACH: own, ONCE: shared[plan.line_indices], NONE: np.zeros(sigma_gf.size)}[plan.gf_errors]
        log_w = true_log_widths(grid, plan, theta, unit * sigma_gf, interpolator)
        problem = observed_problem(grid, plan, name, log_w, snr, rng)
        point = solve_blind(problem) if plan.full_search else solve_near(problem, theta)
        found.append((problem, point))
        n_lines.append(int(point.state.used.sum()) if point.state is not None else 0)
    return row | {"status": REHEARSED, "n_lines": float(np.mean(n_lines))} | trial_statistics(plan, theta, snr, found)


def observed_problem(
    grid: ResponseGrid, plan: Plan, name: str, log_w: np.ndarray, snr: float, rng: np.random.Generator
) -> Problem:
    """A star as it would be measured, ready for its analysis.

    Parameters
    ----------
    grid, plan, name
    log_w : ndarray, shape (n_observed_lines,)
        True log10(W/lambda).
    snr : float
    rng : numpy.random.Generator
    """
    lines, index = grid.lines, plan.line_indices
    wavelength = lines.wavelength_air[index]
    low, high = plan.options.reduced_width_range
    seen = np.isfinite(log_w) & (log_w > low - STRENGTH_MARGIN) & (log_w < high + STRENGTH_MARGIN)
    widths = np.where(seen, wavelength * 1e3 * 10.0 ** np.where(seen, log_w, 0.0), 1.0)
    errors = plan.noise.width_error(wavelength, widths, snr)
    measured, significant = plan.noise.observe(widths, errors, rng)
    keep = seen & significant
    star = Star.from_arrays(
        name,
        wavelength[keep],
        lines.ion[index][keep],
        measured[keep],
        np.broadcast_to(errors, widths.shape)[keep],
        excitation_potential=lines.excitation_potential[index][keep],
    )
    return Problem(star=star, grid=grid, treatment=plan.analysis, options=plan.options, compiled=plan.compiled)


def _blank(plan: Plan, name: str, theta: np.ndarray, snr: float) -> dict[str, Any]:
    """The row of a point that could not be rehearsed."""
    row: dict[str, Any] = {}
    for column in columns_of("rehearsal"):
        row[column.name] = {"str": "", "float64": np.nan, "int64": 0, "bool": False}[column.dtype]
    row |= {"point": name, "truth_treatment": plan.truth, "treatment": plan.analysis, "signal_to_noise": snr}
    return row | dict(zip(PARAMETER_NAMES, theta.tolist(), strict=True))


def _fits(theta: np.ndarray, columns: dict[str, np.ndarray]) -> tuple[ShiftFit, ...]:
    """Linear fits of the shifts of teff and logg; their values and failures go into the columns."""
    fits = []
    fails = np.zeros(len(theta), bool)
    for name in ("teff", "logg"):
        one = fit_shift(name, theta, columns[f"bias_{name}"].astype(float), columns[f"bias_{name}_error"].astype(float))
        if one is not None:
            fits.append(one)
            columns[f"shift_fit_{name}"] = one.values
            fails |= one.fails
    columns["linear_fails"] = fails
    return tuple(fits)
