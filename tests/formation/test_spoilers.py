"""Words about what spoils lines."""

from __future__ import annotations

import numpy as np

from specsolve.formation.spoilers import neighbours_in_words, ranges_in_words, strength_in_words, strengths
from specsolve.lines import LineList, air_to_vacuum, default_line_list
from specsolve.matter.composition import composition_for
from specsolve.matter.equation_of_state import equilibrium


def test_known_blend_of_a_k_dwarf():
    """Ti I 6149.16 (2.16 eV) beside Fe II 6149.25: nothing in the Sun, as strong as the line at 3900 K.

    log gf -1.44 (NIST ASD, from memory, good enough to tell a blend).
    """
    line = LineList.from_arrays([6149.246], ["Fe II"], [3.889], [-2.69])
    ion, wave, energy, log_gf = np.array(["Ti I"]), np.array([6149.16]), np.array([2.16]), np.array([-1.44])
    words = []
    for temperature, pressure in ((5100.0, 4e4), (3930.0, 1e5)):
        gas = equilibrium(np.array([temperature]), np.array([pressure]), composition_for(0.0))
        own, other = strengths(gas, line, 7.46, ion, air_to_vacuum(wave), energy, log_gf)
        words.append(neighbours_in_words(line, own, ion, wave, energy, other)[0])
    assert words[0] == ""
    assert words[1].startswith("Ti I 6149.16")


def test_a_line_is_not_its_own_neighbour():
    line = LineList.from_arrays([6173.334], ["Fe I"], [2.223], [-2.88])
    words = neighbours_in_words(
        line, np.array([1.0]), np.array(["Fe I"]), np.array([6173.336]), np.array([2.2227]), np.array([1.0])
    )
    assert words == [""]


def test_ranges_and_strengths():
    assert strength_in_words(-4.6) == "saturated"
    assert strength_in_words(-6.5) == "faint"
    assert ranges_in_words(6560.0, "sun") == "telluric H2O, weak, wing of H alpha"
    assert ranges_in_words(5180.0, "k_dwarf") == "MgH"
    assert ranges_in_words(5600.0, "cool_giant") == ""


def test_default_list_carries_the_words():
    lines = default_line_list()
    note = lines.note[lines.position_of(["Fe II 6149.246 3.889"])[0]]
    assert "K dwarf: Ti I" in note
