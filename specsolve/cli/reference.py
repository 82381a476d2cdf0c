"""What the stars of a run share: settings, outside knowledge, and the reference star of differential work."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from specsolve.cli.outside import known_of_all, with_outside
from specsolve.cli.request import Request
from specsolve.errors import InputError

if TYPE_CHECKING:
    from specsolve.balance.solution import Solution
    from specsolve.balance.star import Star

REFERENCE_FLAG = "reference_star"


def prepare(stars: list[Star], grid: Any, request: Request, options: Any) -> tuple[list[Star], Any, list[Solution]]:
    """The stars to solve, what they share, and the reference star's own solution if there is one.

    Raises
    ------
    InputError
        If the reference star is not in the tables, or its parameters are not known.
    """
    from specsolve.balance.batch import Setting, solve_star
    from specsolve.balance.differential import reference_star
    from specsolve.balance.outside_known import ALPHA
    from specsolve.balance.own_sun import solar_lines
    from specsolve.balance.solution import PARAMETER_NAMES
    from specsolve.balance.solve import fixed_outside
    from specsolve.grid.perturbed import perturbed_grid

    shared = {"treatment": request.treatment, "options": options}
    setting = Setting(**shared, known=known_of_all(request), sun=solar_lines(grid, request.treatment, options))
    chosen = reference_of(stars, request)
    if chosen is None:
        return with_outside(stars, request.outside), setting, []
    others = [star for star in stars if star.name != chosen.name]
    moved = perturbed_grid(grid, chosen.known.get(ALPHA))
    found = reference_star(chosen, moved, request.treatment, request.at, options, parameter_errors=request.at_errors)
    at = dict(zip(PARAMETER_NAMES, found.theta.tolist(), strict=True))
    bare = replace(chosen, known={name: value for name, value in chosen.known.items() if name == ALPHA})
    own = solve_star(bare, grid, Setting(**shared, fixed=fixed_outside(at), sun=setting.sun))
    own = replace(own, flags=(REFERENCE_FLAG, *own.flags), cov_list=found.covariance, notes=(*own.notes, found.note))
    return with_outside(others, request.outside), replace(setting, zero_points=found.zero_points), [own]


def reference_of(stars: list[Star], request: Request) -> Star | None:
    """The reference star: one of the tables, the one of another table, or the packaged Sun; None without one.

    Raises
    ------
    InputError
        If there is no such star, or the other table has several.
    """
    from specsolve.balance.own_sun import SUN_NAME, solar_star

    if request.reference is None:
        return None
    same = [star for star in stars if star.name == request.reference]
    if same:
        return same[0]
    path = Path(request.reference)
    if path.is_file():
        from specsolve.star_table import read_stars

        found = read_stars(path, columns=request.columns, ions=request.ions, units=request.units)
        if len(found) != 1:
            raise InputError(f"{path} has {len(found)} stars; a table of the reference star has one", path=path)
        return found[0]
    if request.reference.strip().lower() == SUN_NAME.lower():
        return solar_star()
    raise InputError(f"the reference star '{request.reference}' is neither in the tables nor a file")
