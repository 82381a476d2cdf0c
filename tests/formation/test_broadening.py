"""Broadening and the Voigt function against published figures and against scipy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import voigt_profile

from specsolve.matter import broadening
from specsolve.matter.broadening import (
    classical_radiative_width,
    damping_parameter,
    doppler_width,
    hydrogen_width,
    stark_width,
    unsold_width,
)
from specsolve.matter.line_profile import voigt, voigt_fast

# Barklem, Piskunov & O'Mara 2000, A&AS 142, 467, table 1:
# sigma [a0^2], alpha, log10 full width per H at 10 000 K [rad cm3/s]
HYDROGEN_ROWS = [(211.0, 0.251, -7.812), (204.0, 0.254, -7.827), (212.0, 0.251, -7.810)]


@pytest.mark.parametrize(("sigma", "alpha", "log_width"), HYDROGEN_ROWS)
def test_hydrogen_width_of_published_rows(sigma, alpha, log_width):
    """The table is printed to 0.001 dex: full and half width cannot be mixed up."""
    assert np.log10(hydrogen_width(sigma, alpha, 1e4)) == pytest.approx(log_width, abs=0.0015)


@pytest.mark.reference
def test_hydrogen_width_and_unsold_factor_on_all_rows(reference):
    rows = [line.split() for line in (reference / "atomic" / "broadening" / "hlist").read_text().splitlines()]
    rows = [r for r in rows if r[0] == "26.00" and 3500.0 < float(r[1]) < 10000.0]
    lower, upper, sigma, alpha, log_width = np.array([[r[4], r[5], r[12], r[13], r[14]] for r in rows], float).T
    np.testing.assert_allclose(np.log10(hydrogen_width(sigma, alpha, 1e4)), log_width, atol=0.0015)
    plain = unsold_width(lower, upper, 7.9025, 1, 6000.0) / broadening.UNSOLD_FACTOR
    assert np.median(hydrogen_width(sigma, alpha, 6000.0) / plain) == pytest.approx(broadening.UNSOLD_FACTOR, abs=0.05)


def test_voigt_is_scipys_voigt_profile():
    for a in (1e-4, 1e-2, 0.3, 3.0):
        v = np.linspace(0.0, 30.0, 61)
        expected = np.sqrt(np.pi) * voigt_profile(v, np.sqrt(0.5), a)
        np.testing.assert_allclose(voigt(a, v), expected, rtol=1e-10)


def test_fast_voigt_is_good_to_1e_4():
    v = np.concatenate([np.linspace(0.0, 8.0, 81), np.geomspace(8.0, 1e3, 30)])
    for a in np.geomspace(1e-6, 30.0, 25):
        fast = np.array([voigt_fast(float(a), float(x)) for x in v])
        np.testing.assert_allclose(fast, np.sqrt(np.pi) * voigt_profile(v, np.sqrt(0.5), a), rtol=1.5e-4)


def test_voigt_area_is_root_pi():
    area = 2.0 * quad(lambda v: voigt_fast(0.01, v), 0.0, 10.0, limit=200)[0] + 2.0 * 0.01 / np.sqrt(np.pi) / 10.0
    assert area == pytest.approx(np.sqrt(np.pi), rel=1e-3)


def test_doppler_width_of_iron():
    """sqrt(2 k 5777 K / 55.845 u + (1 km/s)^2) = 1.649 km/s, by hand."""
    assert doppler_width(5777.0, 1.0) * 299792.458 == pytest.approx(1.649, abs=0.002)


def test_classical_radiative_width():
    """0.2223 / lambda[cm]^2 (textbook figure)."""
    assert classical_radiative_width(5e-5) == pytest.approx(0.2223 / 25e-10, rel=1e-3)


def test_damping_parameter_is_half_width_over_doppler_width():
    """A Lorentz profile of full width Gamma in angular frequency has half width Gamma / (4 pi) in frequency."""
    wavelength, doppler, gamma = 6e-5, 6e-6, 1e9
    frequency = 2.99792458e10 / wavelength
    assert damping_parameter(gamma, doppler, wavelength) == pytest.approx(gamma / (4 * np.pi) / (frequency * doppler))


def test_stark_width_order_of_magnitude():
    """Fe I with upper levels of 4.5 to 6.5 eV: log width -6.2 to -5.2, Fe II near -6.5 (usual range, from memory)."""
    assert -6.3 < np.log10(stark_width(4.5, 7.90, 1)) < np.log10(stark_width(6.5, 7.90, 1)) < -5.0
    assert np.log10(stark_width(5.5, 16.20, 2)) == pytest.approx(-6.5, abs=0.3)
