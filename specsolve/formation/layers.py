"""The model atmosphere as line formation sees it: fine layers, and all that depends neither on abundance nor on xi."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.interpolate import CubicSpline

from specsolve.constants import ANGSTROM_CM, LIGHT_SPEED_CM_S, RADIATION_C2_CM_K
from specsolve.lines import LineList, air_to_vacuum
from specsolve.matter.broadening import doppler_width
from specsolve.matter.composition import Composition
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import Gas, equilibrium, gas_with_electrons
from specsolve.matter.line_opacity import damping_width, line_strength
from specsolve.radiation.planck import planck

STANDARD_WAVELENGTH_CM = 5.0e-5
SHALLOWEST, DEEPEST = -6.0, 1.7
"""Range of log tau_5000 that matters to lines between 3500 and 10 000 Angstrom."""
LEAST_DEPTH = 1.2
"""A structure that ends above this log tau_5000 does not hold the layers where the continuum forms."""
N_LAYERS = 64


class Structure(Protocol):
    """What line formation needs of a model atmosphere; each of shape (n,), going inwards."""

    column_mass: np.ndarray
    temperature: np.ndarray
    gas_pressure: np.ndarray
    electron_density: np.ndarray


@dataclass(frozen=True, kw_only=True)
class Layers:
    """Layers at equal steps of log tau_5000, shape (n,).

    Attributes
    ----------
    log_tau : ndarray
        log10 of the continuum optical depth at 5000 Angstrom.
    column_mass : ndarray
        m [g/cm2].
    mass_step : ndarray
        dm per layer step [g/cm2], the derivative of m with respect to the index.
    gas : Gas
    """

    log_tau: np.ndarray
    column_mass: np.ndarray
    mass_step: np.ndarray
    gas: Gas


@dataclass(frozen=True, kw_only=True)
class LineOpacities:
    """Per line and layer, shape (n_lines, n), what depends neither on the abundance nor on microturbulence.

    Attributes
    ----------
    absorption, scattering : ndarray
        Continuum [cm2/g].
    strength : ndarray
        Line opacity per unit abundance ratio and unit profile, see `line_opacity.line_strength`.
    damping : ndarray
        Gamma lambda / (4 pi c); divided by the Doppler width (a fraction of the wavelength) it is the Voigt parameter.
    planck, line_source : ndarray
        Source functions of continuum absorption and of the line, in units of the Planck function at tau_5000 = 1.
    """

    absorption: np.ndarray
    scattering: np.ndarray
    strength: np.ndarray
    damping: np.ndarray
    planck: np.ndarray
    line_source: np.ndarray


def make_layers(atmosphere: Structure, composition: Composition, n_layers: int = N_LAYERS) -> Layers:
    """Interpolate a structure onto equal steps of log tau_5000.

    Parameters
    ----------
    atmosphere : Structure
        Column mass [g/cm2], temperature [K], gas pressure [dyn/cm2], electron density [cm-3].
    composition : Composition
    n_layers : int

    Returns
    -------
    Layers
        The state of the gas is computed anew at each layer. The electron density is that of the structure: where it
        differs from equilibrium, their ratio is interpolated.

    Raises
    ------
    ValueError
        If the structure does not increase inwards, or ends above log tau_5000 = 1.2.
    """
    mass = np.asarray(atmosphere.column_mass, float)
    if mass.ndim != 1 or mass.size < 8 or not np.all(np.diff(mass) > 0.0) or mass[0] <= 0.0:
        raise ValueError("a structure needs at least 8 layers with column mass positive and increasing inwards")
    log_mass = np.log(mass)
    own = equilibrium(atmosphere.temperature, atmosphere.gas_pressure, composition)
    ratio = np.log(np.asarray(atmosphere.electron_density, float) / own.electron_density)
    if np.max(np.abs(ratio)) > 1e-6:
        own = gas_with_electrons(
            own.temperature, own.gas_pressure, np.asarray(atmosphere.electron_density, float), composition
        )
    log_depth = _log_optical_depth(log_mass, own)
    if log_depth[-1] < LEAST_DEPTH * np.log(10.0):
        raise ValueError(
            f"the structure ends at log tau_5000 = {log_depth[-1] / np.log(10.0):.2f}; lines need {LEAST_DEPTH:.1f}"
        )
    top, bottom = (np.clip(v, log_depth[0], log_depth[-1]) for v in np.log(10.0) * np.array([SHALLOWEST, DEEPEST]))
    depth = np.linspace(top, bottom, n_layers)
    mass_of = CubicSpline(log_depth, log_mass)
    x = mass_of(depth)
    temperature = np.exp(CubicSpline(log_mass, np.log(own.temperature))(x))
    pressure = np.exp(CubicSpline(log_mass, np.log(own.gas_pressure))(x))
    gas = equilibrium(temperature, pressure, composition)
    if np.max(np.abs(ratio)) > 1e-6:
        electrons = gas.electron_density * np.exp(CubicSpline(log_mass, ratio)(x))
        gas = gas_with_electrons(temperature, pressure, electrons, composition)
    column_mass = np.exp(x)
    step = (bottom - top) / (n_layers - 1)
    return Layers(
        log_tau=depth / np.log(10.0),
        column_mass=column_mass,
        mass_step=mass_of(depth, 1) * column_mass * step,
        gas=gas,
    )


def _log_optical_depth(log_mass: np.ndarray, gas: Gas) -> np.ndarray:
    """ln tau_5000 of the continuum, by integrating a spline of opacity times mass over ln mass."""
    absorption, scattering = continuum_opacity(np.array([STANDARD_WAVELENGTH_CM]), gas)
    integrand = (absorption + scattering)[0] * np.exp(log_mass)
    slope = np.log(integrand[1] / integrand[0]) / (log_mass[1] - log_mass[0])
    above = integrand[0] / max(slope, 1.0)  # opacity per mass does not rise outwards
    return np.log(above + CubicSpline(log_mass, integrand).antiderivative()(log_mass))


def line_opacities(
    layers: Layers, lines: LineList, departures: tuple[np.ndarray, np.ndarray] | None = None
) -> LineOpacities:
    """All that line formation needs and that depends neither on the abundance nor on microturbulence.

    Parameters
    ----------
    layers : Layers
    lines : LineList
    departures : (lower, upper), each ndarray (n_lines, n), optional
        Populations of the levels over their LTE values at each layer; LTE without.

    Returns
    -------
    LineOpacities
    """
    gas = layers.gas
    wavelength = air_to_vacuum(lines.wavelength_air) * ANGSTROM_CM
    absorption, scattering = continuum_opacity(wavelength, gas)
    shape = absorption.shape
    strength, damping = np.empty(shape), np.empty(shape)
    upper = lines.upper_energy
    for ion in np.unique(lines.ion):
        of = np.flatnonzero(lines.ion == ion)
        strength[of] = line_strength(gas, str(ion), wavelength[of], lines.excitation_potential[of], lines.log_gf[of])
        damping[of] = damping_width(
            gas,
            str(ion),
            wavelength[of],
            lines.excitation_potential[of],
            upper[of],
            lines.broadening_sigma[of],
            lines.broadening_alpha[of],
            lines.log_gamma_rad[of],
            lines.log_gamma_stark[of],
        )
    damping *= wavelength[:, None] / (4.0 * np.pi * LIGHT_SPEED_CM_S)
    standard = np.argmin(np.abs(layers.log_tau))
    thermal = planck(wavelength[:, None], gas.temperature[None, :])
    thermal = thermal / thermal[:, standard : standard + 1]
    line_source = thermal
    if departures is not None:
        strength, line_source = _with_departures(strength, thermal, wavelength, gas, *departures)
    return LineOpacities(
        absorption=absorption,
        scattering=scattering,
        strength=strength,
        damping=damping,
        planck=thermal,
        line_source=line_source,
    )


def _with_departures(strength, thermal, wavelength, gas, lower, upper):
    """Line opacity and source function with departure coefficients b: kappa b_l (1 - b_u/b_l e^-x) / (1 - e^-x)."""
    boltzmann = np.exp(-RADIATION_C2_CM_K / (wavelength[:, None] * gas.temperature[None, :]))
    ratio = upper / lower
    factor = (1.0 - ratio * boltzmann) / (1.0 - boltzmann)
    return strength * lower * factor, thermal * ratio / factor


def doppler_fractions(layers: Layers, vmic) -> np.ndarray:
    """Doppler width of iron over wavelength, shape (n_vmic, n), for microturbulences [km/s]."""
    return np.stack([doppler_width(layers.gas.temperature, float(xi)) for xi in np.atleast_1d(vmic)])
