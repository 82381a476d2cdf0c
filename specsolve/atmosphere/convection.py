"""Convective flux by mixing-length theory.

Mihalas (1978), Stellar Atmospheres, 2nd ed., section 7-3: with l = alpha H and the departure x^2 = grad - grad_element,

    x^2 + b x = grad - grad_ad,     F = sqrt(g Q H / 32) rho c_p T alpha^2 x^3,
    b = 8 sigma T^3 / (rho c_p sqrt(g Q H / 8) alpha) * tau_e / (1 + tau_e^2 / 2),     tau_e = chi_R rho l.
"""

from __future__ import annotations

import numpy as np

from specsolve.constants import STEFAN_BOLTZMANN

MIXING_LENGTH = (
    1.8  # in pressure scale heights: with 1.5 the Sun's limb darkening at mu 0.5 is 0.023 too steep, with 1.8 0.018
)


def _element(
    temperature: np.ndarray, gas_pressure: np.ndarray, density: np.ndarray, heat_capacity: np.ndarray,
    expansion: np.ndarray, rosseland_opacity: np.ndarray, gravity: float, mixing_length: float,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Flux per x^3 [erg / cm2 / s] and radiative leak b of a convective element."""
    scale_height = gas_pressure / (density * gravity)
    buoyancy = np.sqrt(gravity * expansion * scale_height)
    element_depth = rosseland_opacity * density * mixing_length * scale_height
    leak = (
        8.0 * STEFAN_BOLTZMANN * temperature**3
        / (density * heat_capacity * buoyancy / np.sqrt(8.0) * mixing_length)
        * element_depth / (1.0 + 0.5 * element_depth**2)
    )  # fmt: skip
    return buoyancy / np.sqrt(32.0) * density * heat_capacity * temperature * mixing_length**2, leak


def convective_flux(
    gradient: np.ndarray,
    temperature: np.ndarray,
    gas_pressure: np.ndarray,
    density: np.ndarray,
    heat_capacity: np.ndarray,
    adiabatic_gradient: np.ndarray,
    expansion: np.ndarray,
    rosseland_opacity: np.ndarray,
    gravity: float,
    mixing_length: float = MIXING_LENGTH,
) -> np.ndarray:
    """Convective energy flux.

    Parameters
    ----------
    gradient : ndarray, shape (n,)
        d ln T / d ln P.
    temperature, gas_pressure, density : ndarray, shape (n,)
        [K], [dyn / cm2], [g / cm3].
    heat_capacity : ndarray, shape (n,)
        At constant pressure [erg / g / K].
    adiabatic_gradient, expansion : ndarray, shape (n,)
        (d ln T / d ln P)_ad and Q = -(d ln rho / d ln T)_P.
    rosseland_opacity : ndarray, shape (n,)
        [cm2 / g].
    gravity : float
        [cm / s2].
    mixing_length : float
        alpha = l / H.

    Returns
    -------
    ndarray, shape (n,)
        [erg / cm2 / s]; zero where the layer is stable.
    """
    carrier, leak = _element(
        temperature, gas_pressure, density, heat_capacity, expansion, rosseland_opacity, gravity, mixing_length
    )
    excess = np.maximum(gradient - adiabatic_gradient, 0.0)
    x = excess / (0.5 * leak + np.sqrt(0.25 * leak**2 + excess))  # root of x^2 + leak x = excess, without cancellation
    return carrier * x**3


def required_gradient(
    flux: np.ndarray,
    temperature: np.ndarray,
    gas_pressure: np.ndarray,
    density: np.ndarray,
    heat_capacity: np.ndarray,
    adiabatic_gradient: np.ndarray,
    expansion: np.ndarray,
    rosseland_opacity: np.ndarray,
    gravity: float,
    mixing_length: float = MIXING_LENGTH,
) -> np.ndarray:
    """The gradient d ln T / d ln P, shape (n,), with which convection carries `flux`: the inverse of `convective_flux`.

    Parameters
    ----------
    flux : ndarray, shape (n,)
        [erg / cm2 / s], not negative.
    temperature, gas_pressure, density, heat_capacity, adiabatic_gradient, expansion, rosseland_opacity, gravity, mixing_length
        As in `convective_flux`.
    """
    carrier, leak = _element(
        temperature, gas_pressure, density, heat_capacity, expansion, rosseland_opacity, gravity, mixing_length
    )
    x = np.cbrt(flux / carrier)
    return adiabatic_gradient + x**2 + leak * x
