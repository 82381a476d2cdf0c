"""Planck function and its integral over wavelength bands."""

from __future__ import annotations

import numpy as np

from specsolve.constants import LIGHT_SPEED_CM_S, PLANCK_ERG_S, RADIATION_C2_CM_K

FIRST_RADIATION = 2.0 * PLANCK_ERG_S * LIGHT_SPEED_CM_S**2  # 2 h c^2 [erg cm2 / s]
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(6)


def planck(wavelength_cm: np.ndarray, temperature: np.ndarray) -> np.ndarray:
    """Planck function B_lambda.

    Parameters
    ----------
    wavelength_cm : array_like
        Vacuum wavelength [cm]; broadcasts against `temperature`.
    temperature : array_like
        [K].

    Returns
    -------
    ndarray
        [erg / (s cm2 sr cm)].

    Examples
    --------
    >>> float(planck(5e-5, 5772.0)) > 0
    True
    """
    exponent = RADIATION_C2_CM_K / (np.asarray(wavelength_cm) * temperature)
    return FIRST_RADIATION / np.asarray(wavelength_cm) ** 5 / np.expm1(np.minimum(exponent, 600.0))


def band_planck(band_edges_cm: np.ndarray, temperature: np.ndarray) -> np.ndarray:
    """Planck function integrated over each band.

    Parameters
    ----------
    band_edges_cm : ndarray, shape (n_bands + 1,)
        Increasing wavelengths [cm].
    temperature : ndarray, shape (n,)
        [K].

    Returns
    -------
    ndarray, shape (n_bands, n)
        [erg / (s cm2 sr)].

    Notes
    -----
    Six-point Gauss-Legendre quadrature in ln(lambda); better than 1e-7 for bands up to a factor 1.5 wide.
    """
    log_edges = np.log(np.asarray(band_edges_cm))
    centre = 0.5 * (log_edges[1:] + log_edges[:-1])
    half = 0.5 * np.diff(log_edges)
    wavelength = np.exp(centre[:, None] + half[:, None] * _NODES)  # (n_bands, 6)
    values = planck(wavelength[:, :, None], np.asarray(temperature)[None, None, :])
    return np.einsum("bq,bqn->bn", half[:, None] * _WEIGHTS * wavelength, values)
