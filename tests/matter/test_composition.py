"""Composition: solar mixture and the smooth law of the alpha elements."""

import numpy as np
import pytest

from specsolve.constants import ATOMIC_MASS_G, SOLAR_IRON
from specsolve.matter.composition import (
    ATOMIC_WEIGHTS,
    ELEMENTS,
    SOLAR_ABUNDANCES,
    alpha_law,
    composition_for,
    number_abundance,
    solar_abundance,
)


def test_solar_mass_fractions_are_the_published_ones():
    # Asplund, Amarsi & Grevesse 2021, table 4: present-day photosphere X = 0.7438, Y = 0.2423, Z = 0.0139
    masses = {symbol: 10 ** (value - 12) * ATOMIC_WEIGHTS[symbol] for symbol, value in SOLAR_ABUNDANCES.items()}
    total = sum(masses.values())
    assert masses["H"] / total == pytest.approx(0.7438, abs=2e-4)
    assert masses["He"] / total == pytest.approx(0.2423, abs=2e-4)
    assert 1 - (masses["H"] + masses["He"]) / total == pytest.approx(0.0139, abs=1e-4)


def test_the_elements_of_the_equation_of_state_carry_nearly_all_mass():
    every = sum(10 ** (value - 12) * ATOMIC_WEIGHTS[symbol] for symbol, value in SOLAR_ABUNDANCES.items())
    assert composition_for(0.0).mass_per_hydrogen / ATOMIC_MASS_G == pytest.approx(every, rel=3e-4)


def test_alpha_law_is_zero_at_solar_rises_to_the_plateau_and_has_no_kink():
    assert alpha_law(0.0) == 0.0
    assert alpha_law(-3.0) == pytest.approx(0.4, abs=1e-3)
    assert alpha_law(0.5) == pytest.approx(0.0, abs=0.05)
    mh = np.linspace(-3.5, 0.75, 200)
    values = np.array([alpha_law(x) for x in mh])
    assert np.all(np.diff(values) < 0)
    third = np.diff(values, 3) / np.diff(mh)[0] ** 3
    assert np.abs(np.diff(third)).max() < 1.0  # dex^-2 per step of 0.02 dex; a kink of 0.1 gives 200


def test_metallicity_scales_metals_alpha_only_its_elements_and_leaves_helium():
    poor, alpha_rich = composition_for(-2.0, alpha=0.0), composition_for(-2.0, alpha=0.3)
    ratio = dict(zip(ELEMENTS, np.log10(alpha_rich.abundances / poor.abundances), strict=True))
    for symbol in ELEMENTS:
        expected = 0.3 if symbol in ("O", "Ne", "Mg", "Si", "S", "Ca", "Ti") else 0.0
        assert ratio[symbol] == pytest.approx(expected, abs=1e-12)
    assert poor.abundances[1] == composition_for(0.0).abundances[1]
    assert np.log10(number_abundance("Ba", -2.0)) + 12 == pytest.approx(2.27 - 2.0)
    assert solar_abundance("Fe") == SOLAR_IRON
    assert number_abundance("Tc", 0.0) == 0.0
