"""Thermodynamic derivatives: limits known on paper and thermodynamic identities."""

import numpy as np
import pytest

from specsolve.constants import ATOMIC_MASS_G, BOLTZMANN_ERG_K, BOLTZMANN_EV_K
from specsolve.matter.composition import ELEMENTS, Composition, composition_for
from specsolve.matter.equation_of_state import equilibrium
from specsolve.matter.partition import ionization_energy
from specsolve.matter.thermodynamics import enthalpy, thermodynamics

PURE_HYDROGEN = Composition(mh=0.0, alpha=0.0, abundances=np.eye(len(ELEMENTS))[0])


def test_a_neutral_atomic_gas_is_monatomic():
    # Warm, thin, metal-poor: neither molecules nor ions. cp = 5/2 k per particle, gradient 2/5, expansion 1.
    state = thermodynamics(np.array([3700.0]), np.array([1.0]), composition_for(-4.0))
    assert state.adiabatic_gradient[0] == pytest.approx(0.4, abs=2e-3)
    assert state.expansion[0] == pytest.approx(1.0, abs=1e-3)
    composition = composition_for(-4.0)
    particle_mass = composition.mass_per_hydrogen / composition.abundances.sum()
    assert state.heat_capacity[0] == pytest.approx(2.5 * BOLTZMANN_ERG_K / particle_mass, rel=5e-3)


def test_hydrogen_ionization_zone_is_the_textbook_one():
    """Adiabatic gradient (2 + x(1-x) K) / (5 + x(1-x) K^2) with K = 5/2 + chi/kT (Unsoeld)."""
    temperature = np.linspace(8000.0, 14000.0, 20)
    pressure = np.full(20, 1e4)
    state = thermodynamics(temperature, pressure, PURE_HYDROGEN)
    gas = equilibrium(temperature, pressure, PURE_HYDROGEN)
    x = gas.protons / gas.hydrogen_density
    k = 2.5 + ionization_energy("H I") / (BOLTZMANN_EV_K * temperature)
    product = x * (1 - x)
    # Excited levels of H I are not in the textbook formula: they hold 1e-3 of it here.
    np.testing.assert_allclose(state.adiabatic_gradient, (2 + product * k) / (5 + product * k**2), rtol=2e-3)
    np.testing.assert_allclose(state.expansion, 1 + 0.5 * product * k, rtol=1e-3)
    capacity = BOLTZMANN_ERG_K / (1.008 * ATOMIC_MASS_G) * (1 + x) * (2.5 + 0.5 * product * k**2)
    np.testing.assert_allclose(state.heat_capacity, capacity, rtol=3e-3)


@pytest.mark.parametrize("mh", [-2.0, 0.0])
def test_maxwell_relation(mh):
    """(dh/dP)_T = (1 - Q) / rho ties the enthalpy to the densities; any energy left out breaks it."""
    composition = composition_for(mh)
    temperature = np.linspace(2500.0, 14000.0, 40)
    pressure = np.full(40, 1e5)
    state = thermodynamics(temperature, pressure, composition)
    step = 1e-4
    upper, lower = (enthalpy(equilibrium(temperature, pressure * (1 + s), composition)) for s in (step, -step))
    slope = (upper - lower) / (2 * step * pressure)
    np.testing.assert_allclose(slope * state.density, 1 - state.expansion, atol=1e-4)


def test_entropy_is_constant_along_the_adiabatic_gradient():
    """Along dT/dP of the gradient, dh = dP / rho."""
    composition = composition_for(0.0)
    temperature, pressure = np.linspace(3000.0, 14000.0, 30), np.full(30, 2e5)
    state = thermodynamics(temperature, pressure, composition)
    step = 1e-4
    ends = [
        equilibrium(temperature * np.exp(s * state.adiabatic_gradient), pressure * np.exp(s), composition)
        for s in (step, -step)
    ]
    change = (enthalpy(ends[0]) - enthalpy(ends[1])) / (2 * step)
    np.testing.assert_allclose(change, pressure / state.density, rtol=1e-4)


def test_derivatives_are_smooth():
    temperature = np.geomspace(2500.0, 16000.0, 4000)
    state = thermodynamics(temperature, np.full(4000, 1e5), composition_for(0.0))
    for values in (np.log(state.heat_capacity), state.adiabatic_gradient, state.expansion):
        assert np.abs(np.diff(values, 2)).max() < 2e-4
