"""Starting structures, and moving depth points to the standard optical depths."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.interpolate import PchipInterpolator

from specsolve.matter.composition import Composition
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium

if TYPE_CHECKING:
    from specsolve.atmosphere.energy import Balance
    from specsolve.atmosphere.model import Atmosphere

#: log10 of optical depth at 5000 A: 0.16 apart near the surface, 0.09 where the continuum forms.
STANDARD_LOG_TAU = np.concatenate([np.linspace(-6.0, -2.0, 25, endpoint=False), np.linspace(-2.0, 1.6, 41)])
MAX_STARTING_GRADIENT = 0.25  # d ln T / d ln P of the deep starting structure, somewhat above the adiabatic one
MAX_PASSES = 60
MAX_SHIFT = 0.4  # dex of optical depth by which one move may continue a structure beyond its ends
_REFERENCE = np.array([5e-5])


def grey_temperature(teff: float, tau: np.ndarray) -> np.ndarray:
    """Krishna Swamy (1966, ApJ 145, 174): T^4 = 3/4 Teff^4 (tau + q(tau)); `tau` (n,), returns (n,) [K]."""
    q = 1.39 - 0.815 * np.exp(-2.54 * tau) - 0.025 * np.exp(-30.0 * tau)
    return teff * (0.75 * (tau + q)) ** 0.25


def starting_structure(
    teff: float, gravity: float, composition: Composition, neighbour: Atmosphere | None
) -> tuple[np.ndarray, np.ndarray]:
    """First guess of a structure on the standard optical depths.

    Parameters
    ----------
    teff, gravity : float
        [K], [cm / s2].
    composition : Composition
    neighbour : Atmosphere or None
        Its temperatures are scaled by the ratio of effective temperatures; without it a grey law is used, with the
        gradient limited in the deep layers.

    Returns
    -------
    column_mass, temperature : ndarray, shape (n,)
        [g / cm2], [K]; the column mass integrates d m = d tau / opacity with the continuum opacity at 5000 A.
    """
    tau = 10.0**STANDARD_LOG_TAU
    if neighbour is None:
        temperature = grey_temperature(teff, tau)
    else:
        scaled = PchipInterpolator(neighbour.log_tau, neighbour.temperature, extrapolate=True)
        temperature = scaled(STANDARD_LOG_TAU) * teff / neighbour.teff

    mass = gravity**-0.6 * np.sqrt(tau) * 1e3 if neighbour is None else _mass_of(neighbour)
    for _ in range(MAX_PASSES):
        limited = temperature if neighbour is not None else _limit_gradient(temperature, tau, mass)
        gas = equilibrium(limited, gravity * mass, composition)
        absorption, scattering = continuum_opacity(_REFERENCE, gas)
        inverse = 1.0 / (absorption[0] + scattering[0])
        steps = 0.5 * (inverse[1:] + inverse[:-1]) * np.diff(tau)
        new = 2.0 * tau[0] * inverse[0] + np.concatenate([[0.0], np.cumsum(steps)])  # opacity ~ pressure above the top
        change = np.max(np.abs(np.log(new / mass)))
        mass = np.sqrt(mass * new)  # opacity grows about linearly with pressure: the geometric mean converges fast
        if change < 1e-3:
            break
    return mass, limited


def _mass_of(neighbour: Atmosphere) -> np.ndarray:
    return np.exp(
        PchipInterpolator(neighbour.log_tau, np.log(neighbour.column_mass), extrapolate=True)(STANDARD_LOG_TAU)
    )


def _limit_gradient(temperature: np.ndarray, tau: np.ndarray, mass: np.ndarray) -> np.ndarray:
    """Temperatures (n,) that below tau = 1 rise with pressure no faster than `MAX_STARTING_GRADIENT`."""
    limited = temperature.copy()
    for d in range(1, len(tau)):
        if tau[d] > 1.0:
            limited[d] = min(temperature[d], limited[d - 1] * (mass[d] / mass[d - 1]) ** MAX_STARTING_GRADIENT)
    return limited


def move_to_standard_depths(
    column_mass: np.ndarray, log_t: np.ndarray, push: np.ndarray, balance: Balance
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Interpolate a nearly converged structure to the standard optical depths.

    Parameters
    ----------
    column_mass, log_t, push : ndarray, shape (n,)
        [g / cm2], ln T, radiative acceleration [cm / s2].
    balance : Balance
        Of the same structure; gives its optical depths.

    Returns
    -------
    column_mass, log_t, push : ndarray, shape (n,)
        On the standard depths. Beyond the old ends ln m and ln T continue linearly in log tau by the small amount that
        the ends have moved (at most `MAX_SHIFT` a call; the structure is converged again afterwards).
    """
    x = balance.log_tau
    low = min(max(STANDARD_LOG_TAU[0], x[0] - MAX_SHIFT), x[-1] - 1.0)
    high = max(min(STANDARD_LOG_TAU[-1], x[-1] + MAX_SHIFT), low + 1.0)
    share = (STANDARD_LOG_TAU - STANDARD_LOG_TAU[0]) / np.ptp(STANDARD_LOG_TAU)
    target = low + share * (high - low)
    inner = np.clip(target, x[0], x[-1])
    moved = []
    for values in (np.log(column_mass), log_t, push):
        smooth = PchipInterpolator(x, values)(inner)
        first = (values[1] - values[0]) / (x[1] - x[0])
        last = (values[-1] - values[-2]) / (x[-1] - x[-2])
        moved.append(smooth + first * np.minimum(target - x[0], 0.0) + last * np.maximum(target - x[-1], 0.0))
    return np.exp(moved[0]), moved[1], moved[2]
