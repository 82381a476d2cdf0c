"""Photoionization and radiative recombination in a given radiation field."""

from __future__ import annotations

import numpy as np

from specsolve.constants import PLANCK_ERG_S, RADIATION_C2_CM_K
from specsolve.nlte.atom import ModelAtom
from specsolve.nlte.background import Background
from specsolve.nlte.rates import spontaneous

#: Common grid: ends of the ranges [cm] and number of points in each, equidistant in ln wavelength.
GRID_EDGES_CM = np.array([1260.0, 4000.0, 25000.0, 900000.0]) * 1e-8
GRID_POINTS = (2400, 500, 120)


def photoionization_grid() -> np.ndarray:
    """Wavelengths of the common grid, ascending [cm]."""
    parts = [
        np.exp(np.linspace(np.log(low), np.log(high), count, endpoint=False))
        for low, high, count in zip(GRID_EDGES_CM[:-1], GRID_EDGES_CM[1:], GRID_POINTS, strict=True)
    ]
    return np.append(np.concatenate(parts), GRID_EDGES_CM[-1])


def photoionization_flows(
    atom: ModelAtom, field: Background, temperature: np.ndarray, lte: np.ndarray, factor: float
) -> tuple[np.ndarray, np.ndarray]:
    """Flows of ionization and recombination per unit departure coefficient.

    Parameters
    ----------
    atom : ModelAtom
    field : Background
        On an ascending grid of wavelengths.
    temperature : ndarray, shape (n,)
        [K]
    lte : ndarray, shape (n_levels, n)
        [cm^-3]
    factor : float
        On all cross-sections.

    Returns
    -------
    ionization, recombination : ndarray, shape (n_continua, n)
        [cm^-3 s^-1]: n* times 4 pi integral of sigma J / (h nu), and of sigma exp(-h nu/kT) (2 h nu^3/c^2 + J) / (h nu).
        Both by the same quadrature, so that they are equal where J = B. Continua whose edge lies beyond the grid: 0.
    """
    wavelength = field.wavelength_cm
    step = np.gradient(np.log(wavelength))
    ratio = wavelength / atom.continuum_edge_cm[:, None]
    sigma = factor * atom.continuum_sigma[:, None] * ratio**3
    # the interval that holds the edge counts with the part below it
    share = np.clip((np.log(atom.continuum_edge_cm)[:, None] - np.log(wavelength)) / step + 0.5, 0.0, 1.0)
    weight = 4.0 * np.pi / PLANCK_ERG_S * sigma * share * step  # d nu / nu = d ln wavelength
    boltzmann = np.exp(-RADIATION_C2_CM_K / (wavelength[:, None] * temperature))
    down = boltzmann * (spontaneous(wavelength)[:, None] + field.mean)
    population = lte[atom.continuum_level]
    return population * (weight @ field.mean), population * (weight @ down)
