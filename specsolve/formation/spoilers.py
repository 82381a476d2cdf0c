"""What spoils a line in a kind of star: neighbours, strength, molecules, the Earth's air, hydrogen wings."""

from __future__ import annotations

import numpy as np

from specsolve.constants import ANGSTROM_CM
from specsolve.lines import LineList, air_to_vacuum
from specsolve.matter.composition import number_abundance
from specsolve.matter.equation_of_state import Gas
from specsolve.matter.line_opacity import line_strength

NEIGHBOUR_WIDTH = 0.06
"""Standard deviation [Angstrom] of the Gaussian by which a neighbour's strength counts: resolving power 40 000."""
LEAST_RATIO = 0.02  # neighbours below this share of the line's strength are not told
SATURATED, WINGED, FAINT = -4.85, -4.5, -6.2
"""log10(W / lambda) above which a line is saturated, shows damping wings, and below which it is faint."""

TELLURIC = (
    (5880.0, 5970.0, "telluric H2O"),
    (6276.0, 6320.0, "telluric O2"),
    (6465.0, 6610.0, "telluric H2O, weak"),
    (6867.0, 6950.0, "telluric O2"),
    (6950.0, 7430.0, "telluric H2O"),
    (7593.0, 7700.0, "telluric O2"),
)
HYDROGEN = (
    (4325.0, 4355.0, "wing of H gamma"),
    (4846.0, 4876.0, "wing of H beta"),
    (6548.0, 6578.0, "wing of H alpha"),
)
MOLECULES = {
    "sun": ((4290.0, 4314.0, "CH"),),
    "k_dwarf": ((4290.0, 4400.0, "CH"), (4740.0, 5215.0, "MgH")),
    "cool_giant": (
        (4290.0, 4400.0, "CH"),
        (4640.0, 4737.0, "C2"),
        (4980.0, 5165.0, "C2, MgH"),
        (5165.0, 5215.0, "MgH"),
        (6100.0, 6800.0, "CN, weak"),
        (6800.0, 8000.0, "CN"),
    ),
}
"""Ranges [Angstrom, air] of bands that touch single lines: common practice, no source."""


def strengths(
    gas: Gas, lines: LineList, abundance: float, ion, wavelength_vacuum, energy_ev, log_gf
) -> tuple[np.ndarray, np.ndarray]:
    """Strengths of lines and of their neighbours at one point of an atmosphere.

    Parameters
    ----------
    gas : Gas
        One point, where lines form.
    lines : LineList
    abundance : float
        A(Fe) of the lines.
    ion, wavelength_vacuum, energy_ev, log_gf : ndarray, shape (n_neighbours,)
        [Angstrom], [eV].

    Returns
    -------
    own, neighbours : ndarray, shapes (n_lines,) and (n_neighbours,)
        Line opacities without profile [cm2/g].
    """
    own = np.empty(len(lines))
    wave = air_to_vacuum(lines.wavelength_air) * ANGSTROM_CM
    for name in np.unique(lines.ion):
        of = lines.ion == name
        strength = line_strength(gas, str(name), wave[of], lines.excitation_potential[of], lines.log_gf[of])
        own[of] = strength[:, 0] * 10.0 ** (abundance - 12.0)
    others = np.zeros(len(ion))
    mh = gas.composition.mh
    for name in np.unique(ion):
        of = ion == name
        amount = number_abundance(str(name).split()[0], mh, gas.composition.alpha)
        if amount > 0.0:
            strength = line_strength(gas, str(name), wavelength_vacuum[of] * ANGSTROM_CM, energy_ev[of], log_gf[of])
            others[of] = amount * strength[:, 0]
    return own, others


def neighbours_in_words(
    lines: LineList, own: np.ndarray, ion, wavelength_air, energy_ev, strength: np.ndarray
) -> list[str]:
    """The two neighbours that count most for each line, as text; empty if none reaches 2 %.

    A transition of the same ion and energy within 0.02 Angstrom is the line itself.
    """
    order = np.argsort(wavelength_air)
    ion, wavelength_air, energy_ev, strength = ion[order], wavelength_air[order], energy_ev[order], strength[order]
    words = []
    for i, wave in enumerate(lines.wavelength_air):
        low, high = np.searchsorted(wavelength_air, [wave - 5.0 * NEIGHBOUR_WIDTH, wave + 5.0 * NEIGHBOUR_WIDTH])
        near = slice(low, high)
        distance = wavelength_air[near] - wave
        itself = (ion[near] == lines.ion[i]) & (np.abs(energy_ev[near] - lines.excitation_potential[i]) < 0.005)
        itself &= np.abs(distance) < 0.02
        ratio = np.exp(-0.5 * (distance / NEIGHBOUR_WIDTH) ** 2) * strength[near] / own[i]
        ratio[itself] = 0.0
        largest = np.argsort(-ratio)[:2]
        told = [
            f"{ion[near][j]} {wavelength_air[near][j]:.2f} ({100.0 * ratio[j]:.0f} %)"
            for j in largest
            if ratio[j] >= LEAST_RATIO
        ]
        words.append(", ".join(told))
    return words


def strength_in_words(reduced_width: float) -> str:
    """What the strength itself spoils.

    Examples
    --------
    >>> strength_in_words(-4.4), strength_in_words(-5.2)
    ('damping wings', '')
    """
    if reduced_width > WINGED:
        return "damping wings"
    if reduced_width > SATURATED:
        return "saturated"
    return "faint" if reduced_width < FAINT else ""


def ranges_in_words(wavelength_air: float, kind: str) -> str:
    """Telluric, hydrogen and molecular bands at a wavelength [Angstrom], for "sun", "k_dwarf" or "cool_giant".

    Examples
    --------
    >>> ranges_in_words(6297.8, "sun")
    'telluric O2'
    """
    hydrogen = HYDROGEN if kind == "sun" else ()
    ranges = TELLURIC + hydrogen + MOLECULES[kind]
    return ", ".join(words for low, high, words in ranges if low <= wavelength_air <= high)
