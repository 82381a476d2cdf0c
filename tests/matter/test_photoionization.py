"""Bound-free absorption of neutral atoms, and the sum of all continuous absorption in the Sun."""

import numpy as np
import pytest

from specsolve.constants import HC_ERG_CM, LIGHT_SPEED_CM_S, RADIATION_C2_CM_K
from specsolve.matter.composition import composition_for
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium
from specsolve.matter.partition import ionization_energy, partition_table
from specsolve.matter.photoionization import HYDROGEN_LEVELS, absorbing_levels, bound_free, cross_sections


def _levels_of(ion: str) -> np.ndarray:
    levels = absorbing_levels()
    position = levels.rows.tolist().index(partition_table().rows[ion])
    return np.flatnonzero(levels.ion == position)


def test_thresholds_are_the_ionization_energies():
    levels = absorbing_levels()
    np.testing.assert_allclose(
        (levels.energy + levels.binding)[_levels_of("Fe I")], ionization_energy("Fe I"), rtol=1e-12
    )
    ground = _levels_of("Al I")[0]
    edge = 12398.42 / levels.binding[ground] * 1e-8
    below, above = cross_sections(np.array([edge * 0.9999, edge * 1.0001]))[:, ground]
    assert below > 4e-17
    assert above == 0.0


def test_ground_terms_follow_the_published_fits():
    # Verner et al. 1996, ApJ 465, 487, evaluated at 1.1 of the threshold [1e-18 cm^2]: Mg 1.042, Al 38.7, Ca 4.94
    for ion, expected in (("Mg I", 1.042), ("Al I", 38.74), ("Ca I", 4.941)):
        ground = _levels_of(ion)[0]
        wavelength = 12398.42e-8 / (1.1 * ionization_energy(ion))
        sigma = cross_sections(np.array([wavelength]))[0, ground]
        assert sigma * 1e18 == pytest.approx(expected, rel=0.01)


def test_merging_levels_keeps_the_population():
    """All levels of the table against the partition function: what is missing is bound less than 0.4 eV."""
    levels = absorbing_levels()
    kt = 8.617333e-5 * 6000.0
    for ion, u in (("Fe I", 31.741), ("Mg I", 1.0492), ("Si I", 9.8177)):  # Barklem & Collet 2016 at 6000 K
        chosen = _levels_of(ion)
        total = np.sum(levels.weight[chosen] * np.exp(-levels.energy[chosen] / kt))
        assert total == pytest.approx(u, rel=0.01)


def test_hydrogen_alone_in_a_metal_free_gas():
    gas = equilibrium(np.array([9000.0]), np.array([1e3]), composition_for(-8.0))
    wavelength = np.array([3.5e-5])
    levels = absorbing_levels()
    n = np.arange(1, HYDROGEN_LEVELS + 1)
    population = gas.h1 / 2.0 * 2.0 * n**2 * np.exp(-levels.energy[:HYDROGEN_LEVELS] / (8.617333e-5 * 9000.0))
    expected = cross_sections(wavelength)[0, :HYDROGEN_LEVELS] @ population
    assert bound_free(wavelength, gas)[0, 0] == pytest.approx(expected, rel=1e-3)


def test_many_wavelengths_are_as_few():
    gas = equilibrium(np.array([6000.0]), np.array([1e5]), composition_for(0.0))
    wavelength = np.linspace(2e-5, 1e-4, 700)
    np.testing.assert_allclose(bound_free(wavelength, gas)[::50], bound_free(wavelength[::50], gas), rtol=1e-12)


# Model C of Fontenla, Avrett & Loeser 1993, ApJ 406, 319: column mass [g cm^-2], temperature [K], and gas pressure =
# total pressure times gas fraction [dyn cm^-2].
SOLAR_STRUCTURE = (
    (3.680e-02, 4430, 993.9),
    (5.125e-02, 4400, 1389),
    (7.149e-02, 4410, 1941),
    (1.044e-01, 4460, 2840),
    (1.664e-01, 4560, 4535),
    (2.626e-01, 4660, 7165),
    (4.103e-01, 4770, 1.118e04),
    (6.344e-01, 4880, 1.728e04),
    (9.705e-01, 4990, 2.632e04),
    (1.195e00, 5060, 3.235e04),
    (1.466e00, 5150, 3.957e04),
    (1.790e00, 5270, 4.822e04),
    (2.174e00, 5410, 5.838e04),
    (2.625e00, 5580, 7.027e04),
    (3.148e00, 5790, 8.408e04),
    (3.496e00, 5980, 9.319e04),
    (3.869e00, 6180, 1.03e05),
    (4.132e00, 6340, 1.099e05),
    (4.404e00, 6520, 1.172e05),
    (4.686e00, 6720, 1.245e05),
    (4.975e00, 6980, 1.322e05),
    (5.269e00, 7280, 1.401e05),
    (5.567e00, 7590, 1.481e05),
    (5.869e00, 7900, 1.561e05),
    (6.174e00, 8220, 1.644e05),
    (6.481e00, 8540, 1.726e05),
    (6.790e00, 8860, 1.81e05),
    (7.102e00, 9140, 1.893e05),
    (7.417e00, 9400, 1.979e05),
)
SOLAR_COLUMN_MASS, SOLAR_TEMPERATURE, SOLAR_PRESSURE = np.array(SOLAR_STRUCTURE).T
# Intensity of the disc centre between lines [1e10 erg cm^-2 s^-1 sr^-1 um^-1], Allen's Astrophysical Quantities, 4th
# edition, table 14.13, against wavelength [um].
CENTRE_INTENSITY = {
    0.45: 4.55, 0.46: 4.44, 0.48: 4.22, 0.50: 4.08, 0.55: 3.63, 0.60: 3.24, 0.65: 2.90, 0.70: 2.52, 0.75: 2.24,
    0.80: 1.97, 0.90: 1.58, 1.0: 1.26, 1.1: 1.01, 1.2: 0.84, 1.4: 0.56, 1.6: 0.40, 1.8: 0.27, 2.0: 0.18, 2.5: 0.081,
    3.0: 0.041, 4.0: 0.0135, 5.0: 0.0057,
}  # fmt: skip


@pytest.mark.parametrize("wavelength_um", CENTRE_INTENSITY)
def test_solar_continuum_on_a_published_structure(wavelength_um):
    """The opacities alone: intensity of the disc centre on a semi-empirical structure made with other opacities."""
    log_mass = np.linspace(np.log(SOLAR_COLUMN_MASS[0]), np.log(SOLAR_COLUMN_MASS[-1]), 300)
    temperature = np.interp(log_mass, np.log(SOLAR_COLUMN_MASS), SOLAR_TEMPERATURE)
    pressure = np.exp(np.interp(log_mass, np.log(SOLAR_COLUMN_MASS), np.log(SOLAR_PRESSURE)))
    gas = equilibrium(temperature, pressure, composition_for(0.0))
    wavelength = wavelength_um * 1e-4
    absorption, scattering = continuum_opacity(np.array([wavelength]), gas)
    kappa = (absorption + scattering)[0] * np.exp(log_mass)  # per unit ln m
    step = np.diff(log_mass)
    tau = kappa[0] + np.concatenate([[0.0], np.cumsum(0.5 * (kappa[1:] + kappa[:-1]) * step)])
    planck = 2 * HC_ERG_CM * LIGHT_SPEED_CM_S / wavelength**5 / np.expm1(RADIATION_C2_CM_K / (wavelength * temperature))
    integrand = planck * np.exp(-tau) * kappa
    intensity = np.sum(0.5 * (integrand[1:] + integrand[:-1]) * step) + planck[-1] * np.exp(-tau[-1])
    # 4 %: accuracy of both, Allen's figures have two digits beyond 1.1 um
    tolerance = 0.04 if wavelength_um <= 1.1 else 0.05
    assert intensity * 1e-4 * 1e-10 == pytest.approx(CENTRE_INTENSITY[wavelength_um], rel=tolerance)
