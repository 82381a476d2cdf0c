"""Air and vacuum wavelengths.

Standard air (15 C, 1 atm, 0.045 % CO2); refractive index of Birch & Downs 1994, Metrologia 31, 315, in the
two-term form that is usual in spectroscopy (coefficients from memory, checked in the tests against the
NIST vacuum and Atomic Line List air wavelengths of the same transitions).
"""

from __future__ import annotations

import numpy as np

LIMITS_ANGSTROM = (2000.0, 25000.0)


def refractive_index(wavelength_vacuum):
    """Refractive index of standard air.

    Parameters
    ----------
    wavelength_vacuum : float or ndarray
        [Angstrom], 2000 to 25 000.

    Returns
    -------
    ndarray
        Dimensionless.

    Examples
    --------
    >>> round(float(refractive_index(5000.0)), 7)
    1.000279
    """
    wavelength = np.asarray(wavelength_vacuum, float)
    if wavelength.size and not (wavelength.min() >= LIMITS_ANGSTROM[0] and wavelength.max() <= LIMITS_ANGSTROM[1]):
        raise ValueError(f"wavelength outside {LIMITS_ANGSTROM[0]:.0f}-{LIMITS_ANGSTROM[1]:.0f} Angstrom")
    wavenumber2 = (1.0e4 / wavelength) ** 2
    return 1.0 + 8.34254e-5 + 2.406147e-2 / (130.0 - wavenumber2) + 1.5998e-4 / (38.9 - wavenumber2)


def vacuum_to_air(wavelength_vacuum):
    """Air wavelength of a vacuum wavelength, both [Angstrom].

    Examples
    --------
    >>> round(float(vacuum_to_air(6301.5)), 3)
    6299.757
    """
    return np.asarray(wavelength_vacuum, float) / refractive_index(wavelength_vacuum)


def air_to_vacuum(wavelength_air):
    """Vacuum wavelength of an air wavelength, both [Angstrom]; the inverse to better than 1e-9 Angstrom.

    Examples
    --------
    >>> round(float(air_to_vacuum(6299.757)), 3)
    6301.5
    """
    air = np.asarray(wavelength_air, float)
    vacuum = air * 1.00028
    for _ in range(4):  # contracts by ~1e-5 each time
        vacuum = air * refractive_index(vacuum)
    return vacuum
