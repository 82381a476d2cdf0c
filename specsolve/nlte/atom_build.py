"""Remake the packaged model atoms of iron.

``python -m specsolve.nlte.atom_build REFERENCE --size N --output specsolve/data/nlte`` (about 10 s) reads, below REFERENCE,

- ``atomic/line_list/fe_I_II_all_transitions.csv.gz`` and ``levels_Z1_30.csv.gz``: Atomic Line List v3.00b4 (van Hoof 2018,
  Galaxies 6, 63), levels and E1 transition probabilities;
- ``atomic/hydrogen_collisions``: Barklem 2018, A&A 612, A90 (BSD 3-Clause), rate coefficients of 191 states at 8 temperatures,

and writes ``iron_N.npz``, see `ModelAtom` and `write_atom`. Fe I terms stand one by one up to an energy that follows from
the size wanted; above it, and for levels that have no LS term, those of one parity are merged in intervals of 400 cm-1
(wider in smaller atoms, narrower in larger ones). The observed term system is incomplete there: members of the series of the
lowest two cores of Fe II are predicted (`predicted_levels`), and what is missing in an interval is added to its weight. The
lowest 31 terms of Fe II and the ground term of Fe III follow. Every Fe I and Fe II level is ionized to the ground term of
the next ion, hydrogenic: 7.91e-18 cm2 n* / z^2 at the edge (Mihalas 1978, Stellar Atmospheres, eq. 4-114, Gaunt factor 1).
"""

from __future__ import annotations

import argparse
import csv
import gzip
import re
import sys
from pathlib import Path

import numpy as np

from specsolve.constants import HC_EV_CM, RYDBERG_EV
from specsolve.lines.transitions_build import OSCILLATOR_CM2_S, term_words
from specsolve.matter.partition import ionization_energy
from specsolve.nlte.atom import ALLOWED, FORBIDDEN, ModelAtom
from specsolve.nlte.atom_hydrogen import condensed_collisions

#: Width of the intervals of merged levels [cm-1] in the atom of `FULL_SIZE` levels.
INTERVAL, FULL_SIZE = 400.0, 236
N_ION_TERMS = 31
#: Threshold cross-section of hydrogen [cm2].
HYDROGENIC_CM2 = 7.91e-18
#: Weight of the ground term of Fe III, 3d6 5D.
DOUBLE_ION_WEIGHT = 25.0
#: E1 lines whose summed f is smaller are left out: they carry no rates that matter beside collisions.
LEAST_F = 1e-6
#: Lines between terms of different multiplicity with a smaller f count as forbidden in electron collisions, as do all
#: below the second value.
INTERCOMBINATION_F, PERMITTED_F = 1e-2, 1e-4
#: Cores of predicted series: energy above the ground level of Fe II [cm-1], weight (a 6D, a 4F: means of the terms).
CORES = ((416.0, 30.0), (2417.0, 28.0))
#: Quantum defects of s, p, d, f, g and h electrons about them, from the observed 6s, 6p, 5d, 4f and 5g terms.
QUANTUM_DEFECTS = (2.35, 1.75, 1.05, 0.01, 0.0, 0.0)
HIGHEST_N = 9
SOURCE = (
    "levels and transition probabilities: Atomic Line List v3.00b4 (van Hoof 2018, Galaxies 6, 63); collisions with "
    "hydrogen condensed from Barklem 2018, A&A 612, A90, tables Copyright (c) 2020 Paul Barklem, BSD 3-Clause License: "
    "redistribution permitted with this notice, provided as is without warranty; photoionization hydrogenic"
)


def read_levels(path: Path) -> np.ndarray:
    """Levels of Fe I and Fe II with term, configuration and parity (0 even, 1 odd, -1 unknown)."""
    rows = []
    with gzip.open(path, "rt", newline="") as handle:
        for row in csv.reader(handle):
            if row[0] == "26" and row[1] in ("1", "2") and int(row[15]) > 0:
                rows.append(
                    (int(row[1]), float(row[20]), float(row[15]), term_words(row[6]), row[4], parity_of(row[4]))
                )
    kind = [("stage", int), ("energy", float), ("weight", float), ("term", "U16"), ("config", "U32"), ("parity", int)]
    levels = np.array(rows, dtype=kind)
    return levels[np.lexsort((levels["energy"], levels["stage"]))]


def parity_of(configuration: str) -> int:
    """Parity of a configuration such as ``3d6.(5D).4s.4p.(3P*)``: the sum of l over the electrons."""
    outside = re.sub(r"\([^)]*\)", "", configuration)
    shells = re.findall(r"\d([spdfgh])(\d*)", outside)
    if not shells:
        return -1
    return sum("spdfgh".index(letter) * int(count or 1) for letter, count in shells) % 2


def read_transitions(path: Path, levels: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Lower and upper places in `levels`, A [s^-1] of the E1 transitions whose levels are both known."""
    with gzip.open(path, "rt") as handle:
        raw = np.loadtxt(handle, delimiter=",", skiprows=1, usecols=(2, 3, 4, 5, 6, 7, 8))
    raw = raw[(raw[:, 6] == 0) & (raw[:, 5] > 0.0)]
    stage, g_low, g_up, e_low, e_up, a_value, _ = raw.T
    low, up = place(levels, stage, e_low, g_low), place(levels, stage, e_up, g_up)
    good = (low >= 0) & (up >= 0)
    return low[good], up[good], a_value[good]


def place(levels: np.ndarray, stage, energy, weight) -> np.ndarray:
    """Places of levels by stage, energy [cm-1] (within 0.02) and, among coincident ones, weight; -1 if absent."""
    packed = levels["stage"] * 1e6 + levels["energy"]
    asked, inverse = np.unique(np.stack([stage * 1e6 + energy, weight], axis=1), axis=0, return_inverse=True)
    found = np.full(len(asked), -1)
    for i, (value, g) in enumerate(asked):
        low, high = np.searchsorted(packed, [value - 0.02, value + 0.02])
        if high > low:
            distance = np.abs(packed[low:high] - value) + (levels["weight"][low:high] != g)
            found[i] = low + np.argmin(distance)
    return found[inverse.ravel()]


def complete_parities(levels: np.ndarray, low: np.ndarray, up: np.ndarray) -> None:
    """Levels without configuration get the parity opposite to that of their E1 partners; in place."""
    for i in np.flatnonzero(levels["parity"] < 0):
        partners = np.concatenate([up[low == i], low[up == i]])
        known = levels["parity"][partners]
        known = known[known >= 0]
        levels["parity"][i] = 1 - round(known.mean()) if known.size else 0


def merge(levels: np.ndarray, limit_cm: float, boundary: float, width: float) -> np.ndarray:
    """Number of the model level of every level, -1 for none; ascending in stage and energy."""
    keys: dict[tuple, list[int]] = {}
    for i, level in enumerate(levels):
        stage, energy, term = int(level["stage"]), float(level["energy"]), str(level["term"])
        if stage == 1 and energy < limit_cm:
            single = energy < boundary and is_term(term)
            key = (1, term, str(level["config"])) if single else (1, int(energy // width), int(level["parity"]))
            keys.setdefault(key, []).append(i)
        elif stage == 2:
            keys.setdefault((2, term, str(level["config"])), []).append(i)
    mean = {
        key: (key[0], np.average(levels["energy"][rows], weights=levels["weight"][rows])) for key, rows in keys.items()
    }
    order = sorted(keys, key=mean.__getitem__)
    order = [key for key in order if key[0] == 1] + [key for key in order if key[0] == 2][:N_ION_TERMS]
    number = np.full(levels.size, -1)
    for n, key in enumerate(order):
        number[keys[key]] = n
    return number


def is_term(term: str) -> bool:
    """Whether the words name an LS term, as ``z 5D*`` and not ``9/2[7/2]*`` or ``?`` do."""
    return "?" not in term and "[" not in term


def divide(levels: np.ndarray, limit: float, size: int) -> tuple[float, float]:
    """Highest energy of single terms and width of the intervals above [cm-1] for an atom of the size.

    Below `FULL_SIZE` fewer terms stand alone and intervals are wider; above, only the intervals become narrower.
    """

    def nearest(trials, target):
        sizes = np.array([merge(levels, limit, *trial).max() + 2 for trial in trials])
        return trials[np.argmin(np.abs(sizes - target))]

    least = min(size, FULL_SIZE)
    width = INTERVAL * (FULL_SIZE / least) ** 2
    boundary, width = nearest([(e, width) for e in np.arange(30000.0, limit, 50.0)], least)
    if size <= FULL_SIZE:
        return boundary, width
    return nearest([(boundary, w) for w in np.geomspace(width, 20.0, 120)], size)


def predicted_levels(limit_cm: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Energy [cm-1], weight and parity of the series of the lowest cores up to n = `HIGHEST_N`."""
    rydberg = RYDBERG_EV / HC_EV_CM
    rows = []
    for core, weight in CORES:
        for angular, defect in enumerate(QUANTUM_DEFECTS):
            for n in range(5 if angular < 3 else angular + 1, HIGHEST_N + 1):
                energy = limit_cm + core - rydberg / (n - defect) ** 2
                if energy < limit_cm:
                    rows.append((energy, weight * 2.0 * (2 * angular + 1), angular % 2))
    energy, weight, parity = np.array(rows).T
    return energy, weight, parity.astype(int)


def build_atom(reference: Path, size: int) -> tuple[ModelAtom, np.ndarray]:
    """The model atom of about `size` levels, and its members: place in the atom, stage, energy [cm-1], weight."""
    folder = Path(reference) / "atomic"
    levels = read_levels(folder / "line_list" / "levels_Z1_30.csv.gz")
    low, up, a_value = read_transitions(folder / "line_list" / "fe_I_II_all_transitions.csv.gz", levels)
    complete_parities(levels, low, up)
    first, second = ionization_energy("Fe I"), ionization_energy("Fe II")
    limit = first / HC_EV_CM
    boundary, width = divide(levels, limit, size)
    number = merge(levels, limit, boundary, width)
    n = number.max() + 1
    inside = number >= 0
    member = number[inside]
    weight = np.bincount(member, levels["weight"][inside], minlength=n)
    energy = np.bincount(member, (levels["weight"] * levels["energy"])[inside], minlength=n) / weight
    stage = np.zeros(n, dtype=np.int64)
    stage[member] = levels["stage"][inside] - 1
    parity, names, members = describe(levels, number, n, boundary)
    observed = weight.copy()
    top_up(energy, weight, members, parity, stage, boundary, width, limit)

    energy_ev = np.append(energy * HC_EV_CM + np.where(stage == 1, first, 0.0), first + second)
    stage, weight = np.append(stage, 2), np.append(weight, DOUBLE_ION_WEIGHT)
    ion = int(np.flatnonzero(stage == 1)[0])
    level = np.arange(n)
    target = np.where(stage[:n] == 0, ion, n)
    threshold = energy_ev[target] - energy_ev[:n]
    n_star = (stage[:n] + 1.0) * np.sqrt(RYDBERG_EV / threshold)
    lines = merged_lines(levels, number, low, up, a_value, energy_ev, weight, names)
    hydrogen = condensed_collisions(folder / "hydrogen_collisions", names, energy, parity, stage[:n], observed, weight)
    atom = ModelAtom(
        energy_ev=energy_ev,
        weight=weight,
        stage=stage,
        parity=np.append(parity, 0),
        members=np.append(members, 1),
        name=np.append(names, "Fe III 3d6 5D"),
        limit_ev=np.where(stage == 0, energy_ev[ion], np.where(stage == 1, energy_ev[n], np.inf)),
        continuum_level=level,
        continuum_target=target,
        continuum_edge_cm=HC_EV_CM / threshold,
        continuum_sigma=HYDROGENIC_CM2 * n_star / (stage[:n] + 1.0) ** 2,
        continuum_n_star=n_star,
        source=SOURCE,
        **lines,
        **hydrogen,
    )
    table = np.stack([member, levels["stage"][inside] - 1, levels["energy"][inside], levels["weight"][inside]])
    return atom, table


def describe(
    levels: np.ndarray, number: np.ndarray, n: int, boundary: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Parity, name and number of terms of each model level."""
    parity, members, names = np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.int64), []
    for i in range(n):
        rows = levels[number == i]
        parity[i] = rows["parity"][0]
        terms = np.unique(np.char.add(rows["term"], rows["config"]))
        members[i] = max(terms.size, 1)
        ion = ("Fe I", "Fe II")[rows["stage"][0] - 1]
        energy = np.average(rows["energy"], weights=rows["weight"])
        single = terms.size == 1 and (ion == "Fe II" or energy < boundary) and is_term(rows["term"][0])
        names.append(f"{ion} {rows['term'][0]}" if single else f"{ion} {rows.size} levels {('even', 'odd')[parity[i]]}")
    return parity, np.array(names), members


def top_up(energy, weight, members, parity, stage, boundary, width, limit) -> None:
    """Raise the weights of merged levels to those of the predicted series; in place.

    What is predicted in an interval without an observed level of its parity joins the nearest merged level of that parity.
    """
    predicted = predicted_levels(limit)
    for odd in (0, 1):
        merged = np.flatnonzero((stage == 0) & (parity == odd) & (energy >= boundary))
        if not merged.size:
            continue
        of_parity = (predicted[2] == odd) & (predicted[0] >= boundary)
        nearest = merged[np.argmin(np.abs(energy[merged][:, None] - predicted[0][of_parity]), axis=0)]
        expected = np.bincount(nearest, predicted[1][of_parity], minlength=energy.size)
        missing = np.maximum(expected - weight, 0.0)
        members += np.round(missing / 25.0).astype(np.int64)  # a predicted term has about the weight of a 5D
        weight += missing


def merged_lines(levels, number, low, up, a_value, energy_ev, weight, names) -> dict:
    """Arrays of the merged lines, see `ModelAtom`."""
    energy, g = levels["energy"], levels["weight"]
    out = np.zeros(levels.size)
    np.add.at(out, up, a_value)
    gamma = out[low] + out[up]
    i, j = number[low], number[up]
    difference = energy[up] - energy[low]
    good = (i >= 0) & (j >= 0) & (i != j) & (difference > 0.0)
    good[good] &= energy_ev[j[good]] > energy_ev[i[good]]
    i, j, difference, gamma = i[good], j[good], difference[good], gamma[good]
    wavelength = 1.0 / difference
    gf = OSCILLATOR_CM2_S * (wavelength * 1e8) ** 2 * g[up[good]] * a_value[good]
    pair, inverse = np.unique(i * 10000 + j, return_inverse=True)
    total, squares = np.bincount(inverse, gf), np.bincount(inverse, gf**2)
    lower, upper = pair // 10000, pair % 10000
    f = total / weight[lower]
    multiplicity = np.array([spin(name) for name in names])
    same = (multiplicity[lower] == multiplicity[upper]) | (multiplicity[lower] == 0) | (multiplicity[upper] == 0)
    permitted = f > np.where(same, PERMITTED_F, INTERCOMBINATION_F)
    keep = f > LEAST_F
    return {
        "line_lower": lower[keep],
        "line_upper": upper[keep],
        "line_wavelength_cm": (np.bincount(inverse, gf * wavelength) / total)[keep],
        "line_f": f[keep],
        "line_n_effective": (total**2 / squares)[keep],
        "line_gamma_rad": (np.bincount(inverse, gf * gamma) / total)[keep],
        "line_kind": np.where(permitted, ALLOWED, FORBIDDEN)[keep],
    }


def spin(name: str) -> int:
    """Multiplicity in the name of a single term, 0 for merged levels."""
    found = re.search(r" (\d)[A-Z]\*?$", name)
    return int(found.group(1)) if found else 0


def write_atom(atom: ModelAtom, members: np.ndarray, path: Path) -> None:
    """Write the atom with its members as one compressed archive of plain arrays."""
    from dataclasses import fields

    arrays = {item.name: np.asarray(getattr(atom, item.name)) for item in fields(ModelAtom)}
    np.savez_compressed(path, **arrays, members_of_levels=members)


def boundary_of(atom: ModelAtom) -> float:
    """Energy of the highest Fe I term that stands alone [eV]."""
    single = np.array([" levels " not in name for name in atom.name]) & (atom.stage == 0)
    return float(atom.energy_ev[single].max())


def main() -> None:
    parser = argparse.ArgumentParser(description="Remake a packaged model atom of iron.")
    parser.add_argument("reference", type=Path)
    parser.add_argument("--size", type=int, default=FULL_SIZE)
    parser.add_argument("--output", type=Path, required=True)
    options = parser.parse_args()
    atom, members = build_atom(options.reference, options.size)
    write_atom(atom, members, options.output / f"iron_{options.size}.npz")
    sys.stdout.write(
        f"{atom.n_levels} levels ({np.bincount(atom.stage).tolist()} by stage), {atom.n_lines} lines, "
        f"terms to {boundary_of(atom):.2f} eV, "
        f"{atom.hydrogen_upper.size} rates of excitation by hydrogen, {atom.exchange_level.size} of charge transfer\n"
    )


if __name__ == "__main__":
    main()
