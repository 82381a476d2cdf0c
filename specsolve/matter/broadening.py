"""Broadening of spectral lines: Doppler, radiative, by hydrogen and helium atoms, by electrons.

All damping widths are full widths at half maximum in angular frequency [rad/s]; `damping_parameter` divides them by
4 pi Doppler widths, which makes the half width that the Voigt function wants.
"""

from __future__ import annotations

import numpy as np
from scipy.special import gamma as gamma_function

from specsolve.constants import (
    ATOMIC_MASS_G,
    BOHR_RADIUS_CM,
    BOLTZMANN_ERG_K,
    ELECTRON_CHARGE_ESU,
    ELECTRON_MASS_G,
    LIGHT_SPEED_CM_S,
    PLANCK_ERG_S,
    RYDBERG_EV,
)

HYDROGEN_MASS_G = 1.008 * ATOMIC_MASS_G
IRON_MASS_G = 55.845 * ATOMIC_MASS_G
REFERENCE_SPEED_CM_S = 1.0e6
"""Collision speed to which tabulated cross-sections refer: 10 km/s; Anstee & O'Mara 1995, MNRAS 276, 859."""
HELIUM_TO_HYDROGEN = 0.41
"""Width per helium atom over width per hydrogen atom: ratio of polarizabilities to the 2/5 and of speeds to the 3/5
power (van der Waals broadening; polarizabilities 1.38 and 4.5 a0^3, textbook values)."""
UNSOLD_FACTOR = 1.4
"""Times the van der Waals width of Unsoeld 1955, where no cross-section is known: the median over the Fe I lines of
Barklem, Piskunov & O'Mara 2000 between 3500 and 10 000 Angstrom, measured here (a test repeats it)."""
HYDROGEN_POLARIZABILITY_A03 = 4.5  # a0^3, ground state of hydrogen, exact textbook value
STARK_TEMPERATURE_K = 1.0e4


def doppler_width(temperature, vmic_km_s, mass_g: float = IRON_MASS_G):
    """Doppler width as a fraction of the wavelength: sqrt(2 k T / m + xi^2) / c.

    Parameters
    ----------
    temperature : ndarray, shape (n,)
        [K].
    vmic_km_s : float
        Microturbulence [km/s].
    mass_g : float
        Mass of the atom [g].

    Returns
    -------
    ndarray, shape (n,)

    Examples
    --------
    >>> round(float(doppler_width(5772.0, 1.0)) * 1e6, 2)
    5.51
    """
    thermal = 2.0 * BOLTZMANN_ERG_K * np.asarray(temperature, float) / mass_g
    return np.sqrt(thermal + (vmic_km_s * 1.0e5) ** 2) / LIGHT_SPEED_CM_S


def mean_speed(temperature, mass_g: float, perturber_mass_g: float = HYDROGEN_MASS_G):
    """Mean relative speed of two particles [cm/s]: sqrt(8 k T / (pi mu))."""
    reduced = mass_g * perturber_mass_g / (mass_g + perturber_mass_g)
    return np.sqrt(8.0 * BOLTZMANN_ERG_K * np.asarray(temperature, float) / (np.pi * reduced))


def hydrogen_width(sigma, alpha, temperature, mass_g: float = IRON_MASS_G):
    """Full width per hydrogen atom from a cross-section and its velocity exponent.

    Parameters
    ----------
    sigma : float or ndarray
        Cross-section at 10 km/s [a0^2].
    alpha : float or ndarray
        sigma(v) = sigma (v / 10 km/s)^-alpha.
    temperature : ndarray
        [K].
    mass_g : float
        [g].

    Returns
    -------
    ndarray
        [rad cm3/s]; Anstee & O'Mara 1995, eq. 5 (there for the half width).

    Examples
    --------
    >>> round(float(np.log10(hydrogen_width(211.0, 0.251, 1e4))), 2)
    -7.81
    """
    alpha = np.asarray(alpha, float)
    shape = (4.0 / np.pi) ** (0.5 * alpha) * gamma_function(2.0 - 0.5 * alpha)
    speed = mean_speed(temperature, mass_g) / REFERENCE_SPEED_CM_S
    area = np.asarray(sigma, float) * BOHR_RADIUS_CM**2
    return 2.0 * shape * REFERENCE_SPEED_CM_S * area * speed ** (1.0 - alpha)


def effective_quantum_number_squared(energy_ev, ionization_ev, charge):
    """n*^2 = Z^2 Ry / (I - E); Z is 1 for a neutral atom.

    Levels above 95 % of the way to the limit (or beyond it, when they lead to another core) count as at 95 %.
    """
    binding = np.maximum(ionization_ev - np.asarray(energy_ev, float), 0.05 * ionization_ev)
    return charge**2 * RYDBERG_EV / binding


def unsold_width(lower_ev, upper_ev, ionization_ev, charge, temperature, mass_g: float = IRON_MASS_G):
    """Full width per hydrogen atom in Unsoeld's estimate, times `UNSOLD_FACTOR`.

    Parameters
    ----------
    lower_ev, upper_ev, ionization_ev : float or ndarray
        Energies of the levels and of ionization [eV].
    charge : int
        1 for a neutral atom, 2 for a singly ionized one.
    temperature : ndarray
        [K].

    Returns
    -------
    ndarray
        [rad cm3/s]: 8.08 C6^(2/5) v^(3/5), C6 = e^2 alpha_H (<r_u^2> - <r_l^2>) / hbar with hydrogenic
        <r^2> = (5 n*^4 + n*^2) a0^2 / (2 Z^2) for l = 0; Unsoeld 1955, Physik der Sternatmosphaeren.
    """
    radii = [
        0.5 * n2 * (5.0 * n2 + 1.0) / charge**2
        for n2 in (
            effective_quantum_number_squared(upper_ev, ionization_ev, charge),
            effective_quantum_number_squared(lower_ev, ionization_ev, charge),
        )
    ]
    spread = np.maximum(radii[0] - radii[1], 1.0) * BOHR_RADIUS_CM**2
    hbar = PLANCK_ERG_S / (2.0 * np.pi)
    c6 = ELECTRON_CHARGE_ESU**2 * HYDROGEN_POLARIZABILITY_A03 * BOHR_RADIUS_CM**3 * spread / hbar
    return UNSOLD_FACTOR * 8.08 * c6**0.4 * mean_speed(temperature, mass_g) ** 0.6


def stark_width(upper_ev, ionization_ev, charge):
    """Full width per electron at 10 000 K by the quadratic Stark effect, an estimate good to a factor of about three.

    Parameters
    ----------
    upper_ev, ionization_ev : float or ndarray
        [eV].
    charge : int
        1 for a neutral atom, 2 for a singly ionized one.

    Returns
    -------
    ndarray
        [rad cm3/s]: 11.37 C4^(2/3) v^(1/3) (impact theory, Mihalas 1978, Stellar Atmospheres, ch. 9) with
        C4 = e^2 alpha / (2 hbar) and the polarizability scaled from hydrogen, alpha = 4.5 n*^6 / Z^4 a0^3 (own
        approximation).
    """
    n2 = effective_quantum_number_squared(upper_ev, ionization_ev, charge)
    polarizability = HYDROGEN_POLARIZABILITY_A03 * n2**3 / charge**4 * BOHR_RADIUS_CM**3
    c4 = ELECTRON_CHARGE_ESU**2 * polarizability * np.pi / PLANCK_ERG_S
    speed = np.sqrt(8.0 * BOLTZMANN_ERG_K * STARK_TEMPERATURE_K / (np.pi * ELECTRON_MASS_G))
    return 11.37 * c4 ** (2.0 / 3.0) * speed ** (1.0 / 3.0)


def classical_radiative_width(wavelength_cm):
    """Classical radiative full width 8 pi^2 e^2 / (3 m c lambda^2) [rad/s].

    Examples
    --------
    >>> round(float(classical_radiative_width(5e-5)) / 1e7, 1)
    8.9
    """
    constant = 8.0 * np.pi**2 * ELECTRON_CHARGE_ESU**2 / (3.0 * ELECTRON_MASS_G * LIGHT_SPEED_CM_S)
    return constant / np.asarray(wavelength_cm, float) ** 2


def total_width(radiative, hydrogen, stark, temperature, h1, helium, electron_density):
    """Total damping full width [rad/s].

    Parameters
    ----------
    radiative : float
        [rad/s].
    hydrogen : ndarray, shape (n,)
        Width per hydrogen atom at each temperature [rad cm3/s].
    stark : float
        Width per electron at 10 000 K [rad cm3/s]; goes as T^(1/6).
    temperature : ndarray, shape (n,)
        [K].
    h1, helium, electron_density : ndarray, shape (n,)
        Densities of H I, He I and electrons [cm-3].

    Returns
    -------
    ndarray, shape (n,)
    """
    atoms = h1 + HELIUM_TO_HYDROGEN * helium
    return radiative + hydrogen * atoms + stark * (temperature / STARK_TEMPERATURE_K) ** (1.0 / 6.0) * electron_density


def damping_parameter(width, doppler_fraction, wavelength_cm):
    """Voigt parameter a = Gamma / (4 pi Delta nu_D)."""
    return width * wavelength_cm / (4.0 * np.pi * doppler_fraction * LIGHT_SPEED_CM_S)
