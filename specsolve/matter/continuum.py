"""Continuous absorption and scattering of the gas.

H- bound-free and free-free (John 1988, A&A 193, 189), hydrogen bound-free and free-free, H2+ and colliding H + H+, He-
free-free, bound-free of neutral atoms, Rayleigh scattering by H, He and H2, Thomson scattering. Lines are elsewhere.

Valid from 0.125 um (the H- fit) to 100 um. The free-free fit of H- was made for 1400 to 10 080 K and wavelengths above
0.1823 um. Above 10 080 K its expressions, nearly linear in 1/T, are continued: there hydrogen itself absorbs more than
ten times as much. Below 0.1823 um it is continued in proportion to wavelength, the trend of the last two rows of Bell &
Berrington (1987, J. Phys. B 20, 801): there the bound-free part is more than thirty times larger.
"""

from __future__ import annotations

from functools import cache, lru_cache
from typing import NamedTuple

import numpy as np

from specsolve.constants import (
    BOLTZMANN_ERG_K,
    ELECTRON_CHARGE_ESU,
    ELECTRON_MASS_G,
    LIGHT_SPEED_CM_S,
    PLANCK_ERG_S,
    RADIATION_C2_CM_K,
    THOMSON_CM2,
)
from specsolve.matter.equation_of_state import Gas
from specsolve.matter.hydrogen import rayleigh_hydrogen
from specsolve.matter.photoionization import TABLE_PATH, bound_free

SHORTEST_CM, LONGEST_CM = 0.125e-4, 100e-4  # validity [cm]
CM_MICROMETRE = 1e4

# John 1988, A&A 193, 189, tables 2 and 3.
H_MINUS_THRESHOLD_UM = 1.6419
H_MINUS_BOUND_FREE = np.array([152.519, 49.534, -118.858, 92.536, -34.194, 4.982])
H_MINUS_FREE_FREE_SPLIT_UM = 0.3645
H_MINUS_FREE_FREE_SHORTEST_UM = 0.1823
H_MINUS_FREE_FREE_LONG = np.array(  # rows n = 1..6, columns A..F; above 0.3645 um
    [
        [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
        [2483.346, 285.827, -2054.291, 2827.776, -1341.537, 208.952],
        [-3449.889, -1158.382, 8746.523, -11485.632, 5303.609, -812.939],
        [2200.040, 2427.719, -13651.105, 16755.524, -7510.494, 1132.738],
        [-696.271, -1841.400, 8624.970, -10051.530, 4400.067, -655.020],
        [88.283, 444.517, -1863.864, 2095.288, -901.788, 132.985],
    ]
)
H_MINUS_FREE_FREE_SHORT = np.array(  # 0.1823 to 0.3645 um
    [
        [518.1021, -734.8666, 1021.1775, -479.0721, 93.1373, -6.4285],
        [473.2636, 1443.4137, -1977.3395, 922.3575, -178.9275, 12.3600],
        [-482.2089, -737.1616, 1096.8827, -521.1341, 101.7963, -7.0571],
        [115.5291, 169.6374, -245.6490, 114.2430, -21.9972, 1.5097],
        [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
        [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    ]
)
THETA_K = 5040.0  # K, theta = 5040 K / T as in John 1988

# Rayleigh scattering by H2, wavelength in Angstrom: coefficients of l^-4, l^-6, l^-8 [cm^2]; Dalgarno & Williams 1962,
# ApJ 136, 690.
RAYLEIGH_H2 = (8.14e-13, 1.28e-6, 1.61)
# Helium: static polarizability 1.38319 a.u. (Pachucki & Sapirstein 2000, Phys. Rev. A 63, 012504) and dispersion
# 1 + (494 A / l)^2; Dalgarno & Kingston 1960, Proc. R. Soc. A 259, 424, from memory.
RAYLEIGH_HE = 5.484e-14
RAYLEIGH_HE_DISPERSION_A2 = 2.44e5


def h_minus_bound_free(wavelength_cm: np.ndarray) -> np.ndarray:
    """Photodetachment cross-section of H- (John 1988, eqs. 4 and 5).

    Parameters
    ----------
    wavelength_cm : ndarray, shape (n_w,)
        In vacuum [cm], at least 0.125e-4.

    Returns
    -------
    ndarray, shape (n_w,)
        [cm^2], per H- ion, without stimulated emission; zero beyond 1.6419 um.

    Examples
    --------
    >>> print(f"{h_minus_bound_free(np.array([0.85e-4]))[0]:.2e}")
    3.99e-17
    """
    x = np.asarray(wavelength_cm) * CM_MICROMETRE
    depth = np.sqrt(np.maximum(1.0 / x - 1.0 / H_MINUS_THRESHOLD_UM, 0.0))
    powers = depth[..., None] ** np.arange(6)
    return 1e-18 * x**3 * depth**3 * (powers @ H_MINUS_BOUND_FREE)


def h_minus_free_free(wavelength_cm: np.ndarray, temperature: np.ndarray) -> np.ndarray:
    """Free-free absorption of H- (John 1988, eq. 6), stimulated emission included.

    Parameters
    ----------
    wavelength_cm : ndarray, shape (n_w,)
        In vacuum [cm].
    temperature : ndarray, shape (n,)
        [K]

    Returns
    -------
    ndarray, shape (n_w, n)
        [cm^4 dyn^-1] per neutral hydrogen atom and unit electron pressure.

    Examples
    --------
    >>> print(f"{h_minus_free_free(np.array([5.063e-5]), np.array([5040.0]))[0, 0]:.2e}")
    1.96e-27
    """
    theta = THETA_K / np.asarray(temperature)
    return _h_minus_free_free_terms(np.asarray(wavelength_cm, dtype=float).tobytes()) @ (
        theta ** (np.arange(2, 8)[:, None] / 2.0)
    )


@lru_cache(maxsize=64)
def _h_minus_free_free_terms(wavelength_bytes: bytes) -> np.ndarray:
    wavelength_um = np.frombuffer(wavelength_bytes) * CM_MICROMETRE
    x = np.maximum(wavelength_um, H_MINUS_FREE_FREE_SHORTEST_UM)
    powers = np.stack([x**2, x**0, x**-1, x**-2, x**-3, x**-4], axis=-1)
    long, short = powers @ H_MINUS_FREE_FREE_LONG.T, powers @ H_MINUS_FREE_FREE_SHORT.T
    terms = np.where(x[:, None] > H_MINUS_FREE_FREE_SPLIT_UM, long, short)
    return 1e-29 * terms * (wavelength_um / x)[:, None]


class _Tables(NamedTuple):
    """ln T, ln wavelength, and the tabulated logarithms, each (n_temperature, n_wavelength)."""

    log_temperature: np.ndarray
    log_wavelength: np.ndarray
    logs: np.ndarray


@cache
def _tables() -> _Tables:
    with np.load(TABLE_PATH) as data:
        logs = np.stack([data["log_hydrogen_gaunt"], data["log_helium_minus_cm5"], data["log_h2_plus_cm5"]])
        return _Tables(data["log_temperature"], data["log_wavelength_cm"], logs)


def _weights(axis: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Weights (n_values, n_axis) of interpolation on an equidistant axis: cubic, first derivative continuous."""
    position = (values - axis[0]) / (axis[1] - axis[0])
    left = position.astype(int)
    if np.any((position < 1.0) | (left > len(axis) - 3)):
        raise ValueError("outside the tables of continuous absorption (1650 to 30 000 K, 0.1 to 100 um)")
    t = position - left
    four = np.stack(
        [
            -0.5 * t * (1.0 - t) ** 2,
            1.0 + t * t * (1.5 * t - 2.5),
            t * (0.5 + t * (2.0 - 1.5 * t)),
            -0.5 * t * t * (1.0 - t),
        ]
    )
    weights = np.zeros((len(values), len(axis)))
    for i in range(4):
        weights[np.arange(len(values)), left + i - 1] = four[i]
    return weights


@lru_cache(maxsize=64)
def _tables_at(wavelength_bytes: bytes) -> np.ndarray:
    """The tables at given wavelengths, (n_tables, n_w, n_temperature)."""
    tables = _tables()
    weights = _weights(tables.log_wavelength, np.log(np.frombuffer(wavelength_bytes)))
    return np.einsum("wl,ktl->kwt", weights, tables.logs)


def rayleigh(wavelength_cm: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Rayleigh scattering cross-sections of H I, He I and H2 [cm^2], each of the shape of `wavelength_cm` [cm]."""
    inverse = 1e-16 / np.asarray(wavelength_cm) ** 2  # 1 / l^2 with l in Angstrom
    a, b, c = RAYLEIGH_H2
    h2 = a * inverse**2 + b * inverse**3 + c * inverse**4
    helium = RAYLEIGH_HE * (inverse * (1.0 + RAYLEIGH_HE_DISPERSION_A2 * inverse)) ** 2
    return rayleigh_hydrogen(wavelength_cm), helium, h2


# Free-free absorption of hydrogen without Gaunt factor: 4 e^6 / (3 m h c) sqrt(2 pi / (3 k m)) [cm^5 K^1/2 s^-3].
FREE_FREE_CONSTANT = (
    4.0
    * ELECTRON_CHARGE_ESU**6
    / (3.0 * ELECTRON_MASS_G * PLANCK_ERG_S * LIGHT_SPEED_CM_S)
    * np.sqrt(2.0 * np.pi / (3.0 * BOLTZMANN_ERG_K * ELECTRON_MASS_G))
)


def continuum_opacity(wavelength_cm: np.ndarray, gas: Gas) -> tuple[np.ndarray, np.ndarray]:
    """Continuous absorption and scattering.

    Parameters
    ----------
    wavelength_cm : ndarray, shape (n_w,)
        In vacuum [cm], 0.125e-4 to 100e-4.
    gas : Gas

    Returns
    -------
    absorption, scattering : ndarray, shape (n_w, n)
        [cm^2 g^-1]; absorption is corrected for stimulated emission.

    Raises
    ------
    ValueError
        Wavelength outside the validity.

    Examples
    --------
    >>> from specsolve.matter.composition import composition_for
    >>> from specsolve.matter.equation_of_state import equilibrium
    >>> gas = equilibrium(np.array([6400.0]), np.array([1.1e5]), composition_for(0.0))
    >>> absorption, scattering = continuum_opacity(np.array([5e-5]), gas)
    >>> bool(0.5 < absorption[0, 0] < 1.5)
    True
    """
    wavelength_cm = np.atleast_1d(np.asarray(wavelength_cm, dtype=float))
    if not np.all((wavelength_cm >= SHORTEST_CM) & (wavelength_cm <= LONGEST_CM)):
        raise ValueError(
            f"wavelengths {wavelength_cm.min():.3g} to {wavelength_cm.max():.3g} cm leave the validity of the "
            f"continuous opacity ({SHORTEST_CM:.3g} to {LONGEST_CM:.3g} cm)"
        )
    frequency = LIGHT_SPEED_CM_S / wavelength_cm[:, None]
    stimulated = -np.expm1(-RADIATION_C2_CM_K / (wavelength_cm[:, None] * gas.temperature))
    temperature_weights = _weights(_tables().log_temperature, np.log(gas.temperature))
    gaunt, helium_minus, h2_plus = np.exp(_tables_at(wavelength_cm.tobytes()) @ temperature_weights.T)

    absorption = bound_free(wavelength_cm, gas)
    absorption += h_minus_bound_free(wavelength_cm)[:, None] * gas.h_minus
    absorption += (
        FREE_FREE_CONSTANT * gaunt / frequency**3 * (gas.electron_density * gas.protons / np.sqrt(gas.temperature))
    )
    absorption += h2_plus * (gas.h1 * gas.protons)
    absorption *= stimulated
    electron_pressure = gas.electron_density * BOLTZMANN_ERG_K * gas.temperature
    absorption += h_minus_free_free(wavelength_cm, gas.temperature) * (gas.h1 * electron_pressure)
    absorption += helium_minus * (gas.helium * gas.electron_density)

    h1, helium, h2 = rayleigh(wavelength_cm)
    scattering = THOMSON_CM2 * gas.electron_density + (
        h1[:, None] * gas.h1 + helium[:, None] * gas.helium + h2[:, None] * gas.h2
    )
    return absorption / gas.density, scattering / gas.density
