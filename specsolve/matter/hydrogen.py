"""The hydrogen atom where it is known exactly: bound-free Gaunt factors, oscillator strengths, Rayleigh scattering."""

from __future__ import annotations

from functools import cache

import numpy as np

from specsolve.constants import HC_EV_CM, THOMSON_CM2
from specsolve.matter.partition import ionization_energy

KRAMERS_CM2 = 7.907e-18  # threshold cross-section of n = 1 without Gaunt factor: 64 alpha pi a0^2 / (3 sqrt 3)
HIGHEST_EXACT_N = 10  # above, the asymptotic expansion is good to 1e-3
LEAST_EXCESS = 1e-5  # of the free electron, in units of the binding energy; below, the threshold value is meant
BOUND_STRENGTHS = 60  # bound states summed in the polarizability
CONTINUUM_POINTS = 40  # of the integral over free states


def gaunt_factor(n: int, excess: np.ndarray) -> np.ndarray:
    """Bound-free Gaunt factor of hydrogen, averaged over the substates of a level.

    Parameters
    ----------
    n : int
        Principal quantum number.
    excess : ndarray
        Energy of the free electron in units of the binding energy of the level; not negative.

    Returns
    -------
    ndarray
        Menzel & Pekeris (1935, MNRAS 96, 77): up to n = 10 their exact expression with hypergeometric polynomials,
        above their asymptotic expansion.

    Examples
    --------
    >>> round(float(gaunt_factor(1, np.array([0.0]))[0]), 3)
    0.797
    """
    excess = np.asarray(excess, dtype=float)
    if n > HIGHEST_EXACT_N:
        root = (n * (excess + 1.0)) ** (2.0 / 3.0)
        return 1.0 + 0.1728 * (excess - 1.0) / root - 0.0496 * (excess**2 + 4.0 / 3.0 * excess + 1.0) / root**2
    k = n / np.sqrt(np.maximum(excess, LEAST_EXCESS))  # the free state has the quantum number i k
    z = -4.0j * n * k / (n - 1.0j * k) ** 2
    difference = _polynomial(n - 1, -1.0j * k, z) ** 2 - _polynomial(n, 1.0 - 1.0j * k, z) ** 2
    damping = np.exp(-4.0 * k * np.arctan(n / k)) / -np.expm1(-2.0 * np.pi * k)
    return np.pi * np.sqrt(3.0) * n * k / np.sqrt(n**2 + k**2) * damping * np.abs(difference)


def _polynomial(degree: int, b: np.ndarray, z: np.ndarray) -> np.ndarray:
    """Hypergeometric F(-degree, b; 1; z), a polynomial."""
    term = np.ones_like(z)
    total = np.ones_like(z)
    for j in range(degree):
        term = term * (j - degree) * (b + j) * z / (1.0 + j) ** 2
        total = total + term
    return total


def lyman_strengths(n: np.ndarray) -> np.ndarray:
    """Absorption oscillator strengths of 1s - np; Menzel & Pekeris 1935, exact."""
    n = np.asarray(n, dtype=float)
    ratio = np.exp(2.0 * n * np.log((n - 1.0) / (n + 1.0)))  # ((n-1)/(n+1))^(2n)
    return 256.0 / 3.0 * n**5 * ratio / ((n - 1.0) ** 4 * (n + 1.0) ** 4)


@cache
def _dipole_spectrum() -> tuple[np.ndarray, np.ndarray]:
    """Energies in units of the ionization energy, and strengths, of all transitions from the ground state.

    Bound states one by one, those above the last lumped at the limit, free states by Gauss quadrature in E^-1.
    """
    n = np.arange(2, BOUND_STRENGTHS + 1)
    energies, strengths = 1.0 - 1.0 / n**2, lyman_strengths(n)
    # f_n goes as 1.56 n^-3: the sum beyond N is f_N N^3 / (2 (N + 1/2)^2)
    rest = strengths[-1] * BOUND_STRENGTHS**3 / (2.0 * (BOUND_STRENGTHS + 0.5) ** 2)
    points, weights = np.polynomial.legendre.leggauss(CONTINUUM_POINTS)
    inverse = 0.5 * (points + 1.0)  # 1 / E from 0 to 1
    free_energies = 1.0 / inverse
    density = 16.0 / (3.0 * np.pi * np.sqrt(3.0)) * inverse**3 * gaunt_factor(1, free_energies - 1.0)  # df/dE
    free_strengths = 0.5 * weights * density * free_energies**2
    return (
        np.concatenate([energies, [1.0], free_energies]),
        np.concatenate([strengths, [rest], free_strengths]),
    )


def rayleigh_hydrogen(wavelength_cm: np.ndarray) -> np.ndarray:
    """Rayleigh scattering by hydrogen in its ground state, up to the far wing of Lyman alpha.

    Parameters
    ----------
    wavelength_cm : ndarray
        In vacuum [cm], longer than Lyman alpha.

    Returns
    -------
    ndarray
        [cm^2]: Thomson's cross-section times the square of sum f E^2 / (E_k^2 - E^2), the sum over all bound and free
        states with exact strengths (Kramers & Heisenberg 1925).

    Examples
    --------
    >>> print(f"{rayleigh_hydrogen(np.array([5e-5]))[0]:.2e}")
    1.03e-27
    """
    photon = HC_EV_CM / np.asarray(wavelength_cm, dtype=float)[..., None] / ionization_energy("H I")
    energies, strengths = _dipole_spectrum()
    amplitude = np.sum(strengths * photon**2 / (energies**2 - photon**2), axis=-1)
    return THOMSON_CM2 * amplitude**2
