"""The residual ultraviolet opacity per atom of neutral iron, fixed once on the flux of the Sun.

In each band between 290 and 400 nm the cross-section is the one with which the model of the Sun, its continuum and its
sampled lines emit the observed flux (ASTM G173-03, packaged as band averages; see
`specsolve.atmosphere.blanketing_calibration`). Nothing is observed below 290 nm: there the bluest value is kept, as the
values of the bluest three bands agree within 0.03 dex.

    python -m specsolve.nlte.residual_calibration      # prints the table (ten seconds)
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.blanketing_calibration import load_solar_flux
from specsolve.atmosphere.structure import solve_structure
from specsolve.constants import LIGHT_SPEED_CM_S, SOLAR_LOGG, SOLAR_TEFF
from specsolve.matter.composition import ELEMENTS, composition_for
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium
from specsolve.nlte.background import line_opacity, solve_background

POINTS = 200  # wavelengths a band
LONGEST_NM = 400.0
SMALLEST_LOG, LARGEST_LOG = -22.0, -16.0  # bracket of log10 cross-section [cm^2]
HALVINGS = 16


def solar_bands() -> tuple[np.ndarray, np.ndarray, np.ndarray, Callable[[np.ndarray], np.ndarray]]:
    """Edges [nm] and observed flux of the bands, and the model's flux as a function of the cross-sections [cm^2].

    Returns
    -------
    low_nm, high_nm, observed : ndarray, shape (n_bands,)
        Flux at the surface [erg s^-1 cm^-2 cm^-1].
    flux : callable
        From cross-sections (n_bands,) to the same flux of the model (n_bands,).
    """
    sun = load_solar_flux()
    used = sun.high_nm <= LONGEST_NM
    low, high, observed = sun.low_nm[used], sun.high_nm[used], sun.flux[used]
    composition = composition_for(0.0)
    model = solve_structure(SOLAR_TEFF, SOLAR_LOGG, composition, load_blanketing(0.0))
    gas = equilibrium(model.temperature, model.gas_pressure, composition)
    inside = (np.arange(POINTS) + 0.5) / POINTS
    wavelength = (low[:, None] + (high - low)[:, None] * inside).ravel() * 1e-7
    continuum, scattering = continuum_opacity(wavelength, gas)
    absorption = continuum + line_opacity(wavelength, gas, model.vmic, continuum + scattering)
    iron = gas.ions[ELEMENTS.index("Fe"), 0] / gas.density

    def flux(cross_section: np.ndarray) -> np.ndarray:
        absorbed = absorption + np.repeat(cross_section, POINTS)[:, None] * iron
        opacity = absorbed + scattering
        emitted = solve_background(wavelength, opacity, absorbed / opacity, gas.temperature, model.column_mass)
        per_cm = 4.0 * np.pi * emitted.surface * LIGHT_SPEED_CM_S / wavelength**2
        return per_cm.reshape(-1, POINTS).mean(axis=1)

    return low, high, observed, flux


def calibrate(observed: np.ndarray, flux: Callable[[np.ndarray], np.ndarray]) -> np.ndarray:
    """log10 of the cross-sections with which `flux` gives what is observed; `nan` outside the bracket."""
    low, high = np.full(observed.size, SMALLEST_LOG), np.full(observed.size, LARGEST_LOG)
    reachable = (flux(10.0**low) > observed) & (flux(10.0**high) < observed)
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        bright = flux(10.0**middle) > observed
        low, high = np.where(bright, middle, low), np.where(bright, high, middle)
    return np.where(reachable, 0.5 * (low + high), np.nan)


def main() -> None:
    """Print the table."""
    low, high, observed, flux = solar_bands()
    without, logs = flux(np.zeros(observed.size)), calibrate(observed, flux)
    print("band [nm]      model without / observed   log10 cross-section per Fe I [cm^2]")
    for row in zip(low, high, without / observed, logs, strict=True):
        print("{:6.1f}-{:6.1f}   {:10.3f}   {:20.3f}".format(*row))


if __name__ == "__main__":
    main()
