"""Thermodynamic derivatives of the gas, from the enthalpy of the equation of state.

Ionization, dissociation of H2 and H2+, attachment of electrons to H and the excitation of all levels are in the
enthalpy; radiation pressure and radiation energy are not, as the gas pressure of an atmosphere is without them.
"""

from __future__ import annotations

from functools import cache
from typing import NamedTuple

import numpy as np

from specsolve.constants import BOLTZMANN_ERG_K, EV_ERG
from specsolve.matter.composition import ELEMENTS, Composition
from specsolve.matter.equation_of_state import (
    ELECTRON_AFFINITY_EV,
    H2_DISSOCIATION_EV,
    H2_PLUS_DISSOCIATION_EV,
    Gas,
    equilibrium,
)
from specsolve.matter.partition import STAGES, ionization_energy, log_partition_slope, species_row

DIFFERENCE = 3e-4  # step in ln T and ln P of the central differences: errors 1e-7 (curvature), 1e-9 (convergence)


class Thermodynamics(NamedTuple):
    """Derivatives at n points, each (n,).

    Attributes
    ----------
    heat_capacity : ndarray
        At constant pressure [erg g^-1 K^-1].
    adiabatic_gradient : ndarray
        d ln T / d ln P at constant entropy.
    expansion : ndarray
        Q = -(d ln rho / d ln T) at constant pressure; 1 where no degree of ionization changes.
    density : ndarray
        [g cm^-3]
    """

    heat_capacity: np.ndarray
    adiabatic_gradient: np.ndarray
    expansion: np.ndarray
    density: np.ndarray


@cache
def _species() -> tuple[np.ndarray, np.ndarray]:
    """Rows in the partition table and energies of formation [erg] of all stages, hydrogen as H I and H II."""
    rows, energies = [], []
    for symbol in ELEMENTS:
        total = 0.0
        for stage in STAGES[:2] if symbol == "H" else STAGES:
            name = f"{symbol} {stage}"
            rows.append(species_row(name))
            energies.append(total)
            total += ionization_energy(name)
    return np.array(rows), np.array(energies) * EV_ERG


def enthalpy(gas: Gas) -> np.ndarray:
    """Enthalpy per gram, zero for neutral atoms in their ground state at 0 K.

    Parameters
    ----------
    gas : Gas

    Returns
    -------
    ndarray, shape (n,)
        [erg g^-1]
    """
    kt = BOLTZMANN_ERG_K * gas.temperature
    rows, energies = _species()
    densities = gas.ions.reshape(-1, gas.temperature.size)
    densities = np.delete(densities, 2, axis=0)  # hydrogen has no third stage
    excitation = kt * log_partition_slope(rows, gas.temperature)
    molecular = kt * log_partition_slope(np.array([species_row("H2"), species_row("H2+")]), gas.temperature)
    ionized = ionization_energy("H I")
    per_volume = (
        2.5 * gas.gas_pressure
        + energies @ densities
        + np.sum(densities * excitation, axis=0)
        + gas.h2 * (molecular[0] - H2_DISSOCIATION_EV * EV_ERG)
        + gas.h2_plus * (molecular[1] + (ionized - H2_PLUS_DISSOCIATION_EV) * EV_ERG)
        - gas.h_minus * ELECTRON_AFFINITY_EV * EV_ERG
    )
    return per_volume / gas.density


def thermodynamics(temperature: np.ndarray, gas_pressure: np.ndarray, composition: Composition) -> Thermodynamics:
    """Heat capacity, adiabatic gradient and expansion of the gas.

    Parameters
    ----------
    temperature : ndarray, shape (n,)
        [K], within 2000 to 30 000 with room for a difference of 0.03 %.
    gas_pressure : ndarray, shape (n,)
        [dyn cm^-2]
    composition : Composition

    Returns
    -------
    Thermodynamics

    Notes
    -----
    With h the enthalpy per gram: cp = (dh/dT)_P, Q = -(d ln rho / d ln T)_P, gradient = P Q / (rho T cp).

    Examples
    --------
    >>> from specsolve.matter.composition import composition_for
    >>> state = thermodynamics(np.array([4500.0]), np.array([1e3]), composition_for(-3.0))
    >>> bool(0.3 < state.adiabatic_gradient[0] < 0.4)
    True
    """
    temperature, gas_pressure = np.broadcast_arrays(
        np.atleast_1d(np.asarray(temperature, dtype=float)), np.atleast_1d(np.asarray(gas_pressure, dtype=float))
    )
    n = temperature.size
    both = np.concatenate([temperature * np.exp(DIFFERENCE), temperature * np.exp(-DIFFERENCE), temperature])
    gas = equilibrium(both, np.tile(gas_pressure, 3), composition)
    h = enthalpy(gas)
    heat_capacity = (h[:n] - h[n : 2 * n]) / (2.0 * DIFFERENCE * temperature)
    expansion = -np.log(gas.density[:n] / gas.density[n : 2 * n]) / (2.0 * DIFFERENCE)
    density = gas.density[2 * n :]
    gradient = gas_pressure * expansion / (density * temperature * heat_capacity)
    return Thermodynamics(heat_capacity, gradient, expansion, density)
