"""Emergent flux of an atmosphere at low resolution, with the line opacity of the distribution tables."""

from __future__ import annotations

import numpy as np

from specsolve.atmosphere.blanketing import Blanketing, line_opacity
from specsolve.atmosphere.model import Atmosphere
from specsolve.matter.composition import composition_for
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium
from specsolve.radiation.planck import planck
from specsolve.radiation.transfer_kernels import solve_channels


def emergent_flux(
    model: Atmosphere, wavelength_cm: np.ndarray, blanketing: Blanketing, power: float = 1.0
) -> np.ndarray:
    """Flux at the surface, lines smeared over their band.

    Parameters
    ----------
    model : Atmosphere
    wavelength_cm : ndarray, shape (n_w,)
        Vacuum wavelengths inside the bands of `blanketing` [cm].
    blanketing : Blanketing
        Of the model's composition.
    power : float
        Exponent of the missing-opacity multiplier.

    Returns
    -------
    ndarray, shape (n_w,)
        Astrophysical flux, integral of I cos(theta) over solid angle [erg / (s cm2 cm)].

    Raises
    ------
    ValueError
        A wavelength outside the bands.
    """
    band = np.searchsorted(blanketing.band_edges_cm, wavelength_cm) - 1
    if np.any((band < 0) | (band >= len(blanketing.band_edges_cm) - 1)):
        low, high = blanketing.band_edges_cm[[0, -1]] * 1e7
        raise ValueError(f"wavelengths must lie between {low:.0f} and {high:.0f} nm")
    gas = equilibrium(model.temperature, model.gas_pressure, composition_for(model.mh, model.alpha))
    absorption, scattering = continuum_opacity(wavelength_cm, gas)
    lines = line_opacity(blanketing, model.temperature, model.gas_pressure, model.vmic, power)
    absorbed = absorption[:, None, :] + lines[band]
    total = absorbed + scattering[:, None, :]
    thermal = np.broadcast_to(planck(wavelength_cm[:, None], model.temperature)[:, None, :], total.shape)
    n_w, n_sub, n = total.shape
    flat = (n_w * n_sub, n)
    field = solve_channels(
        total.reshape(flat), (absorbed / total).reshape(flat), thermal.reshape(flat), model.column_mass
    )
    return 4.0 * np.pi * field["surface"].reshape(n_w, n_sub) @ blanketing.sub_weights
