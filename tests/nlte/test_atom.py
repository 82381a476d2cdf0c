"""The packaged model atoms: what they hold, where lines find their levels, and the table remade from its sources."""

import os
from pathlib import Path

import numpy as np
import pytest

from specsolve.constants import HC_EV_CM
from specsolve.lines import LineList
from specsolve.lines.reading import default_line_list
from specsolve.matter.partition import ionization_energy, partition_function
from specsolve.nlte.atom_build import FULL_SIZE, build_atom, parity_of, predicted_levels
from specsolve.nlte.atom_hydrogen import term_of
from specsolve.nlte.departures import LineDepartures
from specsolve.nlte.line_levels import line_levels
from specsolve.nlte.packaged import SIZES, packaged_atom, packaged_members


@pytest.mark.parametrize("size", SIZES)
def test_levels_and_stages(size):
    atom = packaged_atom(size)
    assert abs(atom.n_levels - size) <= 1
    fe1, fe2, fe3 = (int((atom.stage == stage).sum()) for stage in range(3))
    assert (fe2, fe3) == (31, 1)
    assert fe1 + fe2 + fe3 == atom.n_levels
    assert set(np.unique(atom.parity)) == {0, 1}
    assert np.all(np.diff(atom.energy_ev[atom.stage == 0]) > 0.0)
    assert atom.energy_ev[atom.stage == 0].max() < ionization_energy("Fe I")
    assert "Barklem 2018" in atom.source
    assert "BSD 3-Clause" in atom.source


def test_lines_join_levels_of_opposite_parity_at_their_energy():
    atom = packaged_atom()
    assert np.all(atom.parity[atom.line_lower] != atom.parity[atom.line_upper])
    merged = np.array([" levels " in name for name in atom.name])
    single = ~merged[atom.line_lower] & ~merged[atom.line_upper]
    difference = (atom.energy_ev[atom.line_upper] - atom.energy_ev[atom.line_lower])[single]
    assert (
        np.max(np.abs(HC_EV_CM / atom.line_wavelength_cm[single] - difference)) < 0.2
    )  # splitting of the terms, 0.206 eV in a 3P
    assert np.all(atom.line_n_effective >= 1.0 - 1e-9)
    assert np.all((atom.line_f > 0.0) & (atom.line_f < 2.0))


def test_members_have_the_energy_of_their_level():
    atom, members = packaged_atom(), packaged_members()
    first = np.where(members.stage == 1, ionization_energy("Fe I"), 0.0)
    away = members.energy_cm * HC_EV_CM + first - atom.energy_ev[members.place]
    assert np.max(np.abs(away)) < 0.15
    assert np.all(members.stage == atom.stage[members.place])


@pytest.mark.parametrize("temperature", [4000.0, 6000.0])
def test_partition_function_of_the_neutral_stage(temperature):
    """Barklem & Collet 2016 sum observed levels; predicted ones near the limit hardly count at these temperatures."""
    atom = packaged_atom()
    neutral = atom.stage == 0
    own = np.sum(atom.weight[neutral] * np.exp(-atom.energy_ev[neutral] / (8.617333e-5 * temperature)))
    assert own == pytest.approx(float(partition_function("Fe I", np.array([temperature]))[0]), rel=0.06)


def test_continua_start_at_the_limit():
    atom = packaged_atom()
    ground = atom.continuum_level == 0
    assert 1e8 * atom.continuum_edge_cm[ground][0] == pytest.approx(1569.0, abs=5.0)  # 7.90 eV, from term to term
    np.testing.assert_allclose(atom.continuum_sigma[ground], 7.91e-18 * atom.continuum_n_star[ground])
    assert atom.continuum_level.size == atom.n_levels - 1


def test_computed_hydrogen_rates_are_downward_and_the_largest_charge_transfer_is_to_the_middle():
    atom = packaged_atom()
    assert np.all(atom.energy_ev[atom.hydrogen_upper] > atom.energy_ev[atom.hydrogen_lower])
    assert np.all(atom.stage[atom.exchange_ion] == 1)
    best = np.argmax(atom.exchange_log_rate[:, 4])
    assert 5.0 < atom.energy_ev[atom.exchange_level[best]] < 6.5  # Barklem 2018, A&A 612, A90: levels about 5.5 to 6 eV
    assert -8.0 < atom.exchange_log_rate[best, 4] < -7.0


def test_words_of_the_sources():
    assert [parity_of(c) for c in ("3d6.4s2", "3d6.4s.(6D).4p", "3d7.(4F).4d", "3d6.(3G).4s.4p.(1P*)", "?")] == [
        0,
        1,
        0,
        1,
        -1,
    ]
    assert term_of("z5Do") == ("5D*", 25.0, 1)
    assert term_of("Fe+.a2D2") == ("2D", 10.0, 0)
    energy, weight, parity = predicted_levels(63737.0)
    assert np.all(energy < 63737.0)
    assert np.all(weight > 0.0)
    assert set(parity) == {0, 1}


def test_every_default_line_finds_its_levels():
    lines = default_line_list()
    found, atom = line_levels(lines), packaged_atom()
    assert not found.approximate.any()
    assert np.all(atom.parity[found.lower] != atom.parity[found.upper])
    neutral = lines.ion == "Fe I"
    assert np.all(atom.stage[found.lower] == np.where(neutral, 0, 1))
    away = atom.energy_ev[found.lower[neutral]] - lines.excitation_potential[neutral]
    assert np.max(np.abs(away)) < 0.15  # a 3P is split by 0.206 eV


def test_an_unknown_line_falls_back_to_the_nearest_levels_and_says_so():
    lines = LineList.from_arrays([6300.77], ["Fe I"], [3.654], [-1.0])
    found, atom = line_levels(lines), packaged_atom()
    assert found.approximate[0]
    assert atom.parity[found.lower[0]] != atom.parity[found.upper[0]]
    assert atom.energy_ev[found.lower[0]] == pytest.approx(3.654, abs=0.1)


def test_departures_of_lines_follow_their_levels():
    depths = np.linspace(-5.0, 1.0, 16)
    log_b = np.outer(np.array([0.1, -0.2, 0.3]), np.ones(16))
    lower, upper = LineDepartures(log_b, depths, np.array([0, 2]), np.array([1, 0]))(np.array([-9.0, 0.0, 5.0]))
    np.testing.assert_allclose(np.log(lower), [[0.1] * 3, [0.3] * 3])
    np.testing.assert_allclose(np.log(upper), [[-0.2] * 3, [0.1] * 3])


@pytest.mark.slow
def test_the_atom_is_remade_from_its_sources():
    reference = os.environ.get("SPECSOLVE_REFERENCE")
    if not reference:
        pytest.skip("SPECSOLVE_REFERENCE is not set")
    atom, members = build_atom(Path(reference), FULL_SIZE)
    packaged = packaged_atom()
    for name in ("energy_ev", "weight", "line_f", "hydrogen_log_rate", "exchange_log_rate"):
        np.testing.assert_allclose(getattr(atom, name), getattr(packaged, name), rtol=1e-12)
    assert members.shape[1] == packaged_members().place.size
