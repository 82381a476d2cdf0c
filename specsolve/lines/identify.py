"""Find a user's lines in the packaged table of transitions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .line_list import FLAG_AMBIGUOUS, FLAG_NO_HYDROGEN_DATA, FLAG_UNIDENTIFIED, LineList, transition_name
from .transitions import ION_STAGE, load_levels, load_transitions

WAVELENGTH_TOLERANCE = 0.05  # Angstrom
ENERGY_TOLERANCE = 0.02  # eV
EV_PER_WAVENUMBER = 1.239841984332e-4  # eV cm, from the 2019 SI
AMBIGUITY_DEX = 0.3  # a second match within this of the strongest is worth saying


@dataclass(frozen=True)
class Identification:
    """Where lines stand in the table.

    Attributes
    ----------
    index : ndarray, shape (n_lines,)
        Index into `load_transitions`, -1 if none fits.
    ambiguous : ndarray of bool, shape (n_lines,)
        A second transition fits and is nearly as strong.
    """

    index: np.ndarray
    ambiguous: np.ndarray


def match(ion, wavelength_air, excitation_potential) -> Identification:
    """Strongest transition of the same ion within 0.05 Angstrom and 0.02 eV of each line.

    Parameters
    ----------
    ion : sequence of str
    wavelength_air : ndarray, shape (n_lines,)
        [Angstrom].
    excitation_potential : ndarray, shape (n_lines,)
        [eV].

    Examples
    --------
    >>> int(match(["Fe I"], [6301.5], [3.65]).index[0]) >= 0
    True
    """
    table, levels = load_transitions(), load_levels()
    n_lines = len(wavelength_air)
    index = np.full(n_lines, -1, np.int64)
    ambiguous = np.zeros(n_lines, bool)
    bounds = {stage: np.searchsorted(table["stage"], [stage, stage + 1]) for stage in (1, 2)}
    for i, (name, wave, energy) in enumerate(zip(ion, wavelength_air, excitation_potential, strict=True)):
        stage = ION_STAGE.get(str(name))
        if stage is None:
            continue
        first, last = bounds[stage]
        low, high = first + np.searchsorted(
            table["wavelength_air"][first:last], [wave - WAVELENGTH_TOLERANCE, wave + WAVELENGTH_TOLERANCE]
        )
        rows = table[low:high]
        fits = np.abs(levels["energy"][rows["lower"]] * EV_PER_WAVENUMBER - energy) <= ENERGY_TOLERANCE
        if not fits.any():
            continue
        candidates = low + np.flatnonzero(fits)
        strength = table["log_gf"][candidates]
        order = np.argsort(-strength, kind="stable")
        index[i] = candidates[order[0]]
        ambiguous[i] = order.size > 1 and strength[order[0]] - strength[order[1]] < AMBIGUITY_DEX
    return Identification(index, ambiguous)


def identify(lines: LineList) -> LineList:
    """The list with terms, damping and transition names from the packaged table; given values are kept.

    A line without a match keeps its own numbers and is flagged; so is a line without a hydrogen cross-section.

    Examples
    --------
    >>> lines = identify(LineList.from_arrays([6301.50], ["Fe I"], [3.65], [-0.72]))
    >>> str(lines.lower_term[0]), bool(lines.broadening_sigma[0] > 0)
    ('z 5P*', True)
    """
    table, levels = load_transitions(), load_levels()
    found = match(lines.ion, lines.wavelength_air, lines.excitation_potential)
    known = found.index >= 0
    rows = table[np.where(known, found.index, 0)]

    def fill(given, packaged):
        return np.where(np.isnan(given) & known, packaged.astype(float), given)

    sigma = fill(lines.broadening_sigma, rows["broadening_sigma"])
    columns = {
        "broadening_sigma": sigma,
        "broadening_alpha": fill(lines.broadening_alpha, rows["broadening_alpha"]),
        "log_gamma_rad": fill(lines.log_gamma_rad, rows["log_gamma_rad"]),
        "lower_term": np.where(known & (lines.lower_term == ""), levels["term"][rows["lower"]], lines.lower_term),
        "upper_term": np.where(known & (lines.upper_term == ""), levels["term"][rows["upper"]], lines.upper_term),
        "transition": np.array(
            [
                transition_name(ion, row["wavelength_air"], levels["energy"][row["lower"]] * EV_PER_WAVENUMBER)
                if hit
                else own
                for ion, row, hit, own in zip(lines.ion, rows, known, lines.transition, strict=True)
            ],
            dtype=str,
        ),
        "flags": (
            (lines.flags & ~np.uint16(FLAG_UNIDENTIFIED | FLAG_NO_HYDROGEN_DATA | FLAG_AMBIGUOUS))
            | np.where(known, 0, FLAG_UNIDENTIFIED).astype(np.uint16)
            | np.where(np.isnan(sigma), FLAG_NO_HYDROGEN_DATA, 0).astype(np.uint16)
            | np.where(found.ambiguous, FLAG_AMBIGUOUS, 0).astype(np.uint16)
        ),
    }
    return lines.with_columns(**columns)
