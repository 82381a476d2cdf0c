"""Computed spectra as an instrument would give them: broadening, pixels, continuum, noise."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from .broadening import LIGHT_SPEED_KM_S, Kernel, broaden
from .types import Spectrum

STEP_KM_S = 0.6
"""Step of computed spectra: an unbroadened iron line has a full width above 2.5 km/s."""


def velocity_grid(low: float, high: float, step: float = STEP_KM_S) -> np.ndarray:
    """Wavelengths [Angstrom] at equal velocity steps [km/s]."""
    n = int(np.floor(np.log(high / low) * LIGHT_SPEED_KM_S / step)) + 1
    return low * np.exp(np.arange(n) * (step / LIGHT_SPEED_KM_S))


def observe(
    wavelength_air: np.ndarray,
    relative_flux: np.ndarray,
    *,
    star: str,
    resolving_power: float,
    signal_to_noise: float,
    rng: np.random.Generator | None = None,
    pixels_per_fwhm: float = 3.0,
    vsini: float = 0.0,
    macroturbulence: float = 0.0,
    velocity: float = 0.0,
    continuum: Callable[[np.ndarray], np.ndarray] | None = None,
    normalised: bool | None = None,
) -> Spectrum:
    """A spectrum of one order with pixels of equal steps in ln(wavelength), averaged over each pixel.

    Parameters
    ----------
    wavelength_air, relative_flux : ndarray, shape (n,)
        Computed, at equal velocity steps (`velocity_grid`).
    star : str
    resolving_power : float
        lambda / FWHM of the Gaussian instrument; pixels widen it by their own width.
    signal_to_noise : float
        Per pixel in the continuum; noise goes as the root of the flux.
    rng : numpy.random.Generator, optional
        No noise without; the error of the pixels is the same.
    vsini, macroturbulence, velocity : float
        [km/s].
    continuum : callable, optional
        Continuum at wavelengths [Angstrom]; 1 without.
    normalised : bool, optional
        What the spectrum says of itself; true if no continuum is given.

    Returns
    -------
    Spectrum
    """
    from scipy.interpolate import CubicSpline

    step = LIGHT_SPEED_KM_S * np.log(wavelength_air[1] / wavelength_air[0])
    fwhm = LIGHT_SPEED_KM_S / resolving_power
    flux = broaden(relative_flux, step, Kernel(fwhm=fwhm, vsini=vsini, macroturbulence=macroturbulence))
    margin = 100.0 / LIGHT_SPEED_KM_S  # edges of the convolution are left out
    low, high = wavelength_air[0] * (1.0 + margin), wavelength_air[-1] * (1.0 - margin)
    pixel = fwhm / pixels_per_fwhm
    edges = velocity_grid(low, high, pixel)
    integral = CubicSpline(wavelength_air, flux).antiderivative()(edges)
    mean = np.diff(integral) / np.diff(edges)
    middle = 0.5 * (edges[1:] + edges[:-1])
    middle = middle * (1.0 + velocity / LIGHT_SPEED_KM_S)
    level = np.ones_like(middle) if continuum is None else np.asarray(continuum(middle), float)
    sigma = level * np.sqrt(np.clip(mean, 0.02, None)) / signal_to_noise
    values = level * mean
    if rng is not None:
        values = values + sigma * rng.standard_normal(values.size)
    return Spectrum.from_arrays(
        star,
        middle,
        values,
        sigma=sigma,
        resolving_power=float(resolving_power),
        normalised=continuum is None if normalised is None else normalised,
        air_source="said",
    )
