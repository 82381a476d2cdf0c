"""The objective over temperature and gravity, the other parameters fitted at every point.

One look at it shows whether an answer is unique: at each point of a lattice in (teff, logg) the metallicity and
the microturbulence take the values that make ``r^T C^-1 r`` plus the Outside terms smallest, with the lines of the
reported candidate. The residuals that stay there are kept too: along the curve where the excitation slope is zero the
lines agree on a temperature, along the one where the ionization offset is zero on a gravity, and every solution lies
where both cross.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.errors import OutOfGridError

from .minima import FoundMinimum
from .newton import STEP_UNIT, whitened_system
from .problem import Problem
from .residuals import EXCITATION, IONIZATION
from .solution import Candidate
from .state import BalanceState

POINTS = (21, 19)  # of the lattice in teff and logg
ERRORS_SHOWN = 4.0  # how far the map reaches beyond each candidate, in its errors
LEAST_REACH = (250.0, 0.4)  # K, dex
MOST_REACH = (1000.0, 1.5)
MAX_STEPS = 8
TOLERANCE = 2e-3  # in STEP_UNIT
ENOUGH = 0.02  # a smaller gain in the objective is not worth another evaluation: it cannot be seen in the map
DAMPING = 1e-6
HALVINGS = 4
MIN_SPREAD = 1e-9


@dataclass(frozen=True, eq=False)
class ObjectiveMap:
    """Lattice over temperature and gravity.

    Attributes
    ----------
    teff, logg : ndarray, shape (n_teff,), (n_logg,)
        [K], [dex].
    objective : ndarray, shape (n_teff, n_logg)
        Smallest over metallicity and microturbulence; nan where the grid has no value.
    feh, vmic : ndarray, shape (n_teff, n_logg)
        Where it is smallest.
    excitation_slope, ionization_offset : ndarray, shape (n_teff, n_logg)
        Residuals there [dex/eV], [dex]; nan where these lines do not form them.
    """

    teff: np.ndarray
    logg: np.ndarray
    objective: np.ndarray
    feh: np.ndarray
    vmic: np.ndarray
    excitation_slope: np.ndarray
    ionization_offset: np.ndarray


def objective_map(
    problem: Problem,
    item: FoundMinimum,
    candidates: tuple[Candidate, ...],
    points: tuple[int, int] = POINTS,
) -> ObjectiveMap:
    """The map of one star: about 400 points of a few evaluations each, with the compiled kernels in a second or two.

    Parameters
    ----------
    problem : Problem
    item : FoundMinimum
        The reported candidate: its lines are those of the map.
    candidates : tuple of Candidate
        The map reaches around all of them that are not set aside.
    points : (int, int)
    """
    problem = problem.replace(compiled=True)
    axes = _axes(problem, candidates, points)
    shape = (axes[0].size, axes[1].size)
    inner = [place for place in (2, 3) if place in problem.free]
    out = {
        name: np.full(shape, np.nan) for name in ("objective", "feh", "vmic", "excitation_slope", "ionization_offset")
    }
    centre = item.minimum.theta
    start = np.array([int(np.argmin(np.abs(axes[k] - centre[k]))) for k in range(2)])
    states: dict[tuple[int, int], BalanceState] = {}
    order = sorted(np.ndindex(shape), key=lambda ij: (max(abs(ij[0] - start[0]), abs(ij[1] - start[1])), ij))
    for i, j in order:
        near = [(i + a, j + b) for a in (-1, 0, 1) for b in (-1, 0, 1) if (i + a, j + b) in states]
        theta = (states[near[0]].theta if near else centre).copy()
        theta[:2] = axes[0][i], axes[1][j]
        found = _profiled(problem, theta, item.allowed, inner, states[near[0]] if near else item.minimum.state)
        if found is None:
            continue
        state, value = found
        states[(i, j)] = state
        out["objective"][i, j] = value
        out["feh"][i, j], out["vmic"][i, j] = state.theta[2:]
        out["excitation_slope"][i, j] = state.residuals[EXCITATION]
        out["ionization_offset"][i, j] = state.residuals[IONIZATION]
    return ObjectiveMap(teff=axes[0], logg=axes[1], **out)


def _axes(problem: Problem, candidates: tuple[Candidate, ...], points: tuple[int, int]) -> list[np.ndarray]:
    low, high = problem.bounds
    chosen = [c for c in candidates if not c.set_aside] or list(candidates[:1])
    axes = []
    for k in range(2):
        ends = []
        for one in chosen:
            sigma = float(np.sqrt(one.covariance[k, k])) if one.covariance[k, k] > 0.0 else 0.0
            reach = np.clip(ERRORS_SHOWN * sigma, LEAST_REACH[k], MOST_REACH[k])
            ends += [one.parameters[k] - reach, one.parameters[k] + reach]
        axes.append(np.linspace(max(min(ends), low[k]), min(max(ends), high[k]), points[k]))
    return axes


def _profiled(
    problem: Problem, theta: np.ndarray, allowed: np.ndarray, inner: list[int], previous: BalanceState
) -> tuple[BalanceState, float] | None:
    """Gauss-Newton over the inner parameters alone, all residuals kept."""
    low, high = problem.bounds
    state = _balance(problem, theta, allowed, previous)
    if state is None:
        return None
    z, jacobian = whitened_system(problem, state)  # _balance has found the covariance positive
    for _ in range(MAX_STEPS if inner else 0):
        scaled = jacobian[:, inner] * STEP_UNIT[inner]
        normal = scaled.T @ scaled
        normal += np.eye(len(inner)) * max(DAMPING * float(np.trace(normal)), MIN_SPREAD)
        full = np.linalg.solve(normal, -scaled.T @ z)
        if -float(full @ (scaled.T @ z)) < ENOUGH:
            break
        step = np.clip(full, -1.0, 1.0)
        for _ in range(HALVINGS):
            trial = state.theta.copy()
            trial[inner] = np.clip(trial[inner] + step * STEP_UNIT[inner], low[inner], high[inner])
            new = _balance(problem, trial, allowed, state)
            if new is not None:
                z_new, jacobian_new = whitened_system(problem, new)
                if z_new.size == z.size and z_new @ z_new <= z @ z + TOLERANCE:
                    break
            new, step = None, 0.5 * step
        if new is None:
            break
        state, z, jacobian = new, z_new, jacobian_new
        if np.max(np.abs(step)) < TOLERANCE:
            break
    return state, float(z @ z)


def _balance(problem: Problem, theta: np.ndarray, allowed: np.ndarray, previous: BalanceState) -> BalanceState | None:
    try:
        state = problem.balance(theta, allowed, previous)
        needed = problem.active & np.isfinite(previous.residuals)
        if not (state.used.any() and np.isfinite(state.residuals[needed]).all()):
            return None
        np.linalg.cholesky(state.covariance[np.ix_(needed, needed)])
        return state
    except (OutOfGridError, np.linalg.LinAlgError):
        return None
