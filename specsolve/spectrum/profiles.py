"""Line shapes with analytic widths: Gaussian and Voigt functions of unit area, and their equivalent widths.

They serve where no prediction exists, and as the paper limits of the measurement.
"""

from __future__ import annotations

import numpy as np

from .broadening import FWHM_PER_SIGMA


def gaussian_profile(distance, fwhm: float) -> np.ndarray:
    """Gaussian of unit area.

    Examples
    --------
    >>> round(float(gaussian_profile(0.0, 2.0)), 4)
    0.4697
    """
    sigma = fwhm / FWHM_PER_SIGMA
    return np.exp(-0.5 * (np.asarray(distance, float) / sigma) ** 2) / (sigma * np.sqrt(2.0 * np.pi))


def voigt_profile(distance, gaussian_fwhm: float, lorentzian_fwhm: float) -> np.ndarray:
    """Voigt function of unit area: a Gaussian convolved with a Lorentzian.

    Examples
    --------
    >>> bool(np.isclose(voigt_profile(0.3, 2.0, 0.0), gaussian_profile(0.3, 2.0)))
    True
    """
    from scipy.special import voigt_profile as voigt

    return voigt(np.asarray(distance, float), gaussian_fwhm / FWHM_PER_SIGMA, 0.5 * lorentzian_fwhm)


def gaussian_width(depth: float, fwhm: float) -> float:
    """Equivalent width of a Gaussian line: depth fwhm sqrt(pi / (4 ln 2)), unit of the full width.

    Examples
    --------
    >>> round(gaussian_width(0.5, 0.1), 5)
    0.05322
    """
    return float(depth * fwhm * np.sqrt(np.pi / (4.0 * np.log(2.0))))


def voigt_width(depth: float, gaussian_fwhm: float, lorentzian_fwhm: float) -> float:
    """Equivalent width of a Voigt line of a given central depth."""
    return float(depth / voigt_profile(0.0, gaussian_fwhm, lorentzian_fwhm))


def photon_error(fwhm, pixel, signal_to_noise, *, free_width: bool = True):
    """Noise of the equivalent width of a weak Gaussian line.

    Parameters
    ----------
    fwhm, pixel : float
        Full width of the line and step of the pixels, same unit.
    signal_to_noise : float
        Per pixel.
    free_width : bool
        Depth and width fitted: 1.503 sqrt(fwhm pixel) / (S/N), the 1.5 of Cayrel 1988, IAU Symposium 132, 345; with
        the width known the factor is smaller by sqrt(2/3): 1.227.

    Examples
    --------
    >>> round(1e3 * float(photon_error(0.12, 0.04, 100.0)), 2)  # mA
    1.04
    """
    factor = np.sqrt(2.0 * np.sqrt(np.pi) / FWHM_PER_SIGMA) * (np.sqrt(1.5) if free_width else 1.0)
    return factor * np.sqrt(fwhm * pixel) / signal_to_noise
