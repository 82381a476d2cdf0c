"""Continuous opacity against published figures."""

import numpy as np
import pytest

from specsolve.constants import BOLTZMANN_ERG_K, RADIATION_C2_CM_K, THOMSON_CM2
from specsolve.matter.composition import composition_for
from specsolve.matter.continuum import continuum_opacity, h_minus_bound_free, h_minus_free_free, rayleigh
from specsolve.matter.equation_of_state import equilibrium

# Free-free absorption of H- [1e-26 cm^4 / dyn], rows wavelength [A], columns theta = 5040 K / T: Bell & Berrington
# 1987, J. Phys. B 20, 801, table 1.
BELL_BERRINGTON_THETA = np.array([0.5, 0.6, 0.8, 1.0, 1.2, 1.4, 1.6, 2.0])
BELL_BERRINGTON = {
    1823: (0.0178, 0.0222, 0.0308, 0.0402, 0.0498, 0.0596, 0.0695, 0.0896),
    2278: (0.0228, 0.0280, 0.0388, 0.0499, 0.0614, 0.0732, 0.0851, 0.110),
    3038: (0.0364, 0.0447, 0.0616, 0.0789, 0.0966, 0.114, 0.132, 0.169),
    3645: (0.0520, 0.0633, 0.0859, 0.108, 0.131, 0.154, 0.178, 0.225),
    4557: (0.0791, 0.0959, 0.129, 0.161, 0.194, 0.227, 0.260, 0.327),
    5063: (0.0965, 0.117, 0.157, 0.195, 0.234, 0.272, 0.311, 0.390),
    6510: (0.154, 0.188, 0.249, 0.309, 0.367, 0.424, 0.482, 0.597),
    7595: (0.208, 0.250, 0.332, 0.409, 0.484, 0.557, 0.630, 0.774),
    10126: (0.358, 0.432, 0.572, 0.702, 0.825, 0.943, 1.06, 1.28),
    15189: (0.781, 0.940, 1.24, 1.52, 1.78, 2.02, 2.26, 2.69),
    22784: (1.73, 2.08, 2.74, 3.37, 3.90, 4.50, 5.01, 5.95),
    45567: (6.79, 8.16, 10.7, 13.1, 15.3, 17.4, 19.4, 23.0),
    151890: (75.1, 90.0, 118.0, 144.0, 168.0, 191.0, 212.0, 253.0),
}


@pytest.mark.parametrize("wavelength", BELL_BERRINGTON)
def test_free_free_of_negative_hydrogen(wavelength):
    ours = h_minus_free_free(np.array([wavelength * 1e-8]), 5040.0 / BELL_BERRINGTON_THETA)[0]
    np.testing.assert_allclose(ours * 1e26, BELL_BERRINGTON[wavelength], rtol=0.02)


def test_bound_free_of_negative_hydrogen():
    # Maximum of 4.0e-17 cm^2 near 0.85 um, Wishart 1979, MNRAS 187, 59P, from memory; threshold 0.7542 eV.
    wavelength = np.linspace(0.3e-4, 1.6e-4, 1000)
    sigma = h_minus_bound_free(wavelength)
    assert sigma.max() == pytest.approx(4.0e-17, rel=0.03)
    assert wavelength[sigma.argmax()] == pytest.approx(0.85e-4, abs=0.04e-4)
    assert h_minus_bound_free(np.array([1.65e-4]))[0] == 0.0


def test_negative_hydrogen_per_atom_and_electron_pressure():
    """Through the densities of the equation of state it is John's own expression 0.750 T^-2.5 exp(...) sigma."""
    gas = equilibrium(np.array([5040.0]), np.array([1e5]), composition_for(0.0))
    wavelength = np.array([5e-5])
    electron_pressure = gas.electron_density * BOLTZMANN_ERG_K * gas.temperature
    per_atom = (
        h_minus_bound_free(wavelength)
        * gas.h_minus
        * -np.expm1(-RADIATION_C2_CM_K / (wavelength * gas.temperature))
        / (gas.h1 * electron_pressure)
    )
    alpha = RADIATION_C2_CM_K * 1e4  # um K
    john = (
        0.750
        * 5040.0**-2.5
        * np.exp(alpha / (1.6419 * 5040.0))
        * -np.expm1(-alpha / (0.5 * 5040.0))
        * h_minus_bound_free(wavelength)
    )
    assert per_atom[0] == pytest.approx(john[0], rel=5e-3)


def test_rayleigh_at_long_wavelength_is_that_of_the_static_polarizability():
    """sigma = 128 pi^5 / (3 l^4) alpha^2 with alpha = 4.5 (H), 1.383 (He), 5.4 (H2) atomic units.

    H exact; He: Pachucki & Sapirstein 2000; H2: Kolos & Wolniewicz 1967, J. Chem. Phys. 46, 1426 (5.414, v = 0).
    """
    wavelength = np.array([5e-4])
    bohr = 5.29177e-9
    tolerances = (0.01, 0.01, 0.035)  # of the published fit of H2
    for ours, polarizability, tolerance in zip(rayleigh(wavelength), (4.5, 1.38319, 5.41), tolerances, strict=True):
        expected = 128 * np.pi**5 / 3 * (polarizability * bohr**3) ** 2 / wavelength**4
        np.testing.assert_allclose(ours, expected, rtol=tolerance)


def test_thomson_scattering_alone_in_a_hot_thin_gas():
    gas = equilibrium(np.array([25000.0]), np.array([1.0]), composition_for(0.0))
    _, scattering = continuum_opacity(np.array([5e-5]), gas)
    assert scattering[0, 0] == pytest.approx(THOMSON_CM2 * gas.electron_density[0] / gas.density[0], rel=1e-3)


def test_edges_are_where_they_belong():
    gas = equilibrium(np.array([9000.0]), np.array([1e3]), composition_for(0.0))
    for edge in (0.36470e-4, 0.82058e-4):  # Balmer and Paschen limits in vacuum [cm]
        absorption, _ = continuum_opacity(np.array([edge * 0.9999, edge * 1.0001]), gas)
        assert absorption[0, 0] > 2.0 * absorption[1, 0]


def test_wavelengths_outside_the_validity_are_refused():
    gas = equilibrium(np.array([5000.0]), np.array([1e4]), composition_for(0.0))
    for wavelength in (1e-5, 2e-2, np.nan):
        with pytest.raises(ValueError, match="leave the validity"):
            continuum_opacity(np.array([5e-5, wavelength]), gas)


def test_order_of_points_and_wavelengths_does_not_matter(rng):
    temperature, pressure = rng.uniform(4000.0, 12000.0, 30), 10 ** rng.uniform(1.0, 5.0, 30)
    wavelength = rng.uniform(2e-5, 2e-4, 20)
    composition = composition_for(-1.0)
    points, waves = rng.permutation(30), rng.permutation(20)
    absorption, scattering = continuum_opacity(wavelength, equilibrium(temperature, pressure, composition))
    mixed = continuum_opacity(wavelength[waves], equilibrium(temperature[points], pressure[points], composition))
    np.testing.assert_allclose(mixed[0], absorption[np.ix_(waves, points)], rtol=1e-11)
    np.testing.assert_allclose(mixed[1], scattering[np.ix_(waves, points)], rtol=1e-11)


def test_small_differences_of_temperature_are_clean():
    """Differences of 2e-5 in ln T, as a structure solver takes them, agree with those of 1e-3."""
    temperature, pressure = np.linspace(3000.0, 14000.0, 70), np.geomspace(10.0, 1e6, 70)
    wavelength = np.geomspace(0.16e-4, 20e-4, 40)
    composition = composition_for(0.0)

    def log_opacity(step):
        absorption, _ = continuum_opacity(wavelength, equilibrium(temperature * np.exp(step), pressure, composition))
        return np.log(absorption)

    slopes = [(log_opacity(step) - log_opacity(-step)) / (2 * step) for step in (2e-5, 1e-3)]
    np.testing.assert_allclose(slopes[0], slopes[1], atol=0.01, rtol=1e-3)
