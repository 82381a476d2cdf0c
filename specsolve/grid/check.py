"""How well a grid stands for the full engine: widths computed at points between its nodes."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.errors import ConvergenceError, InputError
from specsolve.grid.engine import Engine
from specsolve.grid.interpolate import AT_EDGE, BESIDE_MISSING, Interpolator
from specsolve.grid.stencil import cell_of
from specsolve.grid.store import ResponseGrid

if TYPE_CHECKING:
    from specsolve.atmosphere.model import Atmosphere
    from specsolve.atmosphere.store import AtmosphereStore

USABLE = (-6.5, -4.6)
"""Range of log10(W/lambda) that counts in a summary: weaker lines are not measured, stronger ones not used."""

STENCILS = {"inside": 0, "at_grid_edge": AT_EDGE, "beside_missing_node": BESIDE_MISSING}
"""Kinds of cells whose errors are reported apart; a cell of both kinds counts as beside a missing node."""


@dataclass(frozen=True, kw_only=True, eq=False)
class GridCheck:
    """The full engine against a grid.

    Attributes
    ----------
    points : ndarray, shape (n_points, 4)
        teff, logg, mh, vmic.
    log_widths : ndarray, shape (n_points, n_lines)
        log10(W/lambda) by the engine, at A(Fe) = SOLAR_IRON + mh.
    width_error : ndarray, shape (n_points, n_lines)
        Grid minus engine, dex of W.
    abundance_error : ndarray, shape (n_points, n_lines)
        Abundance that the grid gives for the engine's width, minus the true one [dex].
    flags : ndarray of uint8, shape (n_points,)
        Of the cells, see `Interpolator.flags`.
    """

    points: np.ndarray
    log_widths: np.ndarray
    width_error: np.ndarray
    abundance_error: np.ndarray
    flags: np.ndarray

    def summary(self) -> dict[str, dict[str, float]]:
        """Per kind of cell: number of points and (line, point) pairs, median, 99th percentile and worst error [dex].

        Errors of abundances, and the 99th percentile of those of log10 W, which are smaller by the growth of the
        curve: a fifth for saturated lines. Only widths in `USABLE` count; nan where there are none. The engine's own
        error is in them: its profile points follow the strongest of the abundances asked for at once.
        """
        kind = np.where(self.flags & BESIDE_MISSING, BESIDE_MISSING, self.flags & AT_EDGE)
        usable = (self.log_widths > USABLE[0]) & (self.log_widths < USABLE[1]) & np.isfinite(self.abundance_error)
        out = {}
        for name, bit in STENCILS.items():
            pairs = (kind == bit)[:, None] & usable
            errors = np.abs(self.abundance_error[pairs])
            middle, high, worst = np.percentile(errors, [50, 99, 100]) if errors.size else (np.nan,) * 3
            out[name] = {
                "points": int((kind == bit).sum()),
                "pairs": int(errors.size),
                "median": float(middle),
                "percentile_99": float(high),
                "worst": float(worst),
                "width_percentile_99": float(np.percentile(np.abs(self.width_error[pairs]), 99))
                if errors.size
                else np.nan,
                "within_0.005": float(np.mean(errors <= 0.005)) if errors.size else np.nan,
            }
        return out


def random_points(
    grid: ResponseGrid, treatment: str, n_points: int, rng: np.random.Generator, n_metallicities: int | None = None
) -> np.ndarray:
    """Points spread evenly over the cells of a grid that have no missing corner, shape (n_points, 4).

    Parameters
    ----------
    n_metallicities : int, optional
        Different values of mh (an atmosphere off the nodes needs opacity tables of its own, a minute each): 0 keeps mh
        on nodes, None gives every point its own.

    Raises
    ------
    InputError
        If the grid has no whole cell.
    """
    axes = [*(axis.values for axis in grid.node_axes), grid.axes["vmic"]]
    mh_axis = [axis.name for axis in grid.node_axes].index("mh")
    stencils = grid.stencils(treatment)
    whole = np.array([stencils.cell_valid(c) for c in np.ndindex(*(max(len(a) - 1, 1) for a in axes[:-1]))])
    if not whole.any():
        raise InputError(f"{grid.directory} has no cell without a missing corner")
    if n_metallicities == 0:
        choices = axes[mh_axis]
    else:
        choices = rng.uniform(axes[mh_axis][0], axes[mh_axis][-1], n_metallicities or n_points)
    points: list[list[float]] = []
    while len(points) < n_points:
        theta = [rng.uniform(x[0], x[-1]) for x in axes]
        theta[mh_axis] = choices[len(points) % len(choices)] if n_metallicities is None else rng.choice(choices)
        cell = tuple(cell_of(x, value) for x, value in zip(axes[:-1], theta, strict=False))
        if stencils.cell_valid(cell):
            points.append([float(v) for v in theta])
    return np.array(points)


def check_points(
    grid: ResponseGrid,
    points: np.ndarray,
    atmosphere_at: Callable[[float, float, float], Any],
    engine: Engine,
    treatment: str = "lte",
    line_indices: Sequence[int] | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> GridCheck:
    """Compute widths at points by the full engine and compare.

    Parameters
    ----------
    points : ndarray, shape (n_points, 4)
        teff, logg, mh, vmic.
    atmosphere_at : callable
        ``atmosphere_at(teff, logg, mh)`` -> atmosphere converged there; `converged_atmosphere` with a store.
    engine : Engine
    line_indices : sequence of int, optional
        Positions in ``grid.lines``; all by default.
    """
    interpolator = Interpolator(grid, treatment, line_indices)
    lines = grid.lines.select(interpolator.line_indices)
    truth, width_error, abundance_error, flags = [], [], [], []
    for done, theta in enumerate(points):
        atmosphere = atmosphere_at(*(float(v) for v in theta[:3]))
        widths = engine.widths(atmosphere, lines, theta[3:4], np.zeros(1))[:, 0, 0]
        answer = interpolator.abundances(theta, widths)
        true_abundance = SOLAR_IRON + theta[2]
        truth.append(widths)
        abundance_error.append(answer.abundance - true_abundance)
        width_error.append(interpolator.widths(theta, true_abundance) - widths)
        flags.append(interpolator.flags(theta))
        if progress is not None:
            progress(done + 1, len(points))
    return GridCheck(
        points=np.array(points),
        log_widths=np.array(truth),
        width_error=np.array(width_error),
        abundance_error=np.array(abundance_error),
        flags=np.array(flags, dtype=np.uint8),
    )


def converged_atmosphere(store: AtmosphereStore, teff: float, logg: float, mh: float) -> Atmosphere:
    """An atmosphere converged at a point between the nodes, with opacity tables of its metallicity.

    Raises
    ------
    ConvergenceError
    """
    from specsolve.atmosphere.structure import solve_structure
    from specsolve.matter.composition import composition_for

    start = nearest_atmosphere(store, teff, logg, mh)
    model = solve_structure(teff, logg, composition_for(mh), opacity_tables(mh), start=start)
    if model.status != "converged":
        raise ConvergenceError(
            f"no atmosphere at teff {teff:g}, logg {logg:g}, mh {mh:g}: {model.reason}", error=model.flux_error
        )
    return model


@lru_cache(maxsize=4)
def opacity_tables(mh: float):
    """Line opacity tables of a metallicity; computed, in about a minute, where the package has none."""
    from specsolve.atmosphere.build import blanketing_for

    return blanketing_for(mh)


def nearest_atmosphere(store: AtmosphereStore, teff: float, logg: float, mh: float) -> Atmosphere:
    """The stored atmosphere nearest to a point, in units of 250 K, 0.5 dex, 0.5 dex."""
    nodes = [node for node in store.nodes() if store.has(*node)]
    scaled = (np.array(nodes) - (teff, logg, mh)) / (250.0, 0.5, 0.5)
    return store.get(*nodes[int(np.argmin((scaled**2).sum(axis=1)))])
