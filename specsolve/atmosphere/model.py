"""What a model atmosphere is to the rest of the package."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, kw_only=True)
class Atmosphere:
    """One model atmosphere.

    Attributes
    ----------
    teff, logg, mh, alpha, vmic : float
        [K], [dex cgs], [dex], [dex], microturbulence of the line blanketing [km/s].
    column_mass, temperature, gas_pressure, electron_density, log_tau : ndarray, shape (n,)
        [g/cm2], [K], [dyn/cm2], [cm^-3], log10 of continuum optical depth at 5000 A.
    flux_error : float
        Largest |F / (sigma Teff^4) - 1| over depth.
    status : {"converged", "imported", "failed"}
    reason : str
        Why it failed; empty otherwise.
    """

    teff: float
    logg: float
    mh: float
    alpha: float
    vmic: float
    column_mass: np.ndarray
    temperature: np.ndarray
    gas_pressure: np.ndarray
    electron_density: np.ndarray
    log_tau: np.ndarray
    flux_error: float
    status: str
    reason: str = ""
