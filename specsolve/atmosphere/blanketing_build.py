"""Build the opacity distribution tables from the packaged lines, for any metallicity.

python -m specsolve.atmosphere.blanketing_build --output DIR [--mh -1 --mh 0]
"""

from __future__ import annotations

import argparse
import os
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing import (
    PACKAGED_MH,
    SUB_EDGES,
    Blanketing,
    load_multiplier,
    save_blanketing,
    table_path,
)
from specsolve.atmosphere.blanketing_lines import BlanketingLines, load_lines
from specsolve.atmosphere.blanketing_sampling import (
    HELIUM_RELATIVE,
    LEAST_FRACTION,
    LineConstants,
    line_constants,
    order_statistics,
    sample,
)
from specsolve.matter.composition import ATOMIC_WEIGHTS, composition_for, number_abundance
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import Gas, equilibrium, ion_density
from specsolve.matter.partition import partition_function

#: Edges of the bands, vacuum wavelengths [nm]. 168.2 Si I, 207.6 Al I, 251.4 Mg I: photoionization edges;
#: 364.7 and 820.4: Balmer and Paschen limits; 1642: limit of the bound-free absorption of H-.
BAND_EDGES_NM = np.array([
    150.0, 168.2, 185.0, 207.6, 225.0, 251.4, 265.0, 277.0, 290.0, 303.0, 315.0, 328.0, 340.0, 352.0, 364.7,
    375.0, 387.0, 400.0, 413.0, 427.0, 440.0, 455.0, 470.0, 487.0, 505.0, 525.0, 550.0, 580.0, 615.0, 655.0,
    700.0, 760.0, 820.4, 900.0, 1050.0, 1250.0, 1642.0, 2500.0,
])  # fmt: skip
LOG_TEMPERATURE = np.linspace(3.325, 4.20, 26)
LOG_PRESSURE = np.linspace(-3.5, 7.5, 23)
VMIC = (1.0, 2.0)
#: Samples in each band; four times as many change the Rosseland mean by 2e-4.
SAMPLES = 3000
#: Fraction of the continuous opacity (middle of the band) added to every line opacity: no line is followed below
#: `LEAST_FRACTION`, and smooth tables need a floor.
FLOOR_FRACTION = 1e-4

#: Standard atomic weights [u] of elements outside the equation of state (IUPAC 2021, abridged).
OTHER_ATOMIC_WEIGHTS = {
    "Li": 6.94, "Be": 9.0122, "B": 10.81, "F": 18.998, "P": 30.974, "Cl": 35.45, "Ar": 39.948, "Sc": 44.956,
    "V": 50.941, "Co": 58.933, "Cu": 63.546, "Zn": 65.38, "Ga": 69.723, "Ge": 72.63, "As": 74.922, "Br": 79.904,
    "Kr": 83.798, "Rb": 85.468, "Sr": 87.62, "Y": 88.906, "Mo": 95.95, "Ru": 101.07, "Rh": 102.91, "Pd": 106.42,
    "Ag": 107.87, "Cd": 112.41, "In": 114.82, "Sn": 118.71, "Sb": 121.76, "Te": 127.6, "Xe": 131.29, "Cs": 132.91,
    "Ba": 137.33, "La": 138.91, "Ce": 140.12, "Pr": 140.91, "Nd": 144.24, "Sm": 150.36, "Eu": 151.96, "Gd": 157.25,
    "Tb": 158.93, "Dy": 162.5, "Ho": 164.93, "Er": 167.26, "Tm": 168.93, "Yb": 173.04, "Lu": 174.97, "Hf": 178.49,
    "Ta": 180.95, "W": 183.84, "Ir": 192.22, "Pt": 195.08, "Au": 196.97, "Hg": 200.59, "Tl": 204.38, "Pb": 207.2,
    "Bi": 208.98,
}  # fmt: skip


def atomic_mass(symbol: str) -> float:
    """Standard atomic weight [u]."""
    return ATOMIC_WEIGHTS[symbol] if symbol in ATOMIC_WEIGHTS else OTHER_ATOMIC_WEIGHTS[symbol]


def sample_wavelengths(band_edges_cm: np.ndarray, n_samples: int) -> np.ndarray:
    """Middles of `n_samples` equal intervals in each band [cm], shape (n_bands, n_samples)."""
    fraction = (np.arange(n_samples) + 0.5) / n_samples
    return band_edges_cm[:-1, None] + np.diff(band_edges_cm)[:, None] * fraction


def gas_states(lines: BlanketingLines, gas: Gas, mh: float, alpha: float | None = None) -> list[dict]:
    """What `blanketing_sampling.sample` needs of each point of the gas."""
    per_ion = np.array([
        ion_density(gas, ion, number_abundance(ion.split()[0], mh, alpha)) / partition_function(ion, gas.temperature)
        for ion in lines.ions
    ])  # fmt: skip
    per_ion /= gas.density
    perturbers = gas.h1 + HELIUM_RELATIVE * gas.helium
    return [
        {
            "temperature": float(gas.temperature[i]),
            "per_ion": np.ascontiguousarray(per_ion[:, i]),
            "perturbers": float(perturbers[i]),
            "electron_density": float(gas.electron_density[i]),
        }
        for i in range(len(gas.temperature))
    ]


def distribution(
    lines: BlanketingLines,
    constants: LineConstants,
    gas: Gas,
    mh: float,
    vmic_kms: float,
    band_edges_cm: np.ndarray,
    n_samples: int = SAMPLES,
    alpha: float | None = None,
) -> np.ndarray:
    """Sub-bin opacities of each point of a gas, with the floor of `FLOOR_FRACTION`.

    Returns
    -------
    ndarray, shape (n_bands, n_sub, n)
        [cm^2 g^-1].
    """
    samples = sample_wavelengths(band_edges_cm, n_samples)
    n_bands = len(samples)
    sample_band = np.repeat(np.arange(n_bands), n_samples)
    flat = samples.ravel()
    nearest = np.minimum(np.searchsorted(flat, constants.wavelength_cm), len(flat) - 1)
    absorption, scattering = continuum_opacity(samples[:, n_samples // 2], gas)
    continuum = absorption + scattering
    least = LEAST_FRACTION * continuum
    result = np.empty((n_bands, len(SUB_EDGES) - 1, len(gas.temperature)))
    for i, state in enumerate(gas_states(lines, gas, mh, alpha)):
        opacity = sample(constants, flat, sample_band, nearest, state, vmic_kms, np.ascontiguousarray(least[:, i]))
        result[:, :, i] = order_statistics(opacity.reshape(n_bands, n_samples), SUB_EDGES)
    return result + FLOOR_FRACTION * continuum[:, None, :]


def build(
    mh: float,
    vmic: tuple[float, ...] = VMIC,
    lines: BlanketingLines | None = None,
    n_samples: int = SAMPLES,
    log_temperature: np.ndarray = LOG_TEMPERATURE,
    log_pressure: np.ndarray = LOG_PRESSURE,
    alpha: float | None = None,
) -> Blanketing:
    """Tables of one metallicity, any value.

    Parameters
    ----------
    mh : float
        [Fe/H] [dex].
    vmic : tuple of float
        Microturbulences of the opacity [km/s].
    lines : BlanketingLines, optional
        The packaged lines if not given.
    n_samples : int
        Samples in each band; a multiple of 200.
    log_temperature, log_pressure : ndarray
        Nodes, uniform; log10 of [K] and [dyn cm^-2].
    alpha : float, optional
        [alpha/Fe] [dex]; `specsolve.matter.composition.alpha_law` of the metallicity if not given.

    Examples
    --------
    >>> tables = build(-0.75, vmic=(1.0,), n_samples=200, log_temperature=np.linspace(3.6, 3.9, 4))
    >>> tables.log_opacity.shape
    (1, 37, 10, 4, 20)
    """
    lines = load_lines() if lines is None else lines
    constants = line_constants(lines, atomic_mass)
    band_edges_cm = BAND_EDGES_NM * 1e-7
    grid_t, grid_p = np.meshgrid(10.0**log_temperature, 10.0**log_pressure, indexing="ij")
    gas = equilibrium(grid_t.ravel(), grid_p.ravel(), composition_for(mh, alpha))
    log_opacity = []
    for vmic_kms in vmic:
        opacity = distribution(lines, constants, gas, mh, vmic_kms, band_edges_cm, n_samples, alpha)
        log_opacity.append(np.log10(opacity).reshape(*opacity.shape[:2], *grid_t.shape))
    return Blanketing(
        mh=mh,
        band_edges_cm=band_edges_cm,
        sub_weights=np.diff(SUB_EDGES),
        log_temperature=log_temperature,
        log_pressure=log_pressure,
        vmic=np.array(vmic),
        log_opacity=np.array(log_opacity, dtype=np.float32),
        multiplier=load_multiplier(band_edges_cm),
    )


def main(arguments: list[str] | None = None) -> None:
    """Command line of the module."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--output", type=Path, required=True)
    parser.add_argument("--mh", type=float, action="append", help="may be repeated; default all packaged")
    parser.add_argument("--samples", type=int, default=SAMPLES)
    options = parser.parse_args(arguments)
    options.output.mkdir(parents=True, exist_ok=True)
    for mh in options.mh or PACKAGED_MH:
        path = table_path(mh, options.output)
        aside = path.with_name(f".{path.name}")
        save_blanketing(build(mh, n_samples=options.samples), aside)
        os.replace(aside, path)


if __name__ == "__main__":
    main()
