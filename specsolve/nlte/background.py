"""Opacity in which the lines and continua of the model atom lie: continuum, sampled lines of all elements, and a residual.

The line lists lack part of the ultraviolet lines. What is missing is taken to grow with the density of neutral iron:
a cross-section per Fe I atom, constant within bands, which is fixed once on the solar flux below 4000 A
(`specsolve.nlte.calibration`).
"""

from __future__ import annotations

from dataclasses import dataclass, fields
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
#: On the Eddington factors of the background radiation.
EDDINGTON_TOLERANCE = 1e-4
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
    none = np.zeros((1, 0))
    return backgrounds(wavelength_cm, none, gas, column_mass, vmic, uv_residual)[0]


def backgrounds(
    grid_cm: np.ndarray, beside_cm: np.ndarray, gas: Gas, column_mass: np.ndarray, vmic: float, uv_residual: float
) -> tuple[Background, Background]:
    """The same on a grid, and at lines, whose background is the geometric mean over wavelengths beside them.

    Parameters
    ----------
    grid_cm : ndarray, shape (w,)
        Vacuum, ascending [cm].
    beside_cm : ndarray, shape (n_beside, m)
        Wavelengths beside each of m lines [cm], inside the grid; the continuum is interpolated from the grid.

    Returns
    -------
    on_grid, at_lines : Background
    """
    absorption, scattering = continuum_opacity(grid_cm, gas)
    everywhere = np.concatenate([grid_cm, beside_cm.ravel()])
    order = np.argsort(everywhere, kind="stable")
    ascending = everywhere[order]
    absorption, scattering = (
        _interpolated(grid_cm, absorption, ascending),
        _interpolated(grid_cm, scattering, ascending),
    )
    iron = gas.ions[ELEMENTS.index("Fe"), 0] / gas.density
    absorption += uv_residual * residual_cross_section(ascending)[:, None] * iron
    short = ascending < LONGEST_LINES_CM
    absorption[short] += line_opacity(ascending[short], gas, vmic, (absorption + scattering)[short])
    place = np.empty(order.size, dtype=np.int64)
    place[order] = np.arange(order.size)
    on_grid, beside = place[: grid_cm.size], place[grid_cm.size :].reshape(beside_cm.shape)
    absorbed = np.concatenate([absorption[on_grid], np.exp(np.log(absorption[beside]).mean(axis=0))])
    opacity = absorbed + np.concatenate([scattering[on_grid], scattering[beside].mean(axis=0)])
    wavelength = np.concatenate([grid_cm, beside_cm.mean(axis=0)])
    both = solve_background(wavelength, opacity, absorbed / opacity, gas.temperature, column_mass)
    parts = (slice(0, grid_cm.size), slice(grid_cm.size, None))
    first, second = (
        Background(**{item.name: getattr(both, item.name)[part] for item in fields(both)}) for part in parts
    )
    return first, second


def _interpolated(grid: np.ndarray, values: np.ndarray, wavelength: np.ndarray) -> np.ndarray:
    """Opacities (w, n) at other wavelengths inside the grid, linear in logarithms."""
    left = np.clip(np.searchsorted(grid, wavelength, side="right") - 1, 0, max(grid.size - 2, 0))
    if grid.size == 1:
        return values[left]
    share = (np.log(wavelength / grid[left]) / np.log(grid[left + 1] / grid[left]))[:, None]
    logs = np.log(values)
    return np.exp(logs[left] + share * (logs[left + 1] - logs[left]))


def solve_background(wavelength_cm, opacity, destruction, temperature, column_mass) -> Background:
    """Radiation of given opacities [cm2/g] and absorbed fractions, each (w, n)."""
    thermal = planck(wavelength_cm[:, None], temperature) * (wavelength_cm[:, None] ** 2 / LIGHT_SPEED_CM_S)
    steps = 0.5 * (opacity[:, 1:] + opacity[:, :-1]) * np.diff(column_mass)
    top = 0.5 * opacity[:, 0] * column_mass[0]
    mean, flux = np.empty_like(opacity), np.empty_like(steps)
    surface = np.empty(wavelength_cm.size)
    eddington, edges = np.full_like(opacity, 1.0 / 3.0), np.full((wavelength_cm.size, 2), 0.5)
    radiation_field(
        steps, top, destruction, thermal, ANGLE_COSINES, ANGLE_WEIGHTS, eddington, mean, flux, surface, edges,
        EDDINGTON_TOLERANCE,
    )  # fmt: skip
    source = destruction * thermal + (1.0 - destruction) * mean
    return Background(wavelength_cm=wavelength_cm, opacity=opacity, source=source, mean=mean, surface=surface)
