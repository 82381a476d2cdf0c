"""The hydrogen atom and H2+ against exact results."""

import numpy as np
import pytest

from specsolve.constants import BOHR_RADIUS_CM, BOLTZMANN_EV_K, SAHA_CONSTANT, THOMSON_CM2
from specsolve.matter.h2_plus_build import HARTREE_EV, log_absorption, two_centre_states
from specsolve.matter.hydrogen import (
    HIGHEST_EXACT_N,
    KRAMERS_CM2,
    _dipole_spectrum,
    gaunt_factor,
    lyman_strengths,
    rayleigh_hydrogen,
)


def test_ground_state_cross_section_is_that_of_stobbe():
    """2^9 pi^2/3 alpha a0^2 (1+x)^-4 exp(-4 arctan(eta)/eta) / (1 - exp(-2 pi/eta)), eta^2 = x (Stobbe 1930)."""
    x = np.array([0.001, 0.1, 1.0, 5.0, 50.0])
    eta = np.sqrt(x)
    exponent = np.exp(-4.0 * np.arctan(eta) / eta) / -np.expm1(-2.0 * np.pi / eta)
    alpha = 7.2973525693e-3
    stobbe = 512.0 * np.pi**2 / 3.0 * alpha * BOHR_RADIUS_CM**2 / (1 + x) ** 4 * exponent
    np.testing.assert_allclose(KRAMERS_CM2 * gaunt_factor(1, x) / (1 + x) ** 3, stobbe, rtol=2e-4)


def test_gaunt_factors_at_the_thresholds():
    # Karzas & Latter 1961, ApJS 6, 167, at threshold: 0.797, 0.876, 0.907 for n = 1, 2, 3 (from memory)
    for n, published in ((1, 0.797), (2, 0.876), (3, 0.907)):
        assert gaunt_factor(n, np.array([0.0]))[0] == pytest.approx(published, abs=1e-3)


def test_exact_and_asymptotic_gaunt_factors_join():
    x = np.array([0.0, 0.1, 1.0, 5.0])
    below, above = gaunt_factor(HIGHEST_EXACT_N, x), gaunt_factor(HIGHEST_EXACT_N + 1, x)
    np.testing.assert_allclose(below, above, atol=0.004)


def test_strengths_obey_the_sum_rules():
    assert lyman_strengths([2])[0] == pytest.approx(0.41620, abs=1e-5)  # textbook value
    energies, strengths = _dipole_spectrum()
    assert strengths.sum() == pytest.approx(1.0, abs=1e-4)  # Thomas, Reiche & Kuhn
    assert 4.0 * (strengths / energies**2).sum() == pytest.approx(4.5, abs=1e-3)  # static polarizability [a0^3]


def test_rayleigh_scattering_by_hydrogen():
    # Dalgarno & Williams 1962, ApJ 136, 690: 5.799e-13/l^4 + 1.422e-6/l^6 + 2.784/l^8, l in A; 1.5 %
    wavelength = np.array([3000.0, 4000.0, 5000.0, 7000.0])
    published = 5.799e-13 / wavelength**4 + 1.422e-6 / wavelength**6 + 2.784 / wavelength**8
    np.testing.assert_allclose(rayleigh_hydrogen(wavelength * 1e-8), published, rtol=0.015)
    # Near Lyman alpha it is the wing of one damped oscillator, f^2 E^4 / (E0^2 - E^2)^2
    near = 1220.0
    ratio = (1215.67 / near) ** 2
    single = THOMSON_CM2 * (0.4162 * ratio / (1 - ratio)) ** 2
    assert rayleigh_hydrogen(np.array([near * 1e-8]))[0] == pytest.approx(single, rel=0.03)


def test_the_molecular_ion_is_the_exact_one():
    # Wind 1965, J. Chem. Phys. 42, 2371 (1s sigma_g) and Bates, Ledsham & Stewart 1953 (2p sigma_u), R = 2 a0 [Hartree]
    energy_g, energy_u, dipole = two_centre_states(2.0)
    assert energy_g == pytest.approx(-0.6026342, abs=1e-6)
    assert energy_u == pytest.approx(-0.1675344, abs=1e-6)
    # Far apart the dipole is R/2 and the gap closes
    energy_g, energy_u, dipole = two_centre_states(14.0)
    assert dipole == pytest.approx(7.0, rel=0.01)
    assert 0.0 < energy_u - energy_g < 3e-5


@pytest.mark.slow
def test_classical_nuclei_give_the_number_of_exact_bound_pairs():
    """Bound pairs n(H2+)/n(H)n(H+): classical phase space as in the opacity, against all levels of the exact curve."""
    from scipy.interpolate import CubicSpline
    from scipy.special import gammainc

    distance = np.geomspace(0.5, 18.0, 40)
    potential = CubicSpline(distance, [two_centre_states(r)[0] + 0.5 for r in distance])
    mass, n = 918.076, 360  # half a proton [m_e]; grid points
    r = np.linspace(0.55, 17.5, n)
    step = r[1] - r[0]
    gap = np.subtract.outer(np.arange(n), np.arange(n))
    kinetic = np.where(gap == 0, np.pi**2 / 3, 2.0 * (-1.0) ** gap / np.maximum(gap**2, 1)) / (2 * mass * step**2)
    weights, levels = [], []
    for j in range(36):
        energies = np.linalg.eigvalsh(kinetic + np.diag(potential(r) + j * (j + 1) / (2 * mass * r**2)))
        levels.extend(energies[energies < 0])
        weights.extend([2 * j + 1] * int((energies < 0).sum()))
    levels, weights = np.array(levels), np.array(weights)
    assert -levels.min() * HARTREE_EV == pytest.approx(2.6507, abs=1e-3)  # dissociation energy, Huber & Herzberg 1979
    assert abs(len(levels) - 423) <= 4  # Moss 1993, Mol. Phys. 80, 1541: 423 bound levels
    fine = np.linspace(0.55, 17.0, 4000)
    for temperature in (3000.0, 5000.0, 10000.0):
        kt = BOLTZMANN_EV_K * temperature / HARTREE_EV
        x = np.maximum(-potential(fine) / kt, 0.0)
        classical = np.trapezoid(0.5 * 4 * np.pi * fine**2 * np.exp(x) * gammainc(1.5, x), fine) * BOHR_RADIUS_CM**3
        # nuclear spins average to 1/2, the electron has weight 2 in the molecule and in the atom
        exact = 0.5 * np.sum(weights * np.exp(-levels / kt)) / (SAHA_CONSTANT * temperature**1.5 * mass**1.5)
        assert classical == pytest.approx(exact, rel=0.08)


def test_absorption_by_the_molecular_ion_has_the_expected_run():
    """Red light is absorbed by distant pairs, whose number hardly depends on temperature; blue light by bound ones."""
    log_wavelength = np.log(np.array([3e-5, 2e-4]))
    cold, warm = np.exp(log_absorption(np.log(np.array([4000.0, 8000.0])), log_wavelength))
    assert cold[0] > 4.0 * warm[0]
    assert cold[1] < 2.5 * warm[1]
