"""The structure of an atmosphere: temperature against column mass by full Newton iteration.

`energy` writes down the equations; here they are solved for ln T at fixed column mass, the gas pressure g m minus the
gain in radiation pressure being renewed in every iteration, and the depth points moved until they lie on the standard
scale of optical depth.
"""

from __future__ import annotations

import numpy as np

from specsolve.atmosphere.blanketing import Blanketing
from specsolve.atmosphere.energy import Balance, energy_balance
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.start import STANDARD_LOG_TAU, move_to_standard_depths, starting_structure
from specsolve.matter.composition import Composition

MAX_STEP = 0.08  # in ln T
MIN_STEP = 0.003  # in ln T; where steps swing to and fro their limit is halved, down to here
# The gas pressure follows the radiative acceleration; where that is a large part of gravity all of the change swings.
GENTLE_PUSH = 0.05  # of gravity
GENTLE_SHARE, STRONG_SHARE = 0.65, 0.3  # of the change of ln P that one iteration takes
SETTLED_FLUX = 0.2  # flux error below which a strong push is followed
SETTLED_PRESSURE = 0.02  # change of ln P below which a limit that is passed counts
FLUX_TOLERANCE = 1e-5
ROUGH_TOLERANCE = 3e-3  # flux error at which depth points may be moved; more if they are far off
MAX_MOVES = 15
DEPTH_TOLERANCE = 0.01  # in log tau
MAX_ITERATIONS = 160
HOPELESS_ITERATIONS = 60  # by then the flux of a structure that will converge is right within a factor 2
MAX_RADIATIVE_SHARE = 0.9  # radiative acceleration over gravity; beyond it a static layer does not exist
RADIATION_LIMIT = "radiation pressure exceeds 0.9 of gravity"


def opacity_vmic(logg: float) -> float:
    """Microturbulence of the line blanketing [km/s]: near 1 in dwarfs, 2 in giants (common practice, no source)."""
    return 1.0 + 1.0 / (1.0 + np.exp((logg - 3.25) / 0.5))


class StructureError(Exception):
    """The iteration did not reach a structure; `reason` says why."""

    def __init__(self, reason: str) -> None:
        super().__init__(reason)
        self.reason = reason


def gas_pressure(column_mass: np.ndarray, gravity: float, push: np.ndarray) -> np.ndarray:
    """Gas pressure (n,) [dyn / cm2] in hydrostatic equilibrium with the radiative acceleration `push` (n,) [cm / s2]."""
    net = gravity - push
    steps = 0.5 * (net[1:] + net[:-1]) * np.diff(column_mass)
    return net[0] * column_mass[0] + np.concatenate([[0.0], np.cumsum(steps)])


def solve_structure(
    teff: float,
    logg: float,
    composition: Composition,
    blanketing: Blanketing,
    *,
    start: Atmosphere | None = None,
    power: float = 1.0,
    vmic: float | None = None,
    max_iterations: int = MAX_ITERATIONS,
) -> Atmosphere:
    """Converge one atmosphere.

    Parameters
    ----------
    teff, logg : float
        [K], [dex cgs].
    composition : Composition
        Abundances of the atmosphere.
    blanketing : Blanketing
        Line opacity table of the same composition.
    start : Atmosphere, optional
        A neighbour, scaled by Teff; without it a grey structure is the start.
    power : float
        Exponent of the missing-opacity multiplier (0 raw, 1 default, 2 twice its logarithm).
    vmic : float, optional
        Microturbulence of the line blanketing [km/s]; default `opacity_vmic(logg)`.
    max_iterations : int

    Returns
    -------
    Atmosphere
        With `status` "converged" (flux error <= 1e-5 at all depths, points on the standard optical depths within
        0.01 dex) or "failed" and the reason; never an exception for a star that cannot be modelled.
    """
    gravity = 10.0**logg
    vmic = opacity_vmic(logg) if vmic is None else vmic
    column_mass, temperature = starting_structure(teff, gravity, composition, start)
    log_t = np.log(temperature)
    common = {"teff": teff, "logg": logg, "mh": composition.mh, "alpha": composition.alpha, "vmic": vmic}
    push = np.zeros_like(column_mass)
    balance: Balance | None = None
    pressure = gas_pressure(column_mass, gravity, push)
    reason = f"not converged after {max_iterations} iterations"
    converged = False
    moves = 0
    beyond = 0.0  # share of the last ten or so trial structures beyond the radiation-pressure limit
    limit = np.full_like(log_t, MAX_STEP)
    last_step = np.zeros_like(log_t)
    try:
        for count in range(max_iterations):
            field = None if balance is None else balance.field
            balance = energy_balance(
                log_t, pressure, column_mass, teff, gravity, composition, blanketing, vmic, power, field
            )
            if not np.all(np.isfinite(balance.residual)):
                raise StructureError("the energy balance is not finite")
            if count >= HOPELESS_ITERATIONS and balance.flux_error > 1.0:
                raise StructureError(f"flux wrong by a factor {1.0 + balance.flux_error:.1f} after {count} iterations")
            beyond = 0.9 * beyond + 0.1 * float(np.max(balance.radiative_acceleration) > MAX_RADIATIVE_SHARE * gravity)
            new_push = np.minimum(balance.radiative_acceleration, MAX_RADIATIVE_SHARE * gravity)
            new_pressure = gas_pressure(column_mass, gravity, new_push)
            pressure_change = np.max(np.abs(np.log(new_pressure / pressure)))
            if (
                np.max(balance.radiative_acceleration) > MAX_RADIATIVE_SHARE * gravity
                and balance.flux_error < SETTLED_FLUX
                and pressure_change < SETTLED_PRESSURE
            ):
                raise StructureError(RADIATION_LIMIT)
            misplaced = np.max(np.abs(balance.log_tau - STANDARD_LOG_TAU))
            if balance.flux_error < FLUX_TOLERANCE and pressure_change < 1e-5 and misplaced < DEPTH_TOLERANCE:
                converged = True
                break
            rough = max(ROUGH_TOLERANCE, 0.3 * misplaced)
            if balance.flux_error < rough and misplaced > 0.5 * DEPTH_TOLERANCE and moves < MAX_MOVES:
                column_mass, log_t, push = move_to_standard_depths(column_mass, log_t, new_push, balance)
                pressure = gas_pressure(column_mass, gravity, push)
                moves += 1
                last_step = np.zeros_like(log_t)
                continue
            step = np.linalg.solve(balance.jacobian, -balance.residual)
            largest = np.max(np.abs(step))
            swings = (step * last_step < 0.0) & (np.abs(step) > 0.5 * limit)
            limit = np.where(swings, np.maximum(0.5 * limit, MIN_STEP), np.minimum(1.3 * limit, MAX_STEP))
            last_step = np.clip(step, -limit, limit)
            log_t = log_t + last_step
            gentle = np.max(new_push) < GENTLE_PUSH * gravity
            if largest < 0.3 if gentle else balance.flux_error < SETTLED_FLUX:
                share = GENTLE_SHARE if gentle else STRONG_SHARE
                pressure = pressure ** (1.0 - share) * new_pressure**share
    except StructureError as problem:
        reason = problem.reason
    except (ValueError, np.linalg.LinAlgError) as problem:  # a trial temperature outside the physics tables
        reason = f"the iteration left the tabulated range: {problem}"
    if not converged and beyond > 0.5 and reason != RADIATION_LIMIT:
        reason = f"{RADIATION_LIMIT} in most trial structures; {reason}"
    if converged and balance.log_tau[-1] < 1.5:
        converged, reason = False, "the lowest depth point is too shallow"
    flux_error = np.nan if balance is None else balance.flux_error
    log_tau = np.full_like(column_mass, np.nan) if balance is None else balance.log_tau
    electrons = np.full_like(column_mass, np.nan) if balance is None else balance.layers.gas.electron_density
    return Atmosphere(
        **common, column_mass=column_mass, temperature=np.exp(log_t), gas_pressure=pressure,
        electron_density=electrons, log_tau=log_tau, flux_error=float(flux_error),
        status="converged" if converged else "failed", reason="" if converged else reason,
    )  # fmt: skip
