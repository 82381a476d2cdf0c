"""Collision rates: symmetry, textbook values, scaling."""

import sys
from pathlib import Path

import numpy as np

from specsolve.constants import BOLTZMANN_EV_K
from specsolve.matter.composition import composition_for
from specsolve.matter.equation_of_state import equilibrium
from specsolve.nlte.atom import load_atom, save_atom
from specsolve.nlte.collisions import (
    ELECTRON_RATE,
    STRENGTH_RATE,
    collision_flows,
    electron_excitation,
    electron_forbidden,
    hydrogen_allowed,
)
from specsolve.nlte.populations import lte_populations
from specsolve.nlte.recipe import Recipe

sys.path.insert(0, str(Path(__file__).parent))
from atoms import FIRST_EV, small_atom

GAS = equilibrium(np.array([4500.0, 6000.0]), np.array([1e4, 1e5]), composition_for(-1.0))


def test_constants_of_the_formulae():
    """Mihalas 1978, Stellar Atmospheres, eqs. 5-75 and 5-70 (constants from memory): 5.465e-11 and 8.63e-6."""
    assert abs(ELECTRON_RATE / 5.465e-11 - 1.0) < 2e-3
    assert abs(STRENGTH_RATE / 8.629e-6 - 1.0) < 2e-3


def test_flows_are_symmetric_and_positive():
    atom = small_atom()
    lte = lte_populations(atom, GAS.temperature, GAS.electron_density, np.ones(2))
    flows = collision_flows(atom, GAS, lte, Recipe())
    np.testing.assert_allclose(flows, np.swapaxes(flows, 1, 2), rtol=1e-13)
    assert np.all(flows >= 0.0)
    assert np.all(np.einsum("dii->di", flows) == 0.0)
    joined = flows[:, 0, 1:6]
    assert np.all(joined > 0.0)


def test_factors_scale_their_own_rates():
    atom = small_atom()
    lte = lte_populations(atom, GAS.temperature, GAS.electron_density, np.ones(2))

    def flow(i, j, **factors):
        return collision_flows(atom, GAS, lte, Recipe(**factors))[:, i, j]

    no_electrons = {"electron_factor": 0.0}
    np.testing.assert_allclose(
        flow(0, 2, hydrogen_factor=3.0, **no_electrons), 3.0 * flow(0, 2, hydrogen_factor=1.0, **no_electrons)
    )
    computed = flow(0, 1, hydrogen_factor=3.0, **no_electrons)
    np.testing.assert_allclose(computed, flow(0, 1, hydrogen_factor=1.0, **no_electrons))
    np.testing.assert_allclose(
        flow(0, 1, hydrogen_scale=0.0, electron_factor=2.0), 2.0 * flow(0, 1, hydrogen_scale=0.0)
    )
    np.testing.assert_allclose(
        flow(6, 7, ion_hydrogen_factor=3.0, **no_electrons), 3.0 * flow(6, 7, ion_hydrogen_factor=1.0, **no_electrons)
    )


def test_computed_rate_is_the_tabulated_one():
    """Level 1 to 0: 10^-12 at 2000 K, 10^-11.5 at 10 000 K, straight in log T, per hydrogen atom."""
    atom = small_atom()
    lte = lte_populations(atom, GAS.temperature, GAS.electron_density, np.ones(2))
    flow = collision_flows(atom, GAS, lte, Recipe(electron_factor=0.0))[:, 0, 1]
    expected = 10.0 ** (-12.0 + 0.5 * np.log(GAS.temperature / 2000.0) / np.log(5.0))
    np.testing.assert_allclose(flow / (lte[1] * GAS.h1), expected, rtol=1e-10)


def test_rates_fall_with_the_energy_difference():
    temperature = np.array([5000.0])
    f = np.full(3, 0.1)
    difference = np.array([0.5, 2.0, 4.0])
    for rate in (
        electron_excitation(temperature, difference, f, np.zeros(3, bool)),
        electron_forbidden(temperature, difference, np.full(3, 9.0), np.ones(3)),
        hydrogen_allowed(temperature, difference, f, 55.85),
    ):
        assert np.all(np.diff(rate[:, 0]) < 0.0)


def test_saha_boltzmann():
    atom = small_atom()
    n = lte_populations(atom, GAS.temperature, GAS.electron_density, np.array([2.0, 3.0]))
    np.testing.assert_allclose(n.sum(axis=0), [2.0, 3.0])
    np.testing.assert_allclose(n[1] / n[0], 35.0 / 25.0 * np.exp(-0.9 / (BOLTZMANN_EV_K * GAS.temperature)))
    saha = (
        2.0 * 2.4146830e15 * GAS.temperature**1.5 * 30.0 / 25.0 * np.exp(-FIRST_EV / (BOLTZMANN_EV_K * GAS.temperature))
    )
    np.testing.assert_allclose(n[6] / n[0] * GAS.electron_density, saha, rtol=1e-6)


def test_an_atom_is_read_back_as_written(tmp_path):
    atom = small_atom()
    save_atom(atom, tmp_path / "atom.npz")
    again = load_atom(tmp_path / "atom.npz")
    assert again.source == "invented"
    np.testing.assert_array_equal(again.line_f, atom.line_f)
    np.testing.assert_array_equal(again.name, atom.name)
