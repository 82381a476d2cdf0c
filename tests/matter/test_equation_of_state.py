"""Equation of state: conservation, limits known on paper, published structures."""

import numpy as np
import pytest

from specsolve.constants import BOLTZMANN_ERG_K, BOLTZMANN_EV_K, SAHA_CONSTANT
from specsolve.matter.composition import ELEMENTS, Composition, composition_for
from specsolve.matter.equation_of_state import equilibrium, gas_with_electrons, ion_density
from specsolve.matter.partition import ionization_energy, partition_function

TEMPERATURE, PRESSURE = (
    axis.ravel() for axis in np.meshgrid(np.geomspace(2000.0, 30000.0, 25), np.geomspace(1e-4, 1e8, 25))
)


@pytest.mark.parametrize("mh", [-4.0, -1.0, 0.5])
def test_charge_particles_and_nuclei_are_conserved(mh):
    composition = composition_for(mh)
    gas = equilibrium(TEMPERATURE, PRESSURE, composition)
    charge = gas.protons + gas.h2_plus - gas.h_minus + (gas.ions[1:, 1] + 2 * gas.ions[1:, 2]).sum(axis=0)
    np.testing.assert_allclose(charge, gas.electron_density, rtol=1e-10)
    particles = gas.ions.sum(axis=(0, 1)) + gas.h2 + gas.h2_plus + gas.h_minus + gas.electron_density
    np.testing.assert_allclose(particles * BOLTZMANN_ERG_K * gas.temperature, PRESSURE, rtol=1e-10)
    nuclei = gas.h1 + gas.protons + gas.h_minus + 2 * (gas.h2 + gas.h2_plus)
    np.testing.assert_allclose(nuclei, gas.hydrogen_density, rtol=1e-10)
    for i in range(1, len(ELEMENTS)):
        np.testing.assert_allclose(
            gas.ions[i].sum(axis=0), composition.abundances[i] * gas.hydrogen_density, rtol=1e-10
        )
    np.testing.assert_allclose(gas.density, gas.hydrogen_density * composition.mass_per_hydrogen, rtol=1e-14)


def test_pure_hydrogen_is_the_textbook_quadratic():
    """x^2 / (1 - x^2) = (2 pi m_e / h^2)^1.5 (kT)^2.5 / P 2 U(II)/U(I) exp(-chi/kT)."""
    pure = Composition(mh=0.0, alpha=0.0, abundances=np.eye(len(ELEMENTS))[0])
    temperature = np.linspace(8000.0, 17000.0, 30)
    pressure = np.full(30, 1e3)
    gas = equilibrium(temperature, pressure, pure)
    kt = BOLTZMANN_ERG_K * temperature
    right = (
        2.0
        / partition_function("H I", temperature)
        * SAHA_CONSTANT
        * temperature**1.5
        * kt
        / pressure
        * np.exp(-ionization_energy("H I") / (BOLTZMANN_EV_K * temperature))
    )
    expected = np.sqrt(right / (1 + right))
    np.testing.assert_allclose(gas.protons / gas.hydrogen_density, expected, rtol=2e-4)  # H2 and H- are not in it


def test_molecular_hydrogen_is_the_published_equilibrium():
    # Barklem & Collet 2016, table 7: log10 p(H)^2/p(H2) [Pa]
    temperature = np.array([3000.0, 4000.0, 5000.0, 6000.0])
    published = np.array([3.39197, 5.39364, 6.59790, 7.40150])
    gas = equilibrium(temperature, np.full(4, 1e5), composition_for(0.0))
    constant = gas.h1**2 / gas.h2 * BOLTZMANN_ERG_K * temperature / 10.0  # dyn/cm2 to Pa
    np.testing.assert_allclose(np.log10(constant), published, atol=5e-4)


def test_negative_hydrogen_is_the_textbook_saha_equation():
    # log n(H)/n(H-) Pe = -0.1762 + log(u1/u0) + 2.5 log T - 0.7542 theta with u1/u0 = 2: Gray 2005, The Observation and
    # Analysis of Stellar Photospheres, eq. 1.20 (his constant is rounded in the third decimal)
    gas = equilibrium(np.array([5040.0]), np.array([1e5]), composition_for(0.0))
    electron_pressure = gas.electron_density * BOLTZMANN_ERG_K * gas.temperature
    ratio = gas.h1 / gas.h_minus * electron_pressure
    assert np.log10(ratio[0]) == pytest.approx(-0.1762 + np.log10(2.0) + 2.5 * np.log10(5040.0) - 0.7542, abs=2e-3)


def test_solar_photosphere_electron_densities():
    """Fontenla, Avrett & Loeser 1993, ApJ 406, 319, model C, below log tau = 0, where hydrogen is near LTE.

    2 % for the helium abundance, which differs from ours.
    """
    temperature = np.array([6980.0, 7900.0, 8860.0])
    pressure = np.array([1.363e5, 1.608e5, 1.860e5]) * np.array([0.970, 0.971, 0.973])  # total times gas fraction
    hydrogen = np.array([1.246e17, 1.295e17, 1.325e17])
    electrons = np.array([1.730e14, 6.923e14, 2.215e15])
    gas = equilibrium(temperature, pressure, composition_for(0.0))
    np.testing.assert_allclose(gas.hydrogen_density, hydrogen, rtol=0.02)
    np.testing.assert_allclose(gas.electron_density, electrons, rtol=0.01)


def test_convergence_is_clean_enough_for_small_differences():
    composition = composition_for(-1.0)
    temperature, pressure = np.linspace(3500.0, 15000.0, 70), np.geomspace(1.0, 1e6, 70)
    steps = 2e-5 * np.array([1.0, 2.0])
    base = np.log(equilibrium(temperature, pressure, composition).electron_density)
    one, two = (
        (np.log(equilibrium(temperature * np.exp(step), pressure, composition).electron_density) - base) / step
        for step in steps
    )
    np.testing.assert_allclose(one, two, rtol=3e-3, atol=3e-3)
    noise = equilibrium(temperature * (1 + 1e-15), pressure, composition).electron_density / np.exp(base) - 1
    assert np.abs(noise).max() < 1e-11


def test_given_electron_density_is_kept_and_the_true_one_gives_the_same_gas():
    composition = composition_for(0.0)
    gas = equilibrium(TEMPERATURE, PRESSURE, composition)
    again = gas_with_electrons(TEMPERATURE, PRESSURE, gas.electron_density, composition)
    np.testing.assert_allclose(again.ions, gas.ions, rtol=1e-10)
    more = gas_with_electrons(TEMPERATURE, PRESSURE, 0.5 * gas.electron_density, composition)
    assert np.array_equal(more.electron_density, 0.5 * gas.electron_density)
    with pytest.raises(ValueError, match="below the density of all particles"):
        gas_with_electrons(TEMPERATURE, PRESSURE, np.full_like(TEMPERATURE, 1e30), composition)


def test_trace_elements_agree_with_the_elements_of_the_equation_of_state():
    composition = composition_for(0.0)
    gas = equilibrium(TEMPERATURE, PRESSURE, composition)
    for symbol in ("He", "Ca", "Fe"):
        i = ELEMENTS.index(symbol)
        for stage, numeral in enumerate(("I", "II", "III")):
            np.testing.assert_allclose(
                ion_density(gas, f"{symbol} {numeral}", composition.abundances[i]), gas.ions[i, stage], rtol=1e-9
            )
    barium = sum(ion_density(gas, f"Ba {stage}", 1e-10) for stage in ("I", "II", "III"))
    np.testing.assert_allclose(barium, 1e-10 * gas.hydrogen_density, rtol=1e-12)


@pytest.mark.parametrize("temperature", [1500.0, 40000.0, np.nan])
def test_temperatures_outside_the_validity_are_refused(temperature):
    with pytest.raises(ValueError, match="outside the validity"):
        equilibrium(np.array([5000.0, temperature]), np.array([1e4, 1e4]), composition_for(0.0))


@pytest.mark.parametrize("pressure", [0.0, -1.0, np.nan])
def test_pressures_that_are_not_positive_are_refused(pressure):
    with pytest.raises(ValueError, match="must be positive"):
        equilibrium(np.array([5000.0]), np.array([pressure]), composition_for(0.0))
