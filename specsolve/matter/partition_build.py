"""Remake the packaged table of partition functions and ionization energies.

    python -m specsolve.matter.partition_build REFERENCE_FOLDER

reads the partition functions of Barklem & Collet (2016, A&A 588, A96; atoms in the 2022 correction) and the levels and
ionization energies of the NIST Atomic Spectra Database, and writes ``specsolve/data/matter/partition.npz``.

Up to 10 000 K the table is that of Barklem & Collet; their few temperatures are joined with the help of the sum over
the NIST levels, which carries the curvature, so that only the small ratio of the two is interpolated. Above 10 000 K it
is the sum over NIST levels times the ratio at 10 000 K. That sum ends at the level whose binding energy is that of
hydrogenic n = 8: at the electron densities of atmospheres above 10 000 K (1e15 to 1e17 cm^-3) higher levels are
dissolved (Inglis & Teller 1939, ApJ 90, 439: log ne = 23.26 - 7.5 log n).
"""

from __future__ import annotations

import csv
import gzip
import sys
from collections import defaultdict
from pathlib import Path

import numpy as np

from specsolve.constants import BOLTZMANN_EV_K, RYDBERG_EV
from specsolve.matter.partition import STAGES, TABLE_PATH

LOWEST_K, HIGHEST_K, N_TEMPERATURES = 1500.0, 33000.0, 64
HIGHEST_BOUND_N = 8  # principal quantum number of the last level counted above 10 000 K
LOWEST_SOURCE_K = 1000.0  # first temperature of Barklem & Collet that is used


def read_barklem_collet(path: Path) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """Temperatures [K] and, per species as the source spells it ("Fe_I"), the partition functions."""
    temperatures, species = np.array([]), {}
    for line in path.read_text().splitlines():
        fields = line.replace("T [K]", "T_[K]").split()
        if fields and fields[0] == "T_[K]":
            temperatures = np.array(fields[1:], dtype=float)
        elif len(fields) == len(temperatures) + 1 > 1:
            species[fields[0]] = np.array(fields[1:], dtype=float)
    return temperatures, species


def read_nist(folder: Path) -> tuple[dict[str, np.ndarray], dict[str, float]]:
    """Levels (columns g, energy [eV]) and ionization energies [eV], keyed by names like "Fe I"."""
    levels = defaultdict(list)
    with gzip.open(folder / "levels.csv.gz", "rt") as lines:
        for g, energy, name in list(csv.reader(lines))[1:]:
            levels[name].append((float(g), float(energy)))
    with open(folder / "ionization_energies.csv") as lines:
        ionization = {name: float(value) for name, value in list(csv.reader(lines))[1:] if value}
    return {name: np.array(rows) for name, rows in levels.items()}, ionization


def level_sum(levels: np.ndarray, highest_energy: float, temperature: np.ndarray) -> np.ndarray:
    """Sum of g exp(-E/kT) over the levels up to `highest_energy` [eV]; shape of `temperature` [K]."""
    g, energy = levels[levels[:, 1] <= highest_energy].T
    return np.exp(-energy / (BOLTZMANN_EV_K * temperature[:, None])) @ g


def joined(temperature, source_k, source_u, levels, ionization_ev, stage) -> np.ndarray:
    """Logarithm of the partition function on `temperature` [K]; see the module's first lines."""
    margin = RYDBERG_EV * (stage / HIGHEST_BOUND_N) ** 2
    cut = max(ionization_ev - margin, levels[:, 1].min())
    ratio = np.log(source_u / level_sum(levels, cut, source_k))
    smooth = _spline(np.log(source_k), ratio, np.log(np.minimum(temperature, source_k[-1])))
    return np.log(level_sum(levels, cut, temperature)) + smooth


def _spline(x: np.ndarray, y: np.ndarray, new: np.ndarray) -> np.ndarray:
    from scipy.interpolate import PchipInterpolator

    return PchipInterpolator(x, y)(new)


def build(reference: Path) -> dict[str, np.ndarray]:
    """All arrays of the packaged table."""
    folder = reference / "atomic"
    source_k, atoms = read_barklem_collet(folder / "partition_functions" / "table8_vNov2022.dat")
    _, molecules = read_barklem_collet(folder / "partition_functions" / "table6.dat")
    levels, ionization = read_nist(folder / "nist")
    used = source_k >= LOWEST_SOURCE_K
    log_temperature = np.linspace(np.log(LOWEST_K), np.log(HIGHEST_K), N_TEMPERATURES)
    temperature = np.exp(log_temperature)
    names, rows, energies = [], [], []
    for source_name, values in atoms.items():
        symbol, _, numeral = source_name.partition("_")
        name = f"{symbol} {numeral}"
        if numeral not in STAGES or name not in levels or name not in ionization:
            continue
        stage = STAGES.index(numeral) + 1
        names.append(name)
        energies.append(ionization[name])
        rows.append(joined(temperature, source_k[used], values[used], levels[name], ionization[name], stage))
    for name in ("H II", "He III"):
        names.append(name)
        energies.append(np.inf)
        rows.append(np.zeros(N_TEMPERATURES))
    for source_name in ("H2", "H2+"):
        # Above 10 000 K the molecules hold < 1e-4 of hydrogen: continued with the last slope in ln T.
        x, y = np.log(source_k[used]), np.log(molecules[source_name][used])
        inside = _spline(x, y, np.minimum(log_temperature, x[-1]))
        slope = (y[-1] - y[-2]) / (x[-1] - x[-2])
        names.append(source_name)
        energies.append(np.nan)
        rows.append(inside + slope * np.maximum(log_temperature - x[-1], 0.0))
    return {
        "species": np.array(names),
        "ionization_energy_ev": np.array(energies),
        "log_temperature": log_temperature,
        "log_partition": np.array(rows),
        "source": np.array(
            "Partition functions: Barklem & Collet 2016, A&A 588, A96 (atoms: correction of 2022), above 10 000 K sums "
            "over levels of the NIST Atomic Spectra Database to hydrogenic n = 8; ionization energies: NIST ASD."
        ),
    }


if __name__ == "__main__":
    np.savez_compressed(TABLE_PATH, **build(Path(sys.argv[1])))
