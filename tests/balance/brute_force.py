"""Invented stars of several kinds, and a search for minima that shares nothing with the one under test but the
objective: many starts over the whole grid and a minimiser of scipy.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from specsolve.balance.minima import enough_lines, predicted_lines, preliminary_lines
from specsolve.balance.newton import STEP_UNIT, Minimum, whitened_system
from specsolve.balance.options import Options
from specsolve.balance.problem import Problem
from specsolve.balance.star import Star
from specsolve.constants import SOLAR_IRON
from specsolve.errors import OutOfGridError
from specsolve.grid import Interpolator, ResponseGrid

KINDS = ("clean", "few Fe II", "metal-poor", "giants", "holes")
BOXES = {
    "clean": ((4750.0, 3.2, -1.0, 0.6), (6400.0, 4.7, 0.3, 1.8)),
    "few Fe II": ((4750.0, 3.2, -1.0, 0.6), (6400.0, 4.7, 0.3, 1.8)),
    "metal-poor": ((4600.0, 1.5, -2.6, 0.8), (6300.0, 4.6, -1.5, 2.2)),
    "giants": ((4200.0, 0.8, -1.2, 1.0), (5200.0, 3.0, 0.2, 2.4)),
    "holes": ((4750.0, 2.5, -1.0, 0.8), (6250.0, 4.5, 0.2, 2.0)),
}
"""Range of teff, logg, mh, vmic of each kind."""
NOISE, GF_NOISE, MOST_LINES, FEW_FE2 = 0.03, 0.06, 100, 3
STRENGTH = (-5.95, -4.85)
OPTIONS = Options(worst_grade=4)
VMIC_STARTS = (0.75, 1.5, 2.5)
BEST_STARTS = 12
SAME = 0.05  # in STEP_UNIT: ends nearer than this are one minimum
ROOT = 1.0  # chi2: a balance that holds within its errors
WANDERED = 0.2  # in STEP_UNIT: a candidate that the minimiser leaves by more is none
NEAR_EQUAL = 6.0  # 2 d ln L
NO_OBJECTIVE = 1e8


@dataclass(frozen=True, eq=False)
class Case:
    """An invented star: what kind, where, and the problem."""

    kind: str
    truth: np.ndarray
    problem: Problem


def with_holes(grid: ResponseGrid, truth, rng: np.random.Generator) -> ResponseGrid:
    """The grid without three random nodes of the 5 x 4 x 4 around a place."""
    axes = [axis.values for axis in grid.node_axes]
    around = [int(np.searchsorted(x, at)) for x, at in zip(axes, truth, strict=False)]
    header = dict(grid.header)
    entry = dict(header["treatments"]["lte"])
    known = {tuple(item["node"]) for item in entry["missing"]}
    new = set()
    while len(new) < 3:
        node = tuple(
            int(np.clip(centre + rng.integers(-2, 2), 0, x.size - 1)) for centre, x in zip(around, axes, strict=True)
        )
        if node not in known:
            new.add(node)
    entry["missing"] = [*entry["missing"], *({"node": list(node), "reason": "a hole for this test"} for node in new)]
    header["treatments"] = {**header["treatments"], "lte": entry}
    return dataclasses.replace(grid, header=header)


def invented_case(grid: ResponseGrid, kind: str, seed: int) -> Case:
    """A star of a kind; widths from the whole grid, solved on it or on one with holes."""
    rng = np.random.default_rng([seed, KINDS.index(kind)])
    low, high = (np.array(end) for end in BOXES[kind])
    whole = Interpolator(grid, "lte", compiled=True)
    while True:
        truth = rng.uniform(low, high)
        widths = whole.widths(truth, SOLAR_IRON + truth[2] + rng.normal(0.0, GF_NOISE, len(grid.lines)))
        good = (widths > STRENGTH[0]) & (widths < STRENGTH[1])
        second = np.flatnonzero(good & (grid.lines.ion == "Fe II"))
        first = np.flatnonzero(good & (grid.lines.ion == "Fe I"))
        if kind == "few Fe II":
            second = rng.permutation(second)[:FEW_FE2]
        if first.size >= 15 and second.size >= FEW_FE2:
            break
    chosen = np.concatenate([rng.permutation(first)[: MOST_LINES - second.size], second])
    width = grid.lines.wavelength_air[chosen] * 1e3 * 10.0 ** widths[chosen]
    width *= 1.0 + NOISE * rng.normal(size=chosen.size)
    star = Star.from_arrays(
        f"{kind} {seed}", grid.lines.wavelength_air[chosen], grid.lines.ion[chosen], width, NOISE * width,
        excitation_potential=grid.lines.excitation_potential[chosen],
    )  # fmt: skip
    own = with_holes(grid, truth, rng) if kind == "holes" else grid
    return Case(kind, truth, Problem(star=star, grid=own, options=OPTIONS, compiled=True))


def system(problem: Problem, theta: np.ndarray, allowed: np.ndarray):
    """Whitened residuals and their Jacobian in STEP_UNIT; None where there is no balance."""
    try:
        state = problem.balance(theta, allowed)
    except OutOfGridError:
        return None
    if not state.used.any() or not np.isfinite(state.residuals[problem.active]).all():
        return None
    z, jacobian = whitened_system(problem, state)
    return z, jacobian * STEP_UNIT


def lattice_starts(problem: Problem, allowed: np.ndarray) -> list[np.ndarray]:
    """Nodes with the least objective, and those with less than all their neighbours."""
    axes = [np.asarray(problem.grid.axes[name], float) for name in ("teff", "logg", "mh")] + [np.array(VMIC_STARTS)]
    chi2 = np.full([x.size for x in axes], np.inf)
    valid = problem.grid.node_valid(problem.treatment)
    for index in np.ndindex(chi2.shape):
        if valid[index[:3]]:
            found = system(problem, np.array([x[i] for x, i in zip(axes, index, strict=True)]), allowed)
            if found is not None:
                chi2[index] = float(found[0] @ found[0])
    starts = [tuple(index) for index in np.argwhere(np.isfinite(chi2)) if _lowest(chi2, tuple(index))]
    best = np.argsort(chi2, axis=None, kind="stable")[:BEST_STARTS]
    starts += [tuple(int(i) for i in np.unravel_index(k, chi2.shape)) for k in best]
    return [np.array([x[i] for x, i in zip(axes, index, strict=True)]) for index in dict.fromkeys(starts)]


def _lowest(chi2: np.ndarray, index: tuple[int, ...]) -> bool:
    box = tuple(slice(max(i - 1, 0), i + 2) for i in index)
    return bool(chi2[index] <= chi2[box].min())


def minimise(problem: Problem, start: np.ndarray, allowed: np.ndarray) -> tuple[np.ndarray, float]:
    """End of scipy's least squares (trust region reflective) from one start, and its chi2."""
    low, high = (bound / STEP_UNIT for bound in problem.bounds)
    known: dict[bytes, tuple] = {}

    def at(x: np.ndarray) -> tuple:
        if x.tobytes() not in known:
            found = system(problem, np.clip(x, low, high) * STEP_UNIT, allowed)
            known[x.tobytes()] = found or (np.full(4, NO_OBJECTIVE), np.zeros((4, 4)))
        return known[x.tobytes()]

    inside = np.clip(start / STEP_UNIT, low + 1e-6, high - 1e-6)
    end = least_squares(lambda x: at(x)[0], inside, lambda x: at(x)[1], bounds=(low, high), xtol=1e-9, max_nfev=60)
    return end.x * STEP_UNIT, 2.0 * float(end.cost)


def both_passes(problem: Problem, start: np.ndarray, preliminary: np.ndarray) -> tuple[np.ndarray, float]:
    """The minimiser with the wide cut on strength, then with the cut fixed where that ended."""
    theta, chi2 = minimise(problem, start, preliminary)
    if chi2 > ROOT:
        return theta, chi2
    state = problem.balance(theta, preliminary)
    there = Minimum(theta, state, chi2, True, np.zeros(4, dtype=bool), 0)
    allowed = predicted_lines(problem, there, preliminary)
    return minimise(problem, theta, allowed if enough_lines(problem, allowed) else preliminary)


def brute_minima(problem: Problem) -> list[np.ndarray]:
    """Every distinct balance that the minimiser finds inside the grid."""
    preliminary = preliminary_lines(problem)
    low, high = problem.bounds
    found: list[np.ndarray] = []
    for start in lattice_starts(problem, preliminary):
        theta, chi2 = both_passes(problem, start, preliminary)
        inside = np.all((theta > low + 1e-3 * STEP_UNIT) & (theta < high - 1e-3 * STEP_UNIT))
        if chi2 < ROOT and inside and not any(same(theta, other) for other in found):
            found.append(theta)
    return found


def same(first: np.ndarray, second: np.ndarray, tolerance: float = SAME) -> bool:
    """Whether two ends are one minimum."""
    return bool(np.max(np.abs(first - second) / STEP_UNIT) < tolerance)


def comparable(problem: Problem, theta: np.ndarray, best: np.ndarray) -> bool:
    """Whether a place is near-equal to the best candidate, on the lines that have an abundance at both."""
    allowed = preliminary_lines(problem)
    for place in (theta, best):
        allowed = allowed & np.isfinite(problem.line_abundances(place)[0])
    gap = problem.log_likelihood(best, allowed) - problem.log_likelihood(theta, allowed)
    return bool(2.0 * gap < NEAR_EQUAL)
