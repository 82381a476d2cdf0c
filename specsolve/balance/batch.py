"""Many stars: one after the other, or in blocks by the workers of an executor; one bad star never ends the run."""

from __future__ import annotations

import logging
import traceback
from collections.abc import Iterable, Iterator, Mapping, Sequence
from concurrent.futures import Executor, as_completed
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from specsolve.errors import SpecsolveError
from specsolve.grid.perturbed import perturbed_grid

from .assemble import unsolved
from .options import Options
from .outside import Outside
from .outside_known import ALPHA, outside_from_known
from .own_sun import SolarLines
from .problem import Problem
from .solution import Solution
from .star import Star
from .zero_points import ZeroPoints

log = logging.getLogger(__name__)

COMPILED_FROM = 50  # stars; below it loading the compiled kernels costs more than they spare
STARS_PER_BLOCK = 8  # a block should take 0.5 s or more


@dataclass(frozen=True, kw_only=True, eq=False)
class Setting:
    """What all stars of a run share.

    Attributes
    ----------
    treatment : str
    fixed : tuple of Outside
        Holds for every star.
    zero_points : ZeroPoints
    options : Options
    sun : SolarLines
    known : mapping
        What is known of every star from elsewhere, by name (`specsolve.balance.outside_known`); a star's own value of
        a name goes before it.
    compiled : bool
        Set by `solve_stream` for many stars.
    """

    treatment: str = "lte"
    fixed: tuple[Outside, ...] = ()
    zero_points: ZeroPoints = field(default_factory=ZeroPoints.solar)
    options: Options = field(default_factory=Options)
    sun: SolarLines = field(default_factory=SolarLines)
    known: Mapping[str, Any] = field(default_factory=dict)
    compiled: bool = False


def solve_many(
    stars: Iterable[Star],
    grid: Any,
    setting: Setting | None = None,
    *,
    outside: Any = None,
    executor: Executor | None = None,
) -> tuple[Solution, ...]:
    """Solve stars; the result is in the order of the input and does not depend on the executor.

    Examples
    --------
    >>> solutions = solve_many(stars, grid)                                    # doctest: +SKIP
    """
    stars = list(stars)
    done = dict(solve_stream(stars, grid, setting, outside=outside, executor=executor))
    return tuple(done[i] for i in range(len(stars)))


def solve_stream(
    stars: Sequence[Star],
    grid: Any,
    setting: Setting | None = None,
    *,
    outside: Any = None,
    executor: Executor | None = None,
) -> Iterator[tuple[int, Solution]]:
    """(place in the input, Solution) as stars are finished, so that an interrupted run keeps what it has."""
    setting = setting or Setting()
    if len(stars) >= COMPILED_FROM:
        setting = replace(setting, compiled=True)
    known = [outside_of(star, outside) for star in stars]
    if executor is None:
        for i, star in enumerate(stars):
            yield i, solve_star(star, grid, setting, known[i])
        return
    blocks = [range(first, min(first + STARS_PER_BLOCK, len(stars))) for first in range(0, len(stars), STARS_PER_BLOCK)]
    futures = {
        executor.submit(
            _solve_block, str(grid.directory), setting, [stars[i] for i in block], [known[i] for i in block]
        ): block
        for block in blocks
    }
    try:
        for future in as_completed(futures):
            yield from zip(futures[future], future.result(), strict=True)
    except BaseException:
        for future in futures:
            future.cancel()
        raise


def outside_of(star: Star, outside: Any) -> tuple[Outside, ...]:
    """The Outside terms of one star from what `solve` accepts: one, several, a mapping by star name, or a
    function.
    """
    if outside is None:
        return ()
    if isinstance(outside, Outside):
        return (outside,)
    if isinstance(outside, Mapping):
        return outside_of(star, outside.get(star.name))
    if callable(outside):
        return outside_of(star, outside(star))
    return tuple(outside)


def solve_star(star: Star, grid: Any, setting: Setting, known: tuple[Outside, ...] = ()) -> Solution:
    """One star; whatever goes wrong in it becomes an unsolved `Solution` that holds the traceback in its notes."""
    from .solve import solve_problem

    problem = Problem(
        star=star,
        grid=grid,
        treatment=setting.treatment,
        zero_points=setting.zero_points,
        options=setting.options,
        compiled=setting.compiled,
    )
    try:
        about = {**setting.known, **star.known}
        outside = setting.fixed + known + outside_from_known(about)
        moved = perturbed_grid(grid, about.get(ALPHA))
        return solve_problem(replace(problem, outside=outside, grid=moved), setting.sun)
    except SpecsolveError as error:
        return unsolved(problem, str(error), flags=("error",))
    except (ArithmeticError, LookupError, RuntimeError, TypeError, ValueError) as error:
        log.warning("%s: unexpected %s: %s", star.name, type(error).__name__, error)
        failed = unsolved(problem, f"unexpected {type(error).__name__}: {error}", flags=("unexpected_error",))
        return replace(failed, notes=(*failed.notes, traceback.format_exc()))


def _solve_block(
    directory: str, setting: Setting, stars: list[Star], known: list[tuple[Outside, ...]]
) -> list[Solution]:
    grid = _open_once(directory)
    return [solve_star(star, grid, setting, terms) for star, terms in zip(stars, known, strict=True)]


_OPEN: dict[str, Any] = {}


def _open_once(directory: str) -> Any:
    """The grid of a worker process, opened at its first block."""
    if directory not in _OPEN:
        from specsolve.grid.store import ResponseGrid

        _OPEN.clear()
        _OPEN[directory] = ResponseGrid.open(Path(directory), verify=False)
    return _OPEN[directory]
