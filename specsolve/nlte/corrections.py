"""Non-LTE corrections: the abundance that a line gives with departures minus the one that it gives in LTE.

At fixed width both treatments meet the same equivalent width. At fixed abundance the width is the one that the abundance
gives with departures, and the correction is that abundance minus the one that LTE reads from this width.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import PchipInterpolator

from specsolve.atmosphere.model import Atmosphere
from specsolve.constants import SOLAR_IRON
from specsolve.errors import ConvergenceError, InputError
from specsolve.formation.equivalent_width import reduced_widths
from specsolve.lines import LineList
from specsolve.matter.composition import composition_for
from specsolve.nlte.departures import DEPTHS, DepartureStore, LineDepartures, at_depths
from specsolve.nlte.equilibrium import iterate, medium
from specsolve.nlte.line_levels import line_levels
from specsolve.nlte.packaged import DEFAULT_SIZE, packaged_atom
from specsolve.nlte.recipe import Recipe

#: Abundances relative to that of the atmosphere at which widths are computed [dex].
OFFSETS = np.arange(-1.4, 1.41, 0.14)
#: Factor on S_H that spans the systematic range.
RANGE_FACTOR = 3.0
AT_WIDTH, AT_ABUNDANCE = "width", "abundance"

#: Limits within which corrections have been compared with published ones.
TESTED = {"teff": (4500.0, 6500.0), "logg": (1.0, 5.0), "mh": (-3.0, 0.5)}


@dataclass(frozen=True, kw_only=True)
class Corrections:
    """Corrections of lines at one point; arrays of shape (n_lines,).

    Attributes
    ----------
    teff, logg, mh, vmic : float
    lines : LineList
    reduced_width : ndarray
        log10(W / lambda) that both abundances meet; nan where none was asked for that can be met.
    abundance_lte, abundance_nlte : ndarray
        A(Fe) [dex].
    correction : ndarray
        Their difference, NLTE minus LTE [dex].
    weak_collisions, strong_collisions : ndarray
        The same with S_H divided and multiplied by `RANGE_FACTOR`; nan if not asked for.
    approximate : ndarray of bool
        See `line_levels.LineLevels`.
    flags : tuple of str
        ``outside_tested_range`` with the names of the parameters.
    """

    teff: float
    logg: float
    mh: float
    vmic: float
    lines: LineList
    reduced_width: np.ndarray
    abundance_lte: np.ndarray
    abundance_nlte: np.ndarray
    correction: np.ndarray
    weak_collisions: np.ndarray
    strong_collisions: np.ndarray
    approximate: np.ndarray
    flags: tuple[str, ...]


def departures_of(
    atmosphere: Atmosphere, lines: LineList, recipe: Recipe | None = None, size: int = DEFAULT_SIZE
) -> LineDepartures:
    """Departures of lines solved for one atmosphere.

    Raises
    ------
    ConvergenceError
    """
    return solved_departures(atmosphere, lines, (recipe or Recipe(),), size)[0]


def solved_departures(
    atmosphere: Atmosphere, lines: LineList, recipes: tuple[Recipe, ...], size: int = DEFAULT_SIZE
) -> list[LineDepartures]:
    """Departures of lines for several recipes with the same ultraviolet opacity.

    Raises
    ------
    ConvergenceError
    """
    atom, found = packaged_atom(size), line_levels(lines, size)
    composition = composition_for(atmosphere.mh, atmosphere.alpha)
    surroundings = medium(atmosphere, composition, atom, recipes[0].uv_residual)
    out, start = [], None
    for recipe in recipes:
        solution = iterate(surroundings, atom, recipe, start)
        if not solution.converged:
            raise ConvergenceError(
                f"no departures at teff {atmosphere.teff:g}, logg {atmosphere.logg:g}, mh {atmosphere.mh:g}: "
                f"{solution.reason}", error=solution.change,
            )  # fmt: skip
        start = solution if start is None else start
        log_b = at_depths(solution.log_b, solution.log_tau)
        out.append(LineDepartures(log_b, np.array(DEPTHS), found.lower, found.upper))
    return out


def corrections(
    atmosphere: Atmosphere,
    lines: LineList,
    vmic: float,
    *,
    reduced_width: np.ndarray | None = None,
    abundance: float | None = None,
    at: str = AT_WIDTH,
    departures: DepartureStore | None = None,
    with_range: bool = True,
) -> Corrections:
    """Corrections of lines in one atmosphere.

    Parameters
    ----------
    atmosphere : Atmosphere
    lines : LineList
    vmic : float
        [km/s]
    reduced_width : ndarray, shape (n_lines,), optional
        Measured log10(W / lambda). Without it, that of the abundance: in LTE for ``at="width"``.
    abundance : float, optional
        A(Fe); that of the atmosphere by default.
    at : {"width", "abundance"}
    departures : DepartureStore, optional
        Take the departures from a store, linear between its nodes; solved for this atmosphere by default.
    with_range : bool
        Solve with S_H x 3 and / 3 too.

    Raises
    ------
    ConvergenceError, MissingNodeError

    Examples
    --------
    >>> corrections(atmosphere, lines, 1.5).correction                         # doctest: +SKIP
    """
    if at not in (AT_WIDTH, AT_ABUNDANCE):
        raise InputError(f"corrections are at fixed {AT_WIDTH} or {AT_ABUNDANCE}, not {at}")
    recipe = Recipe()
    recipes = (recipe,)
    if with_range:
        weak, strong = recipe.hydrogen_factor / RANGE_FACTOR, recipe.hydrogen_factor * RANGE_FACTOR
        recipes += (replace(recipe, hydrogen_factor=weak), replace(recipe, hydrogen_factor=strong))
    if departures is not None:
        solved = [departures.of_lines(lines, atmosphere.teff, atmosphere.logg, atmosphere.mh)]
        if with_range:
            solved += solved_departures(atmosphere, lines, recipes[1:])
    else:
        solved = solved_departures(atmosphere, lines, recipes)
    own = SOLAR_IRON + atmosphere.mh
    wanted = own if abundance is None else float(abundance)
    lte = Growth.of(atmosphere, lines, vmic, None)
    with_departures = [Growth.of(atmosphere, lines, vmic, one) for one in solved]
    if reduced_width is None:
        widths = lte.widths(wanted) if at == AT_WIDTH else with_departures[0].widths(wanted)
    else:
        widths = np.asarray(reduced_width, dtype=float)
    a_lte = lte.abundances(widths)
    values = [one.abundances(widths) - a_lte for one in with_departures]
    nothing = np.full(len(lines), np.nan)
    return Corrections(
        teff=atmosphere.teff, logg=atmosphere.logg, mh=atmosphere.mh, vmic=vmic, lines=lines, reduced_width=widths,
        abundance_lte=a_lte, abundance_nlte=a_lte + values[0], correction=values[0],
        weak_collisions=values[1] if with_range else nothing, strong_collisions=values[2] if with_range else nothing,
        approximate=line_levels(lines).approximate, flags=validity_flags(atmosphere.teff, atmosphere.logg, atmosphere.mh),
    )  # fmt: skip


def validity_flags(teff: float, logg: float, mh: float) -> tuple[str, ...]:
    """``outside_tested_range`` with the names of the parameters that lie outside `TESTED`.

    Examples
    --------
    >>> validity_flags(5777.0, 4.4, 0.0), validity_flags(7000.0, 4.4, 0.0)
    ((), ('outside_tested_range_teff',))
    """
    out = []
    for name, value in (("teff", teff), ("logg", logg), ("mh", mh)):
        low, high = TESTED[name]
        if not low <= value <= high:
            out.append(f"outside_tested_range_{name}")
    return tuple(out)


@dataclass(frozen=True)
class Growth:
    """Widths of lines as functions of abundance.

    Attributes
    ----------
    abundances_a : ndarray, shape (n_a,)
        A(Fe) [dex].
    log_widths : ndarray, shape (n_lines, n_a)
    """

    abundances_a: np.ndarray
    log_widths: np.ndarray

    @classmethod
    def of(cls, atmosphere: Atmosphere, lines: LineList, vmic: float, departures: Callable | None) -> Growth:
        """From one atmosphere."""
        grid = SOLAR_IRON + atmosphere.mh + OFFSETS
        composition = composition_for(atmosphere.mh, atmosphere.alpha)
        widths = reduced_widths(atmosphere, composition, lines, [vmic], grid, departures=departures)
        return cls(grid, widths[:, 0])

    def widths(self, abundance: float) -> np.ndarray:
        """log10(W / lambda) at an abundance; nan outside."""
        return np.array(
            [
                PchipInterpolator(self.abundances_a[good], row[good], extrapolate=False)(abundance)
                if good.sum() > 1
                else np.nan
                for row, good in self._rows()
            ]
        )

    def abundances(self, log_widths: np.ndarray) -> np.ndarray:
        """A(Fe) at widths; nan outside."""
        out = np.full(log_widths.size, np.nan)
        for i, (row, good) in enumerate(self._rows()):
            if good.sum() > 1 and np.isfinite(log_widths[i]):
                out[i] = PchipInterpolator(row[good], self.abundances_a[good], extrapolate=False)(log_widths[i])
        return out

    def _rows(self):
        for row in self.log_widths:
            good = np.isfinite(row)
            good[1:] &= row[1:] > np.maximum.accumulate(np.where(np.isfinite(row), row, -np.inf))[:-1]
            yield row, good
