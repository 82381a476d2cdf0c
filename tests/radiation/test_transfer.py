"""Transfer: fast kernel against the dense reference, limits known on paper, derivative against differences."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.radiation.planck import band_planck, planck
from specsolve.radiation.transfer import ANGLE_COSINES, ANGLE_WEIGHTS, emergent_intensity, solve_reference
from specsolve.radiation.transfer_kernels import flux_response, solve_channels


@pytest.fixture
def slab():
    column_mass = np.logspace(-3, 2, 60)
    temperature = 5000.0 * (0.75 * (column_mass + 2.0 / 3.0)) ** 0.25
    base = np.array([1e-3, 0.3, 1.0, 500.0])[:, None]
    opacity = base * (1.0 + (temperature / 6000.0) ** 2)
    destruction = np.array([0.9, 1.0, 0.2, 0.02])[:, None] * np.ones_like(temperature)
    thermal = (temperature / 5000.0) ** np.array([2.0, 4.0, 6.0, 5.0])[:, None]
    return column_mass, temperature, opacity, destruction, thermal


def test_kernel_equals_dense_reference(slab):
    column_mass, _, opacity, destruction, thermal = slab
    field = solve_channels(opacity, destruction, thermal, column_mass)
    assert field["unsettled"] == 0
    for k in range(len(opacity)):
        top = 0.5 * opacity[k, 0] * column_mass[0]
        mean, flux, surface = solve_reference(field["steps"][k], top, destruction[k], thermal[k])
        np.testing.assert_allclose(field["mean"][k], mean, rtol=1e-6)
        np.testing.assert_allclose(field["surface"][k], surface, rtol=1e-6)
        np.testing.assert_allclose(field["flux"][k], flux, rtol=1e-5, atol=1e-7 * surface)


def test_linear_source_gives_eddington_barbier():
    """S = a + b tau emerges as a + b mu, whatever the depth grid (Mihalas 1978, eq. 2-38)."""
    column_mass = np.logspace(-6, 2, 200)
    opacity = np.ones((1, 200))
    intensity = emergent_intensity(opacity, (1.0 + 2.0 * column_mass)[None], column_mass, np.array([0.2, 0.5, 1.0]))
    np.testing.assert_allclose(intensity[0], [1.4, 2.0, 3.0], rtol=2e-4)


def test_isothermal_scattering_slab_thermalises():
    """sqrt(eps) law: J(0) / B = sqrt(eps) / (1 + sqrt(eps)) within the angle quadrature (Mihalas 1978, ch. 6)."""
    column_mass = np.logspace(-7, 6, 400)
    eps = 1e-4
    field = solve_channels(np.ones((1, 400)), np.full((1, 400), eps), np.ones((1, 400)), column_mass)
    assert field["mean"][0, 0] == pytest.approx(np.sqrt(eps), rel=0.05)


def test_flux_response_against_differences(slab):
    column_mass, temperature, opacity, destruction, _thermal = slab

    def state(t):
        scale = (1.0 + (t / 6000.0) ** 2) / (1.0 + (temperature / 6000.0) ** 2)
        return (
            opacity * scale,
            np.clip(destruction * (t / temperature) ** 0.5, 0, 1.0),
            (t / 5000.0) ** np.array([2.0, 4.0, 6.0, 5.0])[:, None],
        )

    destruction = destruction * 0.9
    base = solve_channels(*state(temperature), column_mass)
    step = 1e-5
    up, down = state(temperature * (1 + step)), state(temperature * (1 - step))
    slopes = [(u - d) / (2 * step) for u, d in zip(up, down, strict=True)]
    chi, eps, b = state(temperature)
    d_flux, d_net = flux_response(
        column_mass, base["steps"], eps, b, *slopes, base["eddington"], base["mean"], base["flux"], base["edges"]
    )
    flux, _net = _moment_flux(chi, eps, b, column_mass, base)
    np.testing.assert_allclose(flux, base["flux"].sum(axis=0), rtol=1e-6)
    for j in (0, 1, 20, 40, 58, 59):
        shifted = []
        for sign in (1, -1):
            t = temperature.copy()
            t[j] *= 1 + sign * 2e-3
            shifted.append(_moment_flux(*state(t), column_mass, base))  # same Eddington factors, dense algebra
        expected, expected_net = ((up - down) / 4e-3 for up, down in zip(*shifted, strict=True))
        scale = np.abs(expected).max()
        np.testing.assert_allclose(d_flux[:, j], expected, rtol=5e-3, atol=2e-3 * scale)
        np.testing.assert_allclose(d_net[:, j], expected_net, rtol=5e-3, atol=2e-3 * np.abs(expected_net).max())


def _moment_flux(chi, eps, b, column_mass, base):
    steps = 0.5 * (chi[:, 1:] + chi[:, :-1]) * np.diff(column_mass)
    n = len(column_mass)
    flux, net = np.zeros(n - 1), np.zeros(n)
    for k in range(len(chi)):
        p, f, g = steps[k], base["eddington"][k], base["edges"][k]
        q = np.concatenate([[0.5 * p[0]], 0.5 * (p[1:] + p[:-1]), [0.5 * p[-1]]])
        matrix, right = np.zeros((n, n)), q * eps[k] * b[k]
        for d in range(n):
            matrix[d, d] += q[d] * eps[k, d]
            if d > 0:
                matrix[d, d] += f[d] / p[d - 1]
                matrix[d, d - 1] -= f[d - 1] / p[d - 1]
            if d < n - 1:
                matrix[d, d] += f[d] / p[d]
                matrix[d, d + 1] -= f[d + 1] / p[d]
        matrix[0, 0] += g[0]
        matrix[-1, -1] += g[1]
        right[-1] += 0.5 * b[k, -1] + (b[k, -1] - b[k, -2]) / (3 * p[-1])
        mean = np.linalg.solve(matrix, right)
        flux += np.diff(f * mean) / p
        net += q * eps[k] * (mean - b[k])
    return flux, net


def test_planck_integral_is_stefan_boltzmann():
    """Integral of B over all wavelengths is sigma T^4 / pi, sigma from CODATA 2018."""
    edges = np.geomspace(1e-6, 1.0, 160)
    for temperature in (3500.0, 5772.0, 12000.0):
        total = band_planck(edges, np.array([temperature])).sum()
        assert np.pi * total == pytest.approx(5.670374419e-5 * temperature**4, rel=2e-5)


def test_planck_against_astropy():
    from astropy import units as u
    from astropy.modeling.physical_models import BlackBody

    body = BlackBody(temperature=5772 * u.K, scale=1 * u.erg / (u.s * u.cm**2 * u.sr * u.cm))
    assert planck(5e-5, 5772.0) == pytest.approx(body(5e-5 * u.cm).value, rel=1e-7)


def test_angle_quadrature():
    assert np.sum(ANGLE_WEIGHTS * ANGLE_COSINES) == pytest.approx(0.5)
    assert np.sum(ANGLE_WEIGHTS * ANGLE_COSINES**2) == pytest.approx(1 / 3)
