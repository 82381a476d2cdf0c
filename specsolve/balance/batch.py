"""Many stars: one after the other, or in blocks by the workers of an executor; one bad star never ends the run."""

from __future__ import annotations

import logging
import traceback
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import FIRST_COMPLETED, Executor, wait
from dataclasses import dataclass, field, replace
from itertools import islice
from typing import Any

from specsolve.errors import SpecsolveError, StoreError
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
STARS_PER_BLOCK = 32  # a block should take 0.5 s or more
LEAST_BLOCKS = 8  # where stars are few, they are shared out finely
BLOCKS_IN_FLIGHT = 64  # submitted and not yet given back


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
    places: Sequence[int] | None = None,
    then: Callable[[Solution], Any] | None = None,
) -> Iterator[tuple[int, Any]]:
    """(place in the input, Solution) as stars are finished, so that an interrupted run keeps what it has.

    Parameters
    ----------
    stars, grid, setting, outside, executor
        As for `solve_many`. With an executor there are never more than `BLOCKS_IN_FLIGHT` blocks in its hands.
    places : sequence of int, optional
        Solve only the stars at these places; the numbers are those of a run over all of them.
    then : callable, optional
        A module-level function applied to each `Solution` where it is made; its value is given instead.
    """
    setting = setting or Setting()
    if len(stars) >= COMPILED_FROM:
        setting = replace(setting, compiled=True)
    wanted = range(len(stars)) if places is None else list(places)
    if executor is None:
        for i in wanted:
            solution = solve_star(stars[i], grid, setting, outside_of(stars[i], outside))
            yield i, solution if then is None else then(solution)
        return
    size = block_size(len(wanted))
    blocks = iter([wanted[first : first + size] for first in range(0, len(wanted), size)])
    pending: dict[Any, Sequence[int]] = {}

    def submit(block: Sequence[int]) -> None:
        known = [outside_of(stars[i], outside) for i in block]
        task = executor.submit(
            _solve_block, str(grid.directory), grid.identity, setting, [stars[i] for i in block], known, then
        )
        pending[task] = block

    try:
        for block in islice(blocks, BLOCKS_IN_FLIGHT):
            submit(block)
        while pending:
            finished, _ = wait(pending, return_when=FIRST_COMPLETED)
            for future in finished:
                block = pending.pop(future)
                yield from zip(block, future.result(), strict=True)
                for further in islice(blocks, 1):
                    submit(further)
    except BaseException:
        for future in pending:
            future.cancel()
        raise


def block_size(n_stars: int) -> int:
    """Stars in a block: large enough to take half a second, small enough that all workers have work.

    Examples
    --------
    >>> block_size(10), block_size(10000)
    (1, 32)
    """
    return min(max(n_stars // LEAST_BLOCKS, 1), STARS_PER_BLOCK)


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
    directory: str,
    identity: str,
    setting: Setting,
    stars: list[Star],
    known: list[tuple[Outside, ...]],
    then: Callable[[Solution], Any] | None,
) -> list[Any]:
    grid = _open_once(directory, identity)
    solutions = (solve_star(star, grid, setting, terms) for star, terms in zip(stars, known, strict=True))
    return [solution if then is None else then(solution) for solution in solutions]


_OPEN: dict[tuple[str, str], Any] = {}


def _open_once(directory: str, identity: str) -> Any:
    """The grid of a worker process, opened at its first block; StoreError if it is not the one meant."""
    if (directory, identity) not in _OPEN:
        from specsolve.grid.store import ResponseGrid

        grid = ResponseGrid.open(directory, verify=False)
        if grid.identity != identity:
            raise StoreError(f"{directory} is not the grid of this run; has it changed?", path=directory)
        _OPEN.clear()
        _OPEN[directory, identity] = grid
    return _OPEN[directory, identity]
