"""Make the compact line table of the line blanketing from the published lists.

Three published sources, joined without counting a transition twice:

* Fe I and Fe II: every transition of the Atomic Line List v3.00b4 (van Hoof 2018,
  Galaxies 6, 63), electric dipole and forbidden;
* other elements, 2000-10000 A: lines of the NIST Atomic Spectra Database (public domain) that
  carry a transition probability;
* other elements, 4300-8100 A: electric-dipole lines of the Atomic Line List that NIST
  does not have. A line counts as the same if the ion agrees, the lower levels agree to
  0.002 eV and the wavelengths to 0.05 A.

Hydrogen lines are left out (they need their own broadening theory), molecules are in none of the lists,
and stages beyond the second are left out (negligible below 12000 K).

    python -m specsolve.atmosphere.blanketing_convert --reference DIR --output DIR
"""

from __future__ import annotations

import argparse
import csv
import gzip
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing_lines import BlanketingLines, save_lines
from specsolve.matter.composition import solar_abundance

#: 1 eV in cm^-1 (CODATA 2018).
EV_WAVENUMBER = 8065.543937
#: log10 of the factor of gf = factor * wavelength_cm^2 * g_up * A  (m c / 8 pi^2 e^2, cgs).
LOG_GF_FACTOR = np.log10(1.4991938)
#: Bounds on the vacuum wavelength of the lines kept [A]; wider than the bands because wings reach in.
WAVELENGTH_RANGE_A = (1480.0, 25600.0)
#: A line is kept if log gf + log(N/N_H, solar) - STRENGTH_SLOPE * E exceeds this [dex]; a line at the limit
#: stays below 1e-4 of the continuum at line centre in every model of the default axes.
STRENGTH_LIMIT = -15.5
STRENGTH_SLOPE = 0.7
#: Tolerances within which lines of two lists are the same transition [A], [eV].
SAME_WAVELENGTH_A = 0.05
SAME_ENERGY_EV = 0.002
#: Classical damping constant times wavelength^2 [s^-1 cm^2]: 8 pi^2 e^2 / (3 m c).
CLASSICAL_DAMPING = 0.2223

_SYMBOLS = (
    "H He Li Be B C N O F Ne Na Mg Al Si P S Cl Ar K Ca Sc Ti V Cr Mn Fe Co Ni Cu Zn Ga Ge As Se Br Kr Rb Sr Y Zr Nb "
    "Mo Tc Ru Rh Pd Ag Cd In Sn Sb Te I Xe Cs Ba La Ce Pr Nd Pm Sm Eu Gd Tb Dy Ho Er Tm Yb Lu Hf Ta W Re Os Ir Pt Au "
    "Hg Tl Pb Bi Po At Rn Fr Ra Ac Th Pa U"
)
SYMBOLS = _SYMBOLS.split()
STAGES = ("I", "II")


def read_atomic_line_list(path: Path) -> dict[str, np.ndarray]:
    """Read a table of the Atomic Line List: ion, vacuum wavelength [A], E_low, E_up [eV], gf, A [s^-1]."""
    with gzip.open(path, "rt") as stream:
        data = np.genfromtxt(stream, delimiter=",", names=True)
    data = data[(data["A_s1"] > 0) & (data["E_up_cm1"] > data["E_low_cm1"])]
    wavelength = 1e8 / (data["E_up_cm1"] - data["E_low_cm1"])
    ion = [
        f"{SYMBOLS[int(z) - 1]} {STAGES[int(stage) - 1]}" for z, stage in zip(data["Z"], data["ion_stage"], strict=True)
    ]
    return {
        "ion": np.array(ion),
        "wavelength": wavelength,
        "e_low": data["E_low_cm1"] / EV_WAVENUMBER,
        "e_up": data["E_up_cm1"] / EV_WAVENUMBER,
        "log_gf": LOG_GF_FACTOR + np.log10((wavelength * 1e-8) ** 2 * data["g_up"] * data["A_s1"]),
        "rate": data["A_s1"],
    }


def read_nist(path: Path) -> dict[str, np.ndarray]:
    """Read the NIST table (same columns); rows without probability or lower level are left out."""
    known = set(SYMBOLS)
    columns: dict[str, list] = {"ion": [], "wavelength": [], "e_low": [], "log_gf": [], "rate": []}
    with gzip.open(path, "rt") as stream:
        for row in csv.DictReader(stream):
            wavelength = row["ritz_wl_vac(nm)"] or row["obs_wl_vac(nm)"]
            needed = (row["Aki(s^-1)"], row["Ei(eV)"], row["g_k"], wavelength)
            if not all(needed) or row["element"] not in known or row["sp_num"] not in ("1", "2"):
                continue
            rate, e_low, g_up, wavelength_nm = (float(value) for value in needed)
            columns["ion"].append(f"{row['element']} {STAGES[int(row['sp_num']) - 1]}")
            columns["wavelength"].append(10.0 * wavelength_nm)
            columns["e_low"].append(e_low)
            columns["log_gf"].append(LOG_GF_FACTOR + np.log10((1e-7 * wavelength_nm) ** 2 * g_up * rate))
            columns["rate"].append(rate)
    lines = {name: np.array(values) for name, values in columns.items()}
    lines["e_up"] = lines["e_low"] + 1e8 / lines["wavelength"] / EV_WAVENUMBER
    _, first = np.unique(
        np.stack([lines["wavelength"], lines["e_low"], lines["log_gf"], [hash_name(ion) for ion in lines["ion"]]]),
        axis=1,
        return_index=True,
    )
    return select(lines, np.sort(first))


def hash_name(ion: str) -> float:
    """A number that identifies an ion: Z + stage / 10."""
    symbol, stage = ion.split()
    return SYMBOLS.index(symbol) + 1 + 0.1 * (STAGES.index(stage) + 1)


def select(lines: dict[str, np.ndarray], which) -> dict[str, np.ndarray]:
    """The same columns, some rows."""
    return {name: values[which] for name, values in lines.items()}


def join(parts: list[dict[str, np.ndarray]]) -> dict[str, np.ndarray]:
    """Rows of several tables under each other."""
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def absent_from(lines: dict[str, np.ndarray], other: dict[str, np.ndarray]) -> np.ndarray:
    """True for each row of `lines` that `other` does not have (tolerances in the module's constants)."""
    absent = np.ones(len(lines["ion"]), dtype=bool)
    for ion in np.unique(lines["ion"]):
        theirs = np.flatnonzero(other["ion"] == ion)
        theirs = theirs[np.argsort(other["wavelength"][theirs])]
        wavelengths = other["wavelength"][theirs]
        for row in np.flatnonzero(lines["ion"] == ion):
            first = np.searchsorted(wavelengths, lines["wavelength"][row] - SAME_WAVELENGTH_A)
            last = np.searchsorted(wavelengths, lines["wavelength"][row] + SAME_WAVELENGTH_A)
            near = other["e_low"][theirs[first:last]]
            absent[row] = not np.any(np.abs(near - lines["e_low"][row]) <= SAME_ENERGY_EV)
    return absent


def radiative_damping(lines: dict[str, np.ndarray], floor_classical: bool) -> np.ndarray:
    """Sum of A out of both levels of each line [s^-1]; levels are told apart by ion and energy (1e-5 eV).

    Lists that do not reach far into the ultraviolet give too small a sum: `floor_classical` then puts the classical
    damping constant in place of any smaller sum.
    """
    ions = np.array([hash_name(ion) for ion in lines["ion"]])
    upper = np.round(ions * 10) * 1e8 + np.round(lines["e_up"] * 1e5)
    lower = np.round(ions * 10) * 1e8 + np.round(lines["e_low"] * 1e5)
    levels, where = np.unique(upper, return_inverse=True)
    total = np.bincount(where, weights=lines["rate"])
    position = np.clip(np.searchsorted(levels, lower), 0, len(levels) - 1)
    from_lower = np.where(levels[position] == lower, total[position], 0.0)
    damping = total[where] + from_lower
    if floor_classical:
        damping = np.maximum(damping, CLASSICAL_DAMPING / (lines["wavelength"] * 1e-8) ** 2)
    return damping


def convert(reference: Path) -> BlanketingLines:
    """Join the published lists under `reference` into one table, weakest lines left out."""
    folder = Path(reference) / "atomic"
    iron = read_atomic_line_list(folder / "line_list" / "fe_I_II_all_transitions.csv.gz")
    iron["damping"] = radiative_damping(iron, floor_classical=False)
    others = read_atomic_line_list(folder / "line_list" / "all_elements_I_II_E1_4300_8100A.csv.gz")
    nist = read_nist(folder / "nist" / "lines_200_1000nm.csv.gz")

    def foreign(lines):
        return np.array([not ion.startswith(("Fe ", "H ")) for ion in lines["ion"]])

    nist = select(nist, foreign(nist))
    others = select(others, foreign(others))
    rest = join([nist, select(others, absent_from(others, nist))])
    rest["damping"] = radiative_damping(rest, floor_classical=True)
    lines = join([iron, rest])

    symbols, element = np.unique([ion.split()[0] for ion in lines["ion"]], return_inverse=True)
    abundance = np.array([known_abundance(symbol) for symbol in symbols])[element]
    low, high = WAVELENGTH_RANGE_A
    keep = (lines["wavelength"] > low) & (lines["wavelength"] < high)
    keep &= lines["log_gf"] + abundance - 12.0 - STRENGTH_SLOPE * lines["e_low"] > STRENGTH_LIMIT
    lines = select(lines, keep)
    lines = select(lines, np.argsort(lines["wavelength"], kind="stable"))
    ions, ion_index = np.unique(lines["ion"], return_inverse=True)
    return BlanketingLines(
        ions=tuple(str(ion) for ion in ions),
        ion_index=ion_index.astype(np.int64),
        wavelength_cm=lines["wavelength"] * 1e-8,
        excitation_potential=lines["e_low"],
        log_gf=lines["log_gf"],
        log_gamma_rad=np.log10(lines["damping"]),
    )


def known_abundance(symbol: str) -> float:
    """Solar A(element), or minus infinity (so that its lines drop out) where the Sun's is not known."""
    try:
        value = solar_abundance(symbol)
    except (KeyError, ValueError):
        return -np.inf
    return value if np.isfinite(value) else -np.inf


def main(arguments: list[str] | None = None) -> None:
    """Command line of the module."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--reference", type=Path, required=True)
    parser.add_argument("--output", type=Path, required=True)
    options = parser.parse_args(arguments)
    save_lines(convert(options.reference), options.output / "lines.npz")


if __name__ == "__main__":
    main()
