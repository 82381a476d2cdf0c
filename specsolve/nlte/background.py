"""Opacity in which the lines and continua of the model atom lie: continuum, sampled lines of all elements, and a residual.

The line lists lack part of the ultraviolet lines. What is missing is taken to grow with the density of neutral iron:
a cross-section per Fe I atom, constant within bands, which is fixed once on the solar flux below 4000 A
(`specsolve.nlte.calibration`).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from specsolve.atmosphere.blanketing_build import atomic_mass
from specsolve.atmosphere.blanketing_lines import load_lines
from specsolve.atmosphere.blanketing_sampling import HELIUM_RELATIVE, LineConstants, line_constants, sample
from specsolve.constants import LIGHT_SPEED_CM_S
from specsolve.matter.composition import ELEMENTS, number_abundance, solar_abundance
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import Gas, ion_density
from specsolve.matter.partition import partition_function
from specsolve.radiation.planck import planck
from specsolve.radiation.transfer import ANGLE_COSINES, ANGLE_WEIGHTS
from specsolve.radiation.transfer_kernels import radiation_field

#: Lines and wings below this fraction of the continuum are left out.
LEAST_LINE = 3e-3
#: Longest wavelength with sampled lines [cm]; they matter little beyond.
LONGEST_LINES_CM = 2.5e-4
#: Edges [cm] of the bands of the residual opacity and log10 of the cross-section [cm^2] per Fe I atom in each, by
#: `python -m specsolve.nlte.residual_calibration`; below the observed range, 2900 A, that of the bluest band.
RESIDUAL_EDGES_CM = np.array([1250, 2900, 3030, 3150, 3280, 3400, 3520, 3647, 3750, 3870, 4000]) * 1e-8
RESIDUAL_LOG_CM2 = np.array([-19.075, -19.075, -19.076, -19.108, -19.178, -19.252, -19.326, -19.227, -19.200, -19.492])


@dataclass(frozen=True, kw_only=True)
class Background:
    """Opacity and radiation at w wavelengths and n depths.

    Attributes
    ----------
    wavelength_cm : ndarray, shape (w,)
        Vacuum [cm].
    opacity : ndarray, shape (w, n)
        Absorption and scattering [cm2/g].
    source, mean : ndarray, shape (w, n)
        Source function, scattering included, and mean intensity [erg s^-1 cm^-2 sr^-1 Hz^-1].
    surface : ndarray, shape (w,)
        Eddington flux at the surface.
    """

    wavelength_cm: np.ndarray
    opacity: np.ndarray
    source: np.ndarray
    mean: np.ndarray
    surface: np.ndarray


@cache
def sampled_lines() -> tuple[LineConstants, tuple[str, ...]]:
    """The packaged blanketing lines and their ions."""
    lines = load_lines()
    return line_constants(lines, atomic_mass), lines.ions


def line_opacity(wavelength_cm: np.ndarray, gas: Gas, vmic: float, continuum: np.ndarray) -> np.ndarray:
    """Opacity of the sampled lines.

    Parameters
    ----------
    wavelength_cm : ndarray, shape (w,)
        Vacuum, ascending [cm].
    gas : Gas
        n points.
    vmic : float
        [km/s]
    continuum : ndarray, shape (w, n)
        [cm2/g]; lines far below it are left out.

    Returns
    -------
    ndarray, shape (w, n)
        [cm2/g]
    """
    lines, ions = sampled_lines()
    composition = gas.composition
    per_ion = np.zeros((len(ions), gas.temperature.size))
    for i, ion in enumerate(ions):
        symbol = ion.split()[0]
        if not np.isfinite(solar_abundance(symbol)):
            continue
        abundance = number_abundance(symbol, composition.mh, composition.alpha)
        per_ion[i] = ion_density(gas, ion, abundance) / partition_function(ion, gas.temperature) / gas.density
    nearest = np.minimum(np.searchsorted(wavelength_cm, lines.wavelength_cm), wavelength_cm.size - 1)
    band = np.arange(wavelength_cm.size)
    perturbers = gas.h1 + HELIUM_RELATIVE * gas.helium
    result = np.empty_like(continuum)
    for d in range(gas.temperature.size):
        state = {
            "temperature": gas.temperature[d],
            "per_ion": per_ion[:, d],
            "perturbers": perturbers[d],
            "electron_density": gas.electron_density[d],
        }
        least = np.ascontiguousarray(LEAST_LINE * continuum[:, d])
        result[:, d] = sample(lines, wavelength_cm, band, nearest, state, vmic, least)
    return result


def residual_cross_section(wavelength_cm: np.ndarray) -> np.ndarray:
    """Residual opacity per Fe I atom [cm^2]; zero beyond the calibrated bands."""
    place = np.searchsorted(RESIDUAL_EDGES_CM, wavelength_cm, side="right") - 1
    inside = (place >= 0) & (place < RESIDUAL_LOG_CM2.size)
    return np.where(inside, 10.0 ** RESIDUAL_LOG_CM2[np.clip(place, 0, RESIDUAL_LOG_CM2.size - 1)], 0.0)


def background(
    wavelength_cm: np.ndarray, gas: Gas, column_mass: np.ndarray, vmic: float, uv_residual: float
) -> Background:
    """Opacity and radiation of everything but the lines of the model atom.

    Parameters
    ----------
    wavelength_cm : ndarray, shape (w,)
        Vacuum, ascending [cm]; 1250 A to 100 um.
    gas : Gas
    column_mass : ndarray, shape (n,)
        [g/cm2]
    vmic : float
        [km/s]
    uv_residual : float
        Factor on the residual cross-sections.
    """
    absorption, scattering = continuum_opacity(wavelength_cm, gas)
    iron = gas.ions[ELEMENTS.index("Fe"), 0] / gas.density
    absorption += uv_residual * residual_cross_section(wavelength_cm)[:, None] * iron
    short = wavelength_cm < LONGEST_LINES_CM
    absorption[short] += line_opacity(wavelength_cm[short], gas, vmic, (absorption + scattering)[short])
    opacity = absorption + scattering
    return solve_background(wavelength_cm, opacity, absorption / opacity, gas.temperature, column_mass)


def solve_background(wavelength_cm, opacity, destruction, temperature, column_mass) -> Background:
    """Radiation of given opacities [cm2/g] and absorbed fractions, each (w, n)."""
    thermal = planck(wavelength_cm[:, None], temperature) * (wavelength_cm[:, None] ** 2 / LIGHT_SPEED_CM_S)
    steps = 0.5 * (opacity[:, 1:] + opacity[:, :-1]) * np.diff(column_mass)
    top = 0.5 * opacity[:, 0] * column_mass[0]
    mean, flux = np.empty_like(opacity), np.empty_like(steps)
    surface = np.empty(wavelength_cm.size)
    eddington, edges = np.full_like(opacity, 1.0 / 3.0), np.full((wavelength_cm.size, 2), 0.5)
    radiation_field(
        steps, top, destruction, thermal, ANGLE_COSINES, ANGLE_WEIGHTS, eddington, mean, flux, surface, edges
    )
    source = destruction * thermal + (1.0 - destruction) * mean
    return Background(wavelength_cm=wavelength_cm, opacity=opacity, source=source, mean=mean, surface=surface)
