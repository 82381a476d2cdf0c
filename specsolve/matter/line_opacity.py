"""Opacity of spectral lines in local thermodynamic equilibrium."""

from __future__ import annotations

import numpy as np

from specsolve.constants import (
    BOLTZMANN_EV_K,
    ELECTRON_CHARGE_ESU,
    ELECTRON_MASS_G,
    LIGHT_SPEED_CM_S,
    RADIATION_C2_CM_K,
)
from specsolve.matter.broadening import (
    IRON_MASS_G,
    classical_radiative_width,
    hydrogen_width,
    stark_width,
    total_width,
    unsold_width,
)
from specsolve.matter.equation_of_state import Gas, ion_density
from specsolve.matter.partition import ionization_energy, partition_function

LINE_CROSS_SECTION = np.pi * ELECTRON_CHARGE_ESU**2 / (ELECTRON_MASS_G * LIGHT_SPEED_CM_S)
"""Integrated cross-section per unit oscillator strength, pi e^2 / (m c) [cm2 Hz]; 0.02654."""
CHARGE = {"I": 1, "II": 2, "III": 3}


def line_strength(gas: Gas, ion: str, wavelength_cm, energy_ev, log_gf) -> np.ndarray:
    """Line opacity without its profile, for an element with one atom per hydrogen nucleus.

    Parameters
    ----------
    gas : Gas
        n points.
    ion : str
        For example ``"Fe I"``.
    wavelength_cm, energy_ev, log_gf : ndarray, shape (n_lines,)
        Vacuum wavelength [cm], lower energy [eV], log10 gf.

    Returns
    -------
    ndarray, shape (n_lines, n)
        s [cm2/g], so that the opacity is s 10^(A - 12) H(a, v) / (Doppler width as a fraction of the wavelength);
        stimulated emission included.

    Examples
    --------
    >>> from specsolve.matter.composition import composition_for
    >>> from specsolve.matter.equation_of_state import equilibrium
    >>> gas = equilibrium(np.array([5000.0]), np.array([3e4]), composition_for(0.0))
    >>> bool(line_strength(gas, "Fe I", [5e-5], [3.0], [-1.0])[0, 0] > 0)
    True
    """
    wavelength = np.asarray(wavelength_cm, float)[:, None]
    energy = np.asarray(energy_ev, float)[:, None]
    strength = 10.0 ** np.asarray(log_gf, float)[:, None]
    per_weight = ion_density(gas, ion, 1.0) / partition_function(ion, gas.temperature)
    boltzmann = np.exp(-energy / (BOLTZMANN_EV_K * gas.temperature))
    stimulated = -np.expm1(-RADIATION_C2_CM_K / (wavelength * gas.temperature))
    lower = per_weight * boltzmann * stimulated / gas.density
    return LINE_CROSS_SECTION * wavelength / (np.sqrt(np.pi) * LIGHT_SPEED_CM_S) * strength * lower


def damping_width(
    gas: Gas,
    ion: str,
    wavelength_cm,
    lower_ev,
    upper_ev,
    sigma,
    alpha,
    log_gamma_rad,
    log_gamma_stark,
    mass_g: float = IRON_MASS_G,
) -> np.ndarray:
    """Total damping full width of lines of one ion; what is nan is estimated.

    Parameters
    ----------
    gas : Gas
        n points.
    ion : str
    wavelength_cm, lower_ev, upper_ev, sigma, alpha, log_gamma_rad, log_gamma_stark : ndarray, shape (n_lines,)
        As in `LineList`, wavelength in vacuum [cm].
    mass_g : float
        Mass of the atom [g].

    Returns
    -------
    ndarray, shape (n_lines, n)
        [rad/s].
    """
    charge = CHARGE[ion.split()[1]]
    limit = ionization_energy(ion)
    temperature = gas.temperature[None, :]

    def rows(values):
        return np.asarray(values, float)[:, None]

    sigma, alpha = rows(sigma), rows(alpha)
    known = np.isfinite(sigma) & np.isfinite(alpha)
    estimate = unsold_width(rows(lower_ev), rows(upper_ev), limit, charge, temperature, mass_g)
    tabulated = hydrogen_width(np.where(known, sigma, 1.0), np.where(known, alpha, 0.3), temperature, mass_g)
    radiative = rows(log_gamma_rad)
    radiative = np.where(np.isfinite(radiative), 10.0**radiative, classical_radiative_width(rows(wavelength_cm)))
    stark = rows(log_gamma_stark)
    stark = np.where(np.isfinite(stark), 10.0**stark, stark_width(rows(upper_ev), limit, charge))
    return total_width(
        radiative,
        np.where(known, tabulated, estimate),
        stark,
        temperature,
        gas.h1,
        gas.helium,
        gas.electron_density,
    )
