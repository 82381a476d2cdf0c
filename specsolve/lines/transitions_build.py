"""Remake the packaged table of Fe I and Fe II transitions.

``python -m specsolve.lines.transitions_build REFERENCE OUTPUT`` (about 10 s) reads, below the folder REFERENCE,

- ``atomic/line_list/fe_I_II_all_transitions.csv.gz`` and ``levels_Z1_30.csv.gz``: Atomic Line List v3.00b4
  (van Hoof 2018, Galaxies 6, 63), wavelengths, levels, transition probabilities;
- ``atomic/broadening/hlist``: Barklem, Piskunov & O'Mara 2000, A&AS 142, 467, Fe I by hydrogen;
- ``atomic/broadening/fe2_broadening_2005.gz``: Barklem & Aspelund-Johansson 2005, A&A 435, 373, Fe II by hydrogen;
- ``atomic/iron_lines.ecsv``: cross-sections of further Fe I lines, interpolated in the tables of Anstee & O'Mara
  1995, Barklem & O'Mara 1997 and Barklem, O'Mara & Ross 1998.

and writes ``iron_transitions.npy`` and ``iron_levels.npy`` into OUTPUT. Radiative width: sum of all transition
probabilities out of both levels, the ground-connected ultraviolet included.
"""

from __future__ import annotations

import csv
import gzip
import sys
from pathlib import Path

import numpy as np

from .transitions import LEVEL_DTYPE, TRANSITION_DTYPE

WAVELENGTH_RANGE = (3500.0, 10000.0)  # Angstrom, air
OSCILLATOR_CM2_S = 1.4992e-16
"""gf = 1.4992e-16 (lambda / Angstrom)^2 g_upper A: m_e c / (8 pi^2 e^2) with lambda in Angstrom (textbook relation)."""


def read_levels(path: Path) -> np.ndarray:
    """Levels of Fe I and Fe II, sorted by stage and energy."""
    levels = []
    with gzip.open(path, "rt", newline="") as handle:
        for row in csv.reader(handle):
            if row[0] == "26" and row[1] in ("1", "2") and int(row[15]) > 0:
                levels.append((int(row[1]), float(row[20]), int(row[15]), term_words(row[6]), row[4].replace("o", "*")))
    return np.unique(np.array(levels, LEVEL_DTYPE))


def term_words(term: str) -> str:
    """Words of a packed term: ``z5Do`` becomes ``z 5D*`` (the star marks odd parity)."""
    head = term.rstrip("o*")
    start = next((i for i, letter in enumerate(head) if letter.isdigit()), 0)
    words = f"{head[:start]} {head[start:]}".strip()
    return words + ("*" if term.endswith(("o", "*")) else "")


def read_transitions(path: Path, levels: np.ndarray) -> np.ndarray:
    """E1 transitions in the wavelength range, with radiative widths, sorted by stage and wavelength."""
    with gzip.open(path, "rt") as handle:
        raw = np.loadtxt(handle, delimiter=",", skiprows=1, usecols=(0, 2, 3, 4, 5, 6, 7, 8))
    wavelength, stage, g_lower, g_upper, e_lower, e_upper, a_value, kind = raw.T
    index = np.stack([level_index(levels, stage, e, g) for e, g in ((e_lower, g_lower), (e_upper, g_upper))])
    rates = np.zeros(levels.size + 1)
    np.add.at(rates, index[1], a_value)
    gamma = rates[index[0]] + rates[index[1]]
    keep = (kind == 0) & (wavelength >= WAVELENGTH_RANGE[0]) & (wavelength <= WAVELENGTH_RANGE[1]) & (a_value > 0)
    table = np.zeros(keep.sum(), TRANSITION_DTYPE)
    table["stage"] = stage[keep]
    table["wavelength_air"] = wavelength[keep]
    table["lower"], table["upper"] = index[:, keep]
    table["log_gf"] = np.log10(OSCILLATOR_CM2_S * wavelength[keep] ** 2 * g_upper[keep] * a_value[keep])
    table["log_gamma_rad"] = np.log10(gamma[keep])
    table["broadening_sigma"] = np.nan
    table["broadening_alpha"] = np.nan
    if (table["lower"] >= levels.size).any() or (table["upper"] >= levels.size).any():
        raise ValueError("transitions with a level that the level table does not hold")
    return np.sort(table, order=["stage", "wavelength_air", "lower"])


def level_index(levels: np.ndarray, stage: np.ndarray, energy: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Index of each (stage, energy [cm-1], weight) in the level table, within 0.02 cm-1; the table's size if absent.

    Where the table holds the energy with other weights only (levels not resolved in J), the nearest is taken.
    """
    packed = levels["stage"] * 1.0e6 + levels["energy"]
    asked, inverse = np.unique(np.stack([stage * 1.0e6 + energy, weight], axis=1), axis=0, return_inverse=True)
    found = np.full(len(asked), levels.size)
    for i, (value, g) in enumerate(asked):
        low, high = np.searchsorted(packed, [value - 0.02, value + 0.02])
        if high > low:
            distance = np.abs(packed[low:high] - value) + np.where(levels["weight"][low:high] == g, 0.0, 1.0)
            found[i] = low + np.argmin(distance)
    return found[inverse.ravel()]


def add_hydrogen(table: np.ndarray, levels: np.ndarray, stage: int, wavelength, lower, sigma, alpha) -> int:
    """Enter cross-sections where ion, wavelength (0.03 Angstrom) and lower energy (2 cm-1) agree; count them."""
    first, last = np.searchsorted(table["stage"], [stage, stage + 1])
    waves = table["wavelength_air"][first:last]
    n_entered = 0
    for wave, energy, sig, alp in zip(wavelength, lower, sigma, alpha, strict=True):
        low, high = first + np.searchsorted(waves, [wave - 0.03, wave + 0.03])
        rows = table[low:high]
        fits = np.abs(levels["energy"][rows["lower"]] - energy) < 2.0
        if fits.any():
            chosen = low + np.flatnonzero(fits)[np.argmax(rows["log_gf"][fits])]
            if np.isnan(table["broadening_sigma"][chosen]):
                table["broadening_sigma"][chosen], table["broadening_alpha"][chosen] = sig, alp
                n_entered += 1
    return n_entered


def spread_over_multiplets(table: np.ndarray, levels: np.ndarray) -> int:
    """Give lines without a cross-section the mean of their multiplet (same terms and configurations); count them."""
    names = np.array([f"{s}|{t}|{c}" for s, _, _, t, c in levels.tolist()])
    _, group = np.unique(names, return_inverse=True)
    multiplet = group[table["lower"]].astype(np.int64) * (group.max() + 1) + group[table["upper"]]
    known = ~np.isnan(table["broadening_sigma"])
    n_entered = 0
    for value in np.unique(multiplet[known]):
        members = multiplet == value
        source = members & known
        empty = members & ~known
        if empty.any() and np.ptp(table["broadening_sigma"][source]) < 0.3 * table["broadening_sigma"][source].mean():
            table["broadening_sigma"][empty] = table["broadening_sigma"][source].mean()
            table["broadening_alpha"][empty] = table["broadening_alpha"][source].mean()
            n_entered += int(empty.sum())
    return n_entered


def build(reference: Path, output: Path) -> str:
    """Write both tables; returns one line about what they hold."""
    from astropy.table import Table

    atomic = Path(reference) / "atomic"
    levels = read_levels(atomic / "line_list" / "levels_Z1_30.csv.gz")
    table = read_transitions(atomic / "line_list" / "fe_I_II_all_transitions.csv.gz", levels)
    neutral = np.loadtxt(atomic / "broadening" / "hlist", usecols=(0, 1, 6, 10, 11, 12, 13))
    neutral = neutral[np.isclose(neutral[:, 0], 26.00, atol=1e-3)]
    lower = np.where(neutral[:, 2] > 0, neutral[:, 2], -1.0)
    with gzip.open(atomic / "broadening" / "fe2_broadening_2005.gz", "rt") as handle:
        ionized = np.array([line.split()[:8] for line in handle if line[:8].strip() == "26.01"], float)
    in_range = (ionized[:, 1] > WAVELENGTH_RANGE[0]) & (ionized[:, 1] < WAVELENGTH_RANGE[1])
    ionized = ionized[in_range]
    graded = Table.read(atomic / "iron_lines.ecsv", format="ascii.ecsv")
    usable = ~np.ma.getmaskarray(np.ma.asarray(graded["broadening_sigma_a02"]))
    graded = graded[usable]
    counts = [
        add_hydrogen(table, levels, 1, neutral[:, 1], lower, neutral[:, 5], neutral[:, 6]),
        add_hydrogen(table, levels, 2, ionized[:, 1], ionized[:, 4], ionized[:, 6], ionized[:, 7]),
    ]
    for stage, ion in ((1, "Fe I"), (2, "Fe II")):
        rows = graded[graded["ion"] == ion]
        counts.append(
            add_hydrogen(
                table,
                levels,
                stage,
                rows["wavelength_air"],
                np.asarray(rows["excitation_potential"]) * 8065.544,
                rows["broadening_sigma_a02"],
                rows["broadening_alpha"],
            )
        )
    counts.append(spread_over_multiplets(table, levels))
    output = Path(output)
    np.save(output / "iron_transitions.npy", table, allow_pickle=False)
    np.save(output / "iron_levels.npy", levels, allow_pickle=False)
    return f"{table.size} transitions, {levels.size} levels; hydrogen cross-sections {counts}"


if __name__ == "__main__":
    sys.stdout.write(build(Path(sys.argv[1]), Path(sys.argv[2])) + "\n")
