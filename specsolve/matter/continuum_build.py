"""Remake the packaged tables of continuous absorption.

    python -m specsolve.matter.continuum_build REFERENCE_FOLDER

writes ``specsolve/data/matter/continuum.npz``: over ln T and ln wavelength, thermally averaged free-free Gaunt factors
of hydrogen (Sutherland 1998, MNRAS 300, 321) and the free-free absorption of He-; and the levels of neutral atoms
(NIST Atomic Spectra Database) for bound-free absorption.
"""

from __future__ import annotations

import csv
import gzip
import sys
from pathlib import Path

import numpy as np

from specsolve.constants import (
    BOLTZMANN_ERG_K,
    ELECTRON_CHARGE_ESU,
    ELECTRON_MASS_G,
    EV_ERG,
    LIGHT_SPEED_CM_S,
    PLANCK_ERG_S,
    RADIATION_C2_CM_K,
    RYDBERG_EV,
)
from specsolve.matter.h2_plus_build import log_absorption
from specsolve.matter.hydrogen import KRAMERS_CM2
from specsolve.matter.partition import ionization_energy
from specsolve.matter.photoionization import TABLE_PATH

LOG_TEMPERATURE = np.linspace(np.log(1500.0), np.log(33000.0), 40)
LOG_WAVELENGTH = np.linspace(np.log(0.09e-4), np.log(110e-4), 90)  # wavelength in cm

# Momentum transfer cross-section of electrons on helium [1e-16 cm^2] against energy [eV]: Crompton, Elford & Robertson
# 1970, Aust. J. Phys. 23, 667, above 3 eV Milloy & Crompton 1977, Phys. Rev. A 15, 1847; figures from memory.
HELIUM_EV = np.array([0.0, 0.01, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 3.0, 4.0, 6.0, 8.0, 12.0, 20.0])
HELIUM_CROSS_SECTION = np.array([4.9, 5.2, 5.6, 5.8, 6.1, 6.5, 6.85, 6.99, 6.89, 6.6, 6.0, 5.3, 4.15, 2.7])

# Neutral atoms whose bound-free absorption is counted.
ABSORBERS = ("C", "N", "O", "Na", "Mg", "Al", "Si", "S", "K", "Ca", "Ti", "Cr", "Mn", "Fe", "Ni")
LEVEL_BIN_EV = 0.08  # levels closer than this are merged: Boltzmann factors change by < 1e-3 of the whole
# Ground terms with the fits of Verner et al. 1996, ApJ 465, 487: highest energy of the term [eV] (NIST).
GROUND_TERMS = {"Na I": 0.0, "Mg I": 0.0, "Al I": 0.02, "Si I": 0.03, "Ca I": 0.0, "Fe I": 0.13}
ATOMIC_NUMBERS = {"Na I": 11, "Mg I": 12, "Al I": 13, "Si I": 14, "Ca I": 20, "Fe I": 26}
# Low excited terms whose edges are known: ion, range of energy [eV], cross-section at the threshold [1e-18 cm^2] and
# the power of wavelength with which it falls. Mg I 3p 3P, Si I 1D and 1S: Travis & Matsushima 1968, ApJ 154, 689, and
# Vernazza, Avrett & Loeser 1976, ApJS 30, 1; Na I 3p: Rothe 1969, J. Quant. Spectrosc. Radiat. Transfer 9, 49.
# All four from memory.
EXCITED_EDGES = (
    ("Mg I", 2.6, 2.8, 20.0, 2.7),
    ("Si I", 0.7, 0.8, 35.0, 3.0),
    ("Si I", 1.8, 2.0, 46.0, 5.0),
    ("Na I", 2.0, 2.2, 7.6, 3.0),
)
LOWEST_BINDING_EV = 0.4  # levels bound less than this start to absorb beyond 3.1 um, where free-free rules


def hydrogen_gaunt(folder: Path) -> np.ndarray:
    """Free-free Gaunt factors <g>(u, gamma^2) of charge 1 on the grid (n_temperature, n_wavelength)."""
    from scipy.interpolate import RegularGridInterpolator

    rows = []
    for line in (folder / "gffgu.dat.txt").read_text().splitlines():
        fields = line.split()
        if len(fields) == 3 and fields[0][0].isdigit():
            rows.append([float(field) for field in fields])
    u, gamma2, gaunt = np.array(rows).T
    u_axis, gamma2_axis = np.unique(u), np.unique(gamma2)
    table = gaunt[np.lexsort((gamma2, u))].reshape(len(u_axis), len(gamma2_axis))
    interpolate = RegularGridInterpolator((np.log(u_axis), np.log(gamma2_axis)), np.log(table), method="cubic")
    temperature, wavelength = np.exp(LOG_TEMPERATURE)[:, None], np.exp(LOG_WAVELENGTH)
    log_u = np.log(RADIATION_C2_CM_K / (wavelength * temperature))
    log_gamma2 = np.log(RYDBERG_EV * EV_ERG / (BOLTZMANN_ERG_K * temperature)) + 0.0 * log_u
    return interpolate((log_u, log_gamma2))


def helium_free_free() -> np.ndarray:
    """ln of the He- free-free absorption per electron and helium atom [cm^5], stimulated emission included.

    The low-energy theorem for scattering by a short-range potential (Dalgarno & Lane 1966, ApJ 145, 623) joins the
    absorption to the momentum transfer cross-section Q: with v, v' the speeds before and after,
    e^2 / (6 pi h c nu^3) (1 - exp(-h nu/kT)) < v' (v'^2 Q(v) + v^2 Q(v')) >.
    """
    points, weights = np.polynomial.laguerre.laggauss(60)
    kt = BOLTZMANN_ERG_K * np.exp(LOG_TEMPERATURE)[:, None, None]
    frequency = LIGHT_SPEED_CM_S / np.exp(LOG_WAVELENGTH)[None, :, None]
    before = kt * points
    after = before + PLANCK_ERG_S * frequency
    maxwell = weights * 2.0 * np.sqrt(points / np.pi)  # F(E) dE with E = points * kT

    def cross_section(energy):
        return 1e-16 * np.interp(energy / EV_ERG, HELIUM_EV, HELIUM_CROSS_SECTION)

    speed2 = 2.0 / ELECTRON_MASS_G
    mean = np.sum(
        maxwell * np.sqrt(speed2 * after) * speed2 * (after * cross_section(before) + before * cross_section(after)),
        axis=-1,
    )
    factor = ELECTRON_CHARGE_ESU**2 / (6.0 * np.pi * PLANCK_ERG_S * LIGHT_SPEED_CM_S * frequency[..., 0] ** 3)
    stimulated = -np.expm1(-PLANCK_ERG_S * frequency[..., 0] / kt[..., 0])
    return np.log(factor * stimulated * mean)


def atomic_levels(folder: Path) -> dict[str, np.ndarray]:
    """Levels of the neutral absorbers, neighbours merged: ion, g, energy [eV], binding energy [eV], cross-section.

    The cross-section is given at the threshold [cm^2] with its power of wavelength: hydrogenic with the effective
    quantum number of the level (7.9e-18 n*, 3) but for `EXCITED_EDGES`.
    """
    levels = {f"{symbol} I": [] for symbol in ABSORBERS}
    with gzip.open(folder / "levels.csv.gz", "rt") as lines:
        for g, energy, name in list(csv.reader(lines))[1:]:
            if name in levels:
                levels[name].append((float(energy), float(g)))
    ions, weights, energies, bindings = [], [], [], []
    for name, rows in levels.items():
        limit = ionization_energy(name)
        energy, g = np.array(sorted(rows)).T
        kept = energy <= limit - LOWEST_BINDING_EV
        energy, g = energy[kept], g[kept]
        start = 0
        for i in range(1, len(energy) + 1):
            if i == len(energy) or energy[i] - energy[start] > LEVEL_BIN_EV:
                total = g[start:i].sum()
                centre = (g[start:i] * energy[start:i]).sum() / total
                ions.append(name)
                weights.append(total)
                energies.append(centre)
                bindings.append(limit - centre)
                start = i
    thresholds, slopes = KRAMERS_CM2 * np.sqrt(RYDBERG_EV / np.array(bindings)), np.full(len(ions), 3.0)
    for name, low, high, megabarn, slope in EXCITED_EDGES:
        chosen = (np.array(ions) == name) & (np.array(energies) > low) & (np.array(energies) < high)
        if not chosen.any():
            raise ValueError(f"no level of {name} between {low} and {high} eV")
        thresholds[chosen], slopes[chosen] = 1e-18 * megabarn, slope
    return {
        "level_threshold_cm2": thresholds,
        "level_slope": slopes,
        "level_ion": np.array(ions),
        "level_weight": np.array(weights),
        "level_energy_ev": np.array(energies),
        "level_binding_ev": np.array(bindings),
    }


def ground_fits(path: Path, levels: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Fits of Verner et al. 1996 for the ground terms: level, and E0 [eV], sigma0 [1e-18 cm^2], ya, P, yw, y0, y1."""
    fits = {}
    for line in path.read_text().splitlines():
        fields = line.split()
        if len(fields) == 12 and fields[0] == "Phot" and fields[1] == fields[2]:
            fits[int(fields[1])] = [float(field) for field in fields[5:]]
    rows, parameters = [], []
    for i, (name, energy) in enumerate(zip(levels["level_ion"], levels["level_energy_ev"], strict=True)):
        if energy <= GROUND_TERMS.get(str(name), -1.0):
            rows.append(i)
            parameters.append(fits[ATOMIC_NUMBERS[str(name)]])
    return {"ground_level": np.array(rows), "ground_fit": np.array(parameters)}


def build(reference: Path) -> dict[str, np.ndarray]:
    """All arrays of the packaged table."""
    levels = atomic_levels(reference / "atomic" / "nist")
    return {
        "log_temperature": LOG_TEMPERATURE,
        "log_wavelength_cm": LOG_WAVELENGTH,
        "log_hydrogen_gaunt": hydrogen_gaunt(reference / "continuum" / "gaunt"),
        "log_helium_minus_cm5": helium_free_free(),
        "log_h2_plus_cm5": log_absorption(LOG_TEMPERATURE, LOG_WAVELENGTH),
        **levels,
        **ground_fits(reference / "continuum" / "photoionization" / "photo_vfky.data", levels),
        "source": np.array(
            "Gaunt factors: Sutherland 1998, MNRAS 300, 321; He-: momentum transfer cross-sections with the low-energy "
            "theorem of Dalgarno & Lane 1966, ApJ 145, 623; H2+: own calculation, quasi-static (Bates 1952, MNRAS 112, "
            "40); levels: NIST ASD; ground terms: Verner et al. 1996, ApJ 465, 487."
        ),
    }


if __name__ == "__main__":
    np.savez_compressed(TABLE_PATH, **build(Path(sys.argv[1])))
