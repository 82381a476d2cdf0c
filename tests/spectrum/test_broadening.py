"""Broadening on paper: unit areas, transforms against direct convolution, observed pixels, analytic widths."""

import numpy as np
import pytest

from specsolve.spectrum.broadening import Kernel, broaden, gaussian, radial_tangential, rotation
from specsolve.spectrum.observe import observe, velocity_grid
from specsolve.spectrum.profiles import (
    gaussian_profile,
    gaussian_width,
    photon_error,
    voigt_profile,
    voigt_width,
)

STEP = 0.1
VELOCITY = np.arange(-60.0, 60.0 + STEP / 2, STEP)


@pytest.mark.parametrize(
    ("profile", "kernel"),
    [
        (gaussian(VELOCITY, 6.0), Kernel(fwhm=6.0)),
        (rotation(VELOCITY, 12.0), Kernel(fwhm=0.0, vsini=12.0)),
        (radial_tangential(VELOCITY, 5.0), Kernel(fwhm=0.0, macroturbulence=5.0)),
    ],
)
def test_transforms_are_those_of_the_profiles(profile, kernel):
    np.testing.assert_allclose(profile.sum() * STEP, 1.0, atol=2e-3)  # the rotation profile ends with a vertical slope
    line = gaussian(VELOCITY, 4.0)
    direct = np.convolve(line, profile, mode="same") * STEP
    np.testing.assert_allclose(1.0 - broaden(1.0 - line, STEP, kernel), direct, atol=1e-3 * direct.max())


def test_parts_of_a_kernel_multiply():
    both = Kernel(fwhm=5.0, vsini=7.0, macroturbulence=3.0).transform(512, 0.4)
    parts = [Kernel(fwhm=5.0), Kernel(fwhm=0.0, vsini=7.0), Kernel(fwhm=0.0, macroturbulence=3.0)]
    np.testing.assert_allclose(both, np.prod([k.transform(512, 0.4) for k in parts], axis=0), atol=1e-12)
    assert both[0] == 1.0


def test_total_width_is_the_root_of_the_variance():
    """Second moments of the profiles themselves."""
    for profile, kernel in (
        (rotation(VELOCITY, 12.0), Kernel(fwhm=0.0, vsini=12.0)),
        (radial_tangential(VELOCITY, 5.0), Kernel(fwhm=0.0, macroturbulence=5.0)),
    ):
        sigma = np.sqrt(np.sum(profile * VELOCITY**2) * STEP)
        # limb darkening takes the outer rings: the approximation of equal weights is good to 3 %
        np.testing.assert_allclose(kernel.total, 2.3548 * sigma, rtol=0.03)


def test_an_observation_keeps_equivalent_widths(rng):
    """Rotation, macroturbulence, instrument and pixels move light, they take none away."""
    wave = velocity_grid(6000.0, 6040.0, 0.3)
    line = 0.8 * np.exp(-(((wave - 6020.0) / 0.03) ** 2))
    width = 0.8 * 0.03 * np.sqrt(np.pi)
    seen = observe(
        wave, 1.0 - line, star="one", resolving_power=30000.0, signal_to_noise=100.0, vsini=8.0, macroturbulence=4.0
    )
    steps = np.gradient(seen.wavelength_air)
    np.testing.assert_allclose(np.sum((1.0 - seen.flux) * steps), width, rtol=2e-3)
    assert (1.0 - seen.flux).max() < 0.25
    noisy = observe(wave, 1.0 - line, star="one", resolving_power=30000.0, signal_to_noise=50.0, rng=rng)
    free = np.abs(noisy.wavelength_air - 6020.0) > 2.0
    np.testing.assert_allclose(np.std(noisy.flux[free]), 0.02, rtol=0.15)  # some 200 pixels: 5 %


def test_analytic_widths_are_areas():
    x = np.linspace(-400.0, 400.0, 800001)
    for depth, fwhm in ((0.3, 0.2), (0.9, 1.5)):
        line = depth * gaussian_profile(x, fwhm) / gaussian_profile(0.0, fwhm)
        np.testing.assert_allclose(np.trapezoid(line, x), gaussian_width(depth, fwhm), rtol=1e-9)
    line = 0.6 * voigt_profile(x, 0.5, 0.2) / voigt_profile(0.0, 0.5, 0.2)
    wing = 0.6 * 0.2 / (np.pi * 400.0) / voigt_profile(0.0, 0.5, 0.2)  # beyond the ends: gamma / (pi x) a side
    np.testing.assert_allclose(np.trapezoid(line, x) + wing, voigt_width(0.6, 0.5, 0.2), rtol=1e-6)


def test_photon_error_is_that_of_cayrel():
    """Cayrel 1988: 1.5 sqrt(FWHM pixel) / (S/N)."""
    np.testing.assert_allclose(photon_error(0.12, 0.03, 80.0), 1.5 * np.sqrt(0.12 * 0.03) / 80.0, rtol=0.003)
    ratio = photon_error(1.0, 1.0, 1.0) / photon_error(1.0, 1.0, 1.0, free_width=False)
    np.testing.assert_allclose(ratio, np.sqrt(1.5))
