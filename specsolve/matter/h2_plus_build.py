"""Absorption by H + H+ pairs and H2+, computed from the exact molecule of one electron.

The two lowest states, 1s sigma_g and 2p sigma_u, are found by a variational calculation in prolate spheroidal
coordinates; absorption is quasi-static (Bates 1952, MNRAS 112, 40): at each distance of the nuclei light is absorbed at
the frequency of the gap, so one sum covers bound and free pairs. The motion of the nuclei is classical: from 3000 to
10 000 K that gives the number of bound pairs within 8 % of the sum over the exact levels (a test repeats it). Used by
`specsolve.matter.continuum_build`.
"""

from __future__ import annotations

import numpy as np

from specsolve.constants import (
    BOHR_RADIUS_CM,
    BOLTZMANN_EV_K,
    ELECTRON_CHARGE_ESU,
    ELECTRON_MASS_G,
    HC_EV_CM,
    LIGHT_SPEED_CM_S,
    RYDBERG_EV,
)

HARTREE_EV = 2.0 * RYDBERG_EV
N_RADIAL, N_ANGULAR = 14, 9  # basis: exp(-a (xi - 1)) L_i(2 a (xi - 1)) P_j(eta)
N_QUADRATURE = 48
DISTANCES = np.geomspace(0.7, 18.0, 72)  # Bohr radii


def two_centre_states(distance: float) -> tuple[float, float, float]:
    """Energies of 1s sigma_g and 2p sigma_u with nuclear repulsion, and the dipole moment between them.

    Parameters
    ----------
    distance : float
        Between the protons [Bohr radii].

    Returns
    -------
    energy_g, energy_u : float
        [Hartree], -0.5 for a separated atom.
    dipole : float
        Along the axis [e a0].
    """
    scale = max(0.5 * distance, 0.6)  # decay exp(-r) of the atom: exp(-R xi / 2)
    points, weights = np.polynomial.laguerre.laggauss(N_QUADRATURE)
    xi = 1.0 + points / (2.0 * scale)
    radial_weight = weights / (2.0 * scale)  # integrates exp(-2 a (xi - 1)) times a polynomial
    radial, d_radial = [], []
    for i in range(N_RADIAL):
        laguerre = np.polynomial.laguerre.Laguerre.basis(i)
        value = laguerre(points)
        radial.append(value)
        d_radial.append(2.0 * scale * laguerre.deriv()(points) - scale * value)
    eta, angular_weight = np.polynomial.legendre.leggauss(N_QUADRATURE)
    radial, d_radial = np.array(radial), np.array(d_radial)

    def moment(left, right, factor):
        return (left * radial_weight * factor) @ right.T

    states = []
    for parity in (0, 1):
        angular, d_angular = [], []
        for j in range(parity, 2 * N_ANGULAR, 2):
            legendre = np.polynomial.legendre.Legendre.basis(j)
            angular.append(legendre(eta))
            d_angular.append(legendre.deriv()(eta))
        angular, d_angular = np.array(angular), np.array(d_angular)
        ones = (angular * angular_weight) @ angular.T
        squares = (angular * angular_weight * eta**2) @ angular.T
        slopes = (d_angular * angular_weight * (1.0 - eta**2)) @ d_angular.T
        half = 0.5 * distance
        overlap = half**3 * (
            np.kron(moment(radial, radial, xi**2), ones) - np.kron(moment(radial, radial, 1.0), squares)
        )
        kinetic = (
            0.5
            * half
            * (np.kron(moment(d_radial, d_radial, xi**2 - 1.0), ones) + np.kron(moment(radial, radial, 1.0), slopes))
        )
        attraction = -2.0 * half**2 * np.kron(moment(radial, radial, xi), ones)
        cholesky = np.linalg.cholesky(overlap)
        inverse = np.linalg.inv(cholesky)
        energies, vectors = np.linalg.eigh(inverse @ (kinetic + attraction) @ inverse.T)
        vector = (inverse.T @ vectors[:, 0]).reshape(N_RADIAL, -1)
        states.append((energies[0] + 1.0 / distance, vector, angular))
    (energy_g, vector_g, angular_g), (energy_u, vector_u, angular_u) = states
    half = 0.5 * distance
    # z = R/2 xi eta, volume element (R/2)^3 (xi^2 - eta^2)
    dipole = half**4 * (
        _bilinear(vector_g, vector_u, moment(radial, radial, xi**3), (angular_g * angular_weight * eta) @ angular_u.T)
        - _bilinear(vector_g, vector_u, moment(radial, radial, xi), (angular_g * angular_weight * eta**3) @ angular_u.T)
    )
    return float(energy_g), float(energy_u), abs(dipole)


def _bilinear(left: np.ndarray, right: np.ndarray, radial: np.ndarray, angular: np.ndarray) -> float:
    return float(np.einsum("ij,kl,ik,jl", left, right, radial, angular))


def log_absorption(log_temperature: np.ndarray, log_wavelength: np.ndarray) -> np.ndarray:
    """ln of the absorption by H + H+ per H I and per proton.

    Parameters
    ----------
    log_temperature, log_wavelength : ndarray, shapes (n_temperature,), (n_wavelength,)
        [K], [cm], natural logarithms.

    Returns
    -------
    ndarray, shape (n_temperature, n_wavelength)
        [cm^5], without the correction for stimulated emission. With f = 2/3 dE |z|^2 the oscillator strength and U the
        potential of the lower state: pi e^2/(m c) f (1/2) 4 pi R^2 exp(-U/kT) |dR/d nu|; half of all pairs are sigma_g.
    """
    from scipy.interpolate import CubicSpline

    states = np.array([two_centre_states(distance) for distance in DISTANCES])
    gap, potential = states[:, 1] - states[:, 0], states[:, 0] + 0.5  # Hartree
    strength = 2.0 / 3.0 * gap * states[:, 2] ** 2
    frequency = gap * HARTREE_EV / HC_EV_CM * LIGHT_SPEED_CM_S
    log_frequency = np.log(frequency)
    slope = CubicSpline(np.log(DISTANCES), log_frequency)(np.log(DISTANCES), 1)
    cross = (
        np.pi * ELECTRON_CHARGE_ESU**2 / (ELECTRON_MASS_G * LIGHT_SPEED_CM_S)
        * strength * 2.0 * np.pi * (DISTANCES * BOHR_RADIUS_CM) ** 3 / (-slope * frequency)
    )  # fmt: skip
    wanted = np.log(LIGHT_SPEED_CM_S) - log_wavelength
    order = slice(None, None, -1)  # frequency falls with distance
    log_cross = CubicSpline(log_frequency[order], np.log(cross)[order])(wanted)
    depth = CubicSpline(log_frequency[order], potential[order])(wanted) * HARTREE_EV
    return log_cross - depth / (BOLTZMANN_EV_K * np.exp(log_temperature)[:, None])
