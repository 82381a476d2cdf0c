"""Rates of collisions with electrons and hydrogen atoms.

Ionization by hydrogen is only the computed charge transfer: the classical formula would tie every high level to the ion, for
which there is no evidence.

All rates are symmetric flows W_ij = n_i* C_ij = n_j* C_ji [cm^-3 s^-1], n* the LTE populations: detailed balance is built in.
"""

from __future__ import annotations

import numpy as np

from specsolve.constants import (
    ATOMIC_MASS_G,
    BOHR_RADIUS_CM,
    BOLTZMANN_ERG_K,
    BOLTZMANN_EV_K,
    ELECTRON_CHARGE_ESU,
    ELECTRON_MASS_G,
    LIGHT_SPEED_CM_S,
    PROTON_MASS_G,
    RYDBERG_EV,
)
from specsolve.matter.equation_of_state import Gas
from specsolve.nlte.atom import ALLOWED, ModelAtom
from specsolve.nlte.recipe import Recipe

#: pi a0^2 sqrt(8 k / (pi m_e)) [cm^3 s^-1 K^-1/2], 5.465e-11.
ELECTRON_RATE = np.pi * BOHR_RADIUS_CM**2 * np.sqrt(8.0 * BOLTZMANN_ERG_K / (np.pi * ELECTRON_MASS_G))
#: Rate coefficient per unit collision strength [cm^3 s^-1 K^1/2], 8.629e-6: pi a0^2 sqrt(8 k/pi m) I_H / k.
STRENGTH_RATE = ELECTRON_RATE * RYDBERG_EV / BOLTZMANN_EV_K
#: Factor of van Regemorter (1962, ApJ 136, 906): 8 pi / sqrt(3).
REGEMORTER = 8.0 * np.pi / np.sqrt(3.0)
#: Effective Gaunt factor: 0.276 exp(u) E1(u), for ions at least 0.2 (van Regemorter 1962; as in Mihalas 1978, Stellar
#: Atmospheres, sec. 5-4).
GAUNT_SLOPE, GAUNT_ION = 0.276, 0.2
#: Collision strength of forbidden transitions between single terms (common practice, no source).
FORBIDDEN_STRENGTH = 1.0
#: Seaton's ionization rate 1.55e13 g sigma0 exp(-u) / (u sqrt(T)), g = 0.1 neutral, 0.2 once ionized; Mihalas 1978,
#: Stellar Atmospheres, eq. 5-79.
SEATON, SEATON_GAUNT = 1.55e13, (0.1, 0.2, 0.3)
#: Integrated cross-section per oscillator strength [cm^2 Hz].
LINE_CROSS_SECTION = np.pi * ELECTRON_CHARGE_ESU**2 / (ELECTRON_MASS_G * LIGHT_SPEED_CM_S)
#: Smallest energy difference [eV] in the expressions that diverge as it vanishes.
LEAST_DIFFERENCE_EV = 0.01


def regemorter_gaunt(u: np.ndarray, ion: np.ndarray) -> np.ndarray:
    """Effective Gaunt factor at u = dE / kT."""
    from scipy.special import exp1

    gaunt = GAUNT_SLOPE * np.where(u < 50.0, np.exp(np.minimum(u, 50.0)) * exp1(np.minimum(u, 50.0)), 1.0 / u)
    return np.where(ion, np.maximum(gaunt, GAUNT_ION), gaunt)


def electron_excitation(temperature, difference_ev, f, ion) -> np.ndarray:
    """Upward rate coefficient of allowed transitions [cm^3 s^-1] (van Regemorter 1962).

    Parameters
    ----------
    temperature : ndarray, shape (n,)
        [K]
    difference_ev, f, ion : ndarray, shape (m,)
        Energy difference [eV], absorption oscillator strength, whether the atom is charged.

    Returns
    -------
    ndarray, shape (m, n)
    """
    difference = np.maximum(difference_ev, LEAST_DIFFERENCE_EV)[:, None]
    u = difference / (BOLTZMANN_EV_K * temperature)
    gaunt = regemorter_gaunt(u, ion[:, None])
    strength = REGEMORTER * f[:, None] * (RYDBERG_EV / difference) ** 2
    return (
        ELECTRON_RATE * np.sqrt(temperature) * strength * u * gaunt * np.exp(-difference_ev[:, None] * u / difference)
    )


def electron_forbidden(temperature, difference_ev, lower_weight, strength) -> np.ndarray:
    """Upward rate coefficient of a transition of given collision strength [cm^3 s^-1], shape (m, n)."""
    u = difference_ev[:, None] / (BOLTZMANN_EV_K * temperature)
    return STRENGTH_RATE * (strength / lower_weight)[:, None] / np.sqrt(temperature) * np.exp(-u)


def electron_ionization(temperature, threshold_ev, sigma, stage) -> np.ndarray:
    """Rate coefficient of ionization by electrons [cm^3 s^-1], shape (m, n) (Seaton; see `SEATON`)."""
    u = threshold_ev[:, None] / (BOLTZMANN_EV_K * temperature)
    gaunt = np.array(SEATON_GAUNT)[stage]
    return SEATON * (gaunt * sigma)[:, None] * np.exp(-u) / (u * np.sqrt(temperature))


def hydrogen_allowed(temperature, difference_ev, f, mass) -> np.ndarray:
    """Upward rate coefficient of allowed transitions by hydrogen atoms [cm^3 s^-1], shape (m, n).

    Notes
    -----
    Drawin (1969, Z. Phys. 225, 483) as given by Steenbock & Holweger (1984, A&A 130, 319), from memory:
    16 pi a0^2 (I_H/dE)^2 f (M/m_H) m_e/(m_H + m_e) sqrt(2kT / (pi mu)) exp(-w) (1 + 2/w), w = dE/kT.
    """
    difference = np.maximum(difference_ev, LEAST_DIFFERENCE_EV)[:, None]
    kt = BOLTZMANN_EV_K * temperature
    reduced = mass * ATOMIC_MASS_G * PROTON_MASS_G / (mass * ATOMIC_MASS_G + PROTON_MASS_G)
    speed = np.sqrt(2.0 * BOLTZMANN_ERG_K * temperature / (np.pi * reduced))
    masses = mass * ATOMIC_MASS_G / PROTON_MASS_G * ELECTRON_MASS_G / (PROTON_MASS_G + ELECTRON_MASS_G)
    area = 16.0 * np.pi * BOHR_RADIUS_CM**2 * (RYDBERG_EV / difference) ** 2 * f[:, None] * masses
    return area * speed * np.exp(-difference_ev[:, None] / kt) * (1.0 + 2.0 * kt / difference)


def hydrogen_forbidden(electron_rate: np.ndarray) -> np.ndarray:
    """Forbidden transitions by hydrogen: the electron rate times sqrt(m_e / m_H) (Takeda 1995, PASJ 47, 463)."""
    return electron_rate * np.sqrt(ELECTRON_MASS_G / PROTON_MASS_G)


def collision_flows(atom: ModelAtom, gas: Gas, lte: np.ndarray, recipe: Recipe) -> np.ndarray:
    """Flows W_ij of all collisions.

    Parameters
    ----------
    atom : ModelAtom
    gas : Gas
        n points.
    lte : ndarray, shape (n_levels, n)
        LTE populations [cm^-3].
    recipe : Recipe

    Returns
    -------
    ndarray, shape (n, n_levels, n_levels)
        Symmetric, zero diagonal [cm^-3 s^-1].
    """
    temperature, n_levels = gas.temperature, atom.n_levels
    electrons = gas.electron_density * recipe.electron_factor
    flows = np.zeros((temperature.size, n_levels, n_levels))

    low, up, f = _pairs(atom)
    difference = atom.energy_ev[up] - atom.energy_ev[low]
    stage = atom.stage[low]
    allowed = f > 0.0
    forbidden_rate = electron_forbidden(
        temperature, difference, atom.weight[low], FORBIDDEN_STRENGTH * atom.members[low] * atom.members[up]
    )
    rate = forbidden_rate.copy()
    rate[allowed] = electron_excitation(temperature, difference[allowed], f[allowed], stage[allowed] > 0)
    by_hydrogen = hydrogen_forbidden(forbidden_rate)
    by_hydrogen[allowed] = hydrogen_allowed(temperature, difference[allowed], f[allowed], atom.mass)
    by_hydrogen *= np.where(stage == 0, recipe.hydrogen_factor, recipe.ion_hydrogen_factor)[:, None]
    by_hydrogen[_computed_pairs(atom, low, up)] = 0.0
    total = rate * electrons + by_hydrogen * (gas.h1 * recipe.hydrogen_scale)
    _add(flows, low, up, total * lte[low])

    level, target = atom.continuum_level, atom.continuum_target
    if level.size:
        threshold = np.maximum(atom.energy_ev[target] - atom.energy_ev[level], LEAST_DIFFERENCE_EV)
        sigma = atom.continuum_sigma
        rate = electron_ionization(temperature, threshold, sigma, atom.stage[level]) * electrons
        _add(flows, level, target, rate * lte[level])

    if atom.hydrogen_upper.size:
        down = _interpolated(atom.hydrogen_temperature, atom.hydrogen_log_rate, temperature)
        _add(
            flows,
            atom.hydrogen_lower,
            atom.hydrogen_upper,
            down * (gas.h1 * recipe.hydrogen_scale) * lte[atom.hydrogen_upper],
        )
    if atom.exchange_level.size:
        neutral = _interpolated(atom.hydrogen_temperature, atom.exchange_log_rate, temperature)
        flow = neutral * (gas.h_minus * recipe.hydrogen_scale) * lte[atom.exchange_ion]
        _add(flows, atom.exchange_level, atom.exchange_ion, flow)
    return flows


def _add(flows: np.ndarray, low: np.ndarray, up: np.ndarray, values: np.ndarray) -> None:
    """Add values (m, n) at (low, up) and (up, low); a pair may occur more than once."""
    n = flows.shape[1]
    flat = flows.reshape(flows.shape[0], -1)
    places = low * n + up
    unique, inverse = np.unique(places, return_inverse=True)
    if unique.size == places.size:
        flat[:, places] += values.T
        flat[:, up * n + low] += values.T
        return
    summed = np.zeros((unique.size, values.shape[1]))
    np.add.at(summed, inverse, values)
    flat[:, unique] += summed.T
    flat[:, (unique % n) * n + unique // n] += summed.T


def _pairs(atom: ModelAtom) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """All pairs of levels of one stage, lower first, and their summed oscillator strength (0: forbidden)."""
    order = np.argsort(atom.energy_ev, kind="stable")
    first, second = np.triu_indices(atom.n_levels, 1)
    low, up = order[first], order[second]
    same = atom.stage[low] == atom.stage[up]
    low, up = low[same], up[same]
    strengths = np.zeros((atom.n_levels, atom.n_levels))
    permitted = atom.line_kind == ALLOWED
    np.add.at(strengths, (atom.line_lower[permitted], atom.line_upper[permitted]), atom.line_f[permitted])
    return low, up, strengths[low, up]


def _computed_pairs(atom: ModelAtom, low: np.ndarray, up: np.ndarray) -> np.ndarray:
    known = np.zeros((atom.n_levels, atom.n_levels), dtype=bool)
    known[atom.hydrogen_lower, atom.hydrogen_upper] = True
    return known[low, up] | known[up, low]


def _interpolated(axis: np.ndarray, log_rate: np.ndarray, temperature: np.ndarray) -> np.ndarray:
    """Rates (m, n) linear in log T; beyond the axis (cool tops, hot bottoms) the end value is kept.

    The tables span 2000 to 10 000 K or more; above, the gas is deep and everything is thermal.
    """
    place = np.clip(np.interp(np.log(temperature), np.log(axis), np.arange(axis.size)), 0.0, axis.size - 1.0)
    left = np.minimum(place.astype(int), axis.size - 2)
    share = place - left
    return 10.0 ** (log_rate[:, left] * (1.0 - share) + log_rate[:, left + 1] * share)
