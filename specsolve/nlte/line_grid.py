"""Frequencies and profiles of the lines of the model atom."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit

from specsolve.atmosphere.blanketing_sampling import (
    HJERTING_TABLE,
    HYDROGEN_FACTORS,
    LEAST_BINDING_EV,
    STARK_FACTOR,
    UNSOELD_C6,
    UNSOELD_FACTOR,
    hjerting,
)
from specsolve.constants import (
    ATOMIC_MASS_G,
    BOLTZMANN_ERG_K,
    PROTON_MASS_G,
    RYDBERG_EV,
)
from specsolve.matter.equation_of_state import Gas
from specsolve.nlte.atom import ModelAtom

N_FREQUENCIES = 7  # on half of a symmetric profile
FIRST_STEP = 0.5  # Doppler widths between the first two
CORE_LEFT, WING_LEFT = 0.05, 0.1  # line over continuum opacity at the last frequency: core, damping wing
NARROWEST, WIDEST = 3.0, 300.0  # Doppler widths
HELIUM_RELATIVE = 0.41  # broadening by a helium atom against a hydrogen atom, see `blanketing_sampling`


@dataclass(frozen=True, kw_only=True)
class LineGrid:
    """Profiles of m lines at n depths and q frequencies.

    Attributes
    ----------
    profile : ndarray, shape (m, n, q)
        phi [Hz^-1].
    quadrature : ndarray, shape (m, n, q)
        Weight times phi, of both halves of the profile; the sum over q is 1.
    """

    profile: np.ndarray
    quadrature: np.ndarray


def damping(atom: ModelAtom, gas: Gas, lines: np.ndarray) -> np.ndarray:
    """Full damping width of lines [rad/s], shape (m, n): radiative, hydrogen (Unsoeld with a factor), Stark."""
    low, up = atom.line_lower[lines], atom.line_upper[lines]
    charge = atom.stage[low] + 1.0
    bound_up = np.maximum(atom.limit_ev[up] - atom.energy_ev[up], LEAST_BINDING_EV)
    bound_low = np.maximum(atom.limit_ev[low] - atom.energy_ev[low], bound_up + 1e-3)
    c6 = UNSOELD_C6 * charge**2 * (bound_up**-2 - bound_low**-2)
    mass = atom.mass * ATOMIC_MASS_G
    speed = np.sqrt(8.0 * BOLTZMANN_ERG_K / np.pi * (1.0 / mass + 1.0 / PROTON_MASS_G))
    factor = np.where(charge > 1.0, HYDROGEN_FACTORS["Fe II"], HYDROGEN_FACTORS["Fe I"])
    hydrogen = factor * UNSOELD_FACTOR * c6**0.4 * speed**0.6
    stark = STARK_FACTOR * (charge * np.sqrt(RYDBERG_EV / bound_up)) ** 5
    perturbers = (gas.h1 + HELIUM_RELATIVE * gas.helium) * gas.temperature**0.3
    return atom.line_gamma_rad[lines][:, None] + hydrogen[:, None] * perturbers + stark[:, None] * gas.electron_density


def doppler_width(atom: ModelAtom, temperature: np.ndarray, vmic: float) -> np.ndarray:
    """Most probable velocity [cm/s] of thermal motion and microturbulence [km/s]."""
    return np.sqrt(2.0 * BOLTZMANN_ERG_K * temperature / (atom.mass * ATOMIC_MASS_G) + (vmic * 1e5) ** 2)


def line_grid(atom: ModelAtom, gas: Gas, vmic: float, lines: np.ndarray, ratio: np.ndarray, reference: int) -> LineGrid:
    """Frequencies of each line, and its profile.

    Parameters
    ----------
    atom : ModelAtom
    gas : Gas
        n points.
    vmic : float
        [km/s]
    lines : ndarray of int, shape (m,)
    ratio : ndarray, shape (m,)
        Largest ratio of line (times Doppler width in Hz, per unit profile) to continuous opacity: sets the range.
    reference : int
        Depth whose Doppler width is the unit of the frequencies.
    """
    velocity = doppler_width(atom, gas.temperature, vmic)
    gamma = damping(atom, gas, lines)
    wavelength = atom.line_wavelength_cm[lines]
    a = gamma * wavelength[:, None] / (4.0 * np.pi * velocity)
    central = ratio / np.sqrt(np.pi)
    core = np.sqrt(np.log(np.maximum(central / CORE_LEFT, 1.0)))
    wing = np.sqrt(a[:, reference] * central / np.sqrt(np.pi) / WING_LEFT)
    end = np.clip(np.maximum(core, wing), NARROWEST, WIDEST)
    position = sinh_points(end)
    profile, quadrature = _profiles(position, a, velocity / velocity[reference], wavelength, velocity, HJERTING_TABLE)
    return LineGrid(profile=profile, quadrature=quadrature)


def sinh_points(end: np.ndarray) -> np.ndarray:
    """Points from 0 to `end`, spaced as a hyperbolic sine with a first step of `FIRST_STEP`; shape (m, q)."""
    low, high = np.full(end.size, 1e-3), np.full(end.size, 30.0)
    for _ in range(50):
        middle = 0.5 * (low + high)
        step = end * np.sinh(middle / (N_FREQUENCIES - 1)) / np.sinh(middle)
        low, high = np.where(step > FIRST_STEP, middle, low), np.where(step > FIRST_STEP, high, middle)
    s = np.arange(N_FREQUENCIES) / (N_FREQUENCIES - 1)
    return end[:, None] * np.sinh(middle[:, None] * s) / np.sinh(middle)[:, None]


@njit(cache=True, nogil=True, error_model="numpy")
def _profiles(position, a, relative, wavelength, velocity, table):
    m, n = a.shape
    q = position.shape[1]
    profile = np.empty((m, n, q))
    quadrature = np.empty((m, n, q))
    for k in range(m):
        for d in range(n):
            total = 0.0
            per_hertz = wavelength[k] / (np.sqrt(np.pi) * velocity[d])
            for j in range(q):
                h = hjerting(a[k, d], position[k, j] / relative[d], table)
                left = position[k, j] - position[k, j - 1] if j > 0 else 0.0
                right = position[k, j + 1] - position[k, j] if j < q - 1 else 0.0
                profile[k, d, j] = h * per_hertz
                quadrature[k, d, j] = h * 0.5 * (left + right)
                total += quadrature[k, d, j]
            for j in range(q):
                quadrature[k, d, j] /= total
    return profile, quadrature
