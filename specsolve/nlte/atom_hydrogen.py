"""Computed rates of collisions with hydrogen, condensed from states of one term to the levels of a model atom.

Barklem 2018, A&A 612, A90: rate coefficients between 166 covalent states of Fe I and 25 ionic ones, (row, column) = (final,
initial). Only downward rates and those of ion + H- are taken; their reverses follow from detailed balance. A merged level
decays with the mean over its states, weighted with their statistical weights; states that were not computed count as zero.
"""

from __future__ import annotations

import gzip
import re
from pathlib import Path

import numpy as np

#: [K]
TEMPERATURES = (2000, 3000, 4000, 5000, 6000, 7000, 8000, 10000)
#: A state belongs to the level of its term within this distance [cm-1].
TERM_DISTANCE = 600.0
#: A merged level needs computed states with this share of its weight, or its collisions stay classical.
LEAST_SHARE = 0.2
#: Rate coefficients below this at all temperatures [cm3/s] count as not computed.
LEAST_RATE = 1e-20
LETTERS = "SPDFGHIKLMN"


def read_states(path: Path) -> list[tuple[str, float]]:
    """Label and energy [cm-1] of the states; ionic ones are called ``Fe+.`` and their core."""
    states = []
    for line in path.read_text().splitlines():
        words = line.split()
        if len(words) == 3:
            states.append((words[1], float(words[2])))
    return states


def term_of(label: str) -> tuple[str, float, int]:
    """Term such as ``5D*``, weight and parity of a label such as ``z5Do``, ``b1G2``, ``6s.5D`` or ``Fe+.a4F``."""
    found = re.search(r"(\d)([A-Z])(\d?)(o?)$", label)
    if found is None:
        raise ValueError(f"no term in the label {label!r}")
    multiplicity, letter, _, odd = found.groups()
    weight = int(multiplicity) * (2 * LETTERS.index(letter) + 1)
    return f"{multiplicity}{letter}{'*' if odd else ''}", float(weight), int(bool(odd))


def assign_states(states, names, energy, parity, stage) -> np.ndarray:
    """Place of the level of each state; -1 for none."""
    places = np.full(len(states), -1)
    merged = np.array([" levels " in name for name in names])
    last = np.array([name.split()[-1] for name in names])
    for k, (label, value) in enumerate(states):
        term, _, odd = term_of(label)
        of_stage = stage == (1 if label.startswith("Fe+") else 0)
        single = np.flatnonzero(of_stage & ~merged & (last == term))
        if single.size:
            best = single[np.argmin(np.abs(energy[single] - value))]
            if abs(energy[best] - value) < TERM_DISTANCE:
                places[k] = best
                continue
        broad = np.flatnonzero(of_stage & merged & (parity == odd))
        if broad.size:
            best = broad[np.argmin(np.abs(energy[broad] - value))]
            if abs(energy[best] - value) < TERM_DISTANCE:
                places[k] = best
    return places


def condensed_collisions(folder: Path, names, energy, parity, stage, observed, weight) -> dict:
    """Arrays of `ModelAtom` for collisions with hydrogen.

    Parameters
    ----------
    folder : Path
        Tables of Barklem 2018.
    names, energy, parity, stage, observed, weight : ndarray, shape (n,)
        Of the levels: energies above the ground of the own stage [cm-1]; `observed` is the weight without what is
        predicted, `weight` with it.
    """
    states = read_states(folder / "states.dat")
    places = assign_states(states, names, energy, parity, stage)
    g = np.array([term_of(label)[1] for label, _ in states])
    ionic = np.array([label.startswith("Fe+") for label, _ in states])
    rates = np.array([read_rates(folder / f"{t}_K.rates.gz", len(states)) for t in TEMPERATURES])
    known = places >= 0
    covered = np.bincount(places[known], g[known], minlength=len(names))
    enough = covered >= LEAST_SHARE * weight[: len(names)]
    excitation: dict[tuple[int, int], np.ndarray] = {}
    exchange: dict[tuple[int, int], np.ndarray] = {}
    for initial in np.flatnonzero(known):
        for final in np.flatnonzero(known & ~ionic):
            up, low = places[initial], places[final]
            value = rates[:, final, initial]
            if up == low or value.max() < LEAST_RATE or not (enough[up] and enough[low]):
                continue
            if ionic[initial]:
                share = min(g[initial] / observed[up], 1.0)
                exchange[low, up] = exchange.get((low, up), 0.0) + share * value
            elif energy[up] > energy[low]:
                share = min(g[initial] / max(weight[up], covered[up]), 1.0)
                excitation[up, low] = excitation.get((up, low), 0.0) + share * value
    pairs, transfers = sorted(excitation), sorted(exchange)
    return {
        "hydrogen_temperature": np.array(TEMPERATURES, dtype=float),
        "hydrogen_upper": np.array([up for up, _ in pairs], dtype=np.int64),
        "hydrogen_lower": np.array([low for _, low in pairs], dtype=np.int64),
        "hydrogen_log_rate": np.log10(np.maximum([excitation[p] for p in pairs], 1e-30)),
        "exchange_level": np.array([low for low, _ in transfers], dtype=np.int64),
        "exchange_ion": np.array([up for _, up in transfers], dtype=np.int64),
        "exchange_log_rate": np.log10(np.maximum([exchange[p] for p in transfers], 1e-30)),
    }


def read_rates(path: Path, n: int) -> np.ndarray:
    """Matrix (final, initial) of rate coefficients [cm3/s]."""
    with gzip.open(path, "rt") as handle:
        matrix = np.loadtxt(handle)
    if matrix.shape != (n, n):
        raise ValueError(f"{path.name} holds {matrix.shape} rates for {n} states")
    return matrix
