"""Limits known on paper: local thermodynamic equilibrium, a black-body field, two levels, conservation of particles."""

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.constants import HC_EV_CM, LIGHT_SPEED_CM_S
from specsolve.matter.composition import composition_for
from specsolve.nlte import equilibrium
from specsolve.nlte.atom import load_atom, two_level_atom
from specsolve.nlte.rates import spontaneous
from specsolve.nlte.recipe import Recipe
from specsolve.radiation.planck import planck

sys.path.insert(0, str(Path(__file__).parent))
from atoms import small_atom

DATA_FOLDER = Path(equilibrium.__file__).parent.parent / "data" / "nlte"
NODE = (5750.0, 3.5, -2.5)


@pytest.fixture(scope="module")
def atom():
    return small_atom()


@pytest.fixture(scope="module")
def surroundings(atom):
    atmosphere = AtmosphereStore.packaged().get(*NODE)
    return equilibrium.medium(atmosphere, composition_for(NODE[2]), atom)


@pytest.fixture(scope="module")
def departures(surroundings, atom):
    return equilibrium.iterate(surroundings, atom, Recipe())


@pytest.mark.parametrize(
    ("node", "factor", "highest"),
    [
        ((5750.0, 4.5, 0.0), 1e6, -9.0),
        pytest.param(NODE, 1e6, -4.0, marks=pytest.mark.slow),
        pytest.param(NODE, 1e9, -9.0, marks=pytest.mark.slow),
    ],
)
def test_strong_collisions_enforce_equilibrium(figure, node, factor, highest):
    """The packaged atom. At the very top of a metal-poor atmosphere of low gravity even 1e6 times the rates are not
    enough against the ultraviolet (1e-2 at log tau = -6): there 1e9 times."""
    iron = load_atom(DATA_FOLDER / "iron_151.npz")
    surroundings = equilibrium.medium(AtmosphereStore.packaged().get(*node), composition_for(node[2]), iron)
    result = equilibrium.iterate(surroundings, iron, Recipe(electron_factor=factor, hydrogen_scale=factor))
    worst = np.max(np.abs(np.exp(result.log_b[:, result.log_tau > highest]) - 1.0))
    figure(f"largest |b - 1| at {node} with collisions x {factor:g}, log tau > {highest}", worst, limit="1e-3")
    assert result.converged
    assert worst < 1e-3


def test_without_hydrogen_collisions_iron_is_far_from_equilibrium(figure):
    """Not a stub: a thousandth of the hydrogen collisions gives b < 0.7 of low levels in a metal-poor subgiant."""
    iron = load_atom(DATA_FOLDER / "iron_151.npz")
    atmosphere = AtmosphereStore.packaged().get(*NODE)
    surroundings = equilibrium.medium(atmosphere, composition_for(NODE[2]), iron)
    depth = int(np.argmin(np.abs(atmosphere.log_tau + 2.0)))
    low = (iron.stage == 0) & (iron.energy_ev < 2.5)
    weak = equilibrium.iterate(surroundings, iron, Recipe(hydrogen_scale=1e-3))
    standard = equilibrium.iterate(surroundings, iron, Recipe())
    assert weak.converged
    assert standard.converged
    largest = np.exp(weak.log_b[low, depth]).max()
    figure("largest b of levels below 2.5 eV at log tau -2, hydrogen collisions x 1e-3", largest, limit="0.7")
    figure("the same with all hydrogen collisions", np.exp(standard.log_b[low, depth]).max())
    assert largest < 0.7
    assert largest < np.exp(standard.log_b[low, depth]).min() < 1.0


def test_the_small_atom_departs_without_them(departures):
    assert departures.converged
    assert departures.change < 1e-4
    assert np.min(departures.log_b) < -0.3
    assert np.max(np.abs(departures.log_b[:, departures.log_tau > 1.3])) < 0.05


def test_particles_are_conserved(departures, surroundings, figure):
    total = surroundings.lte.sum(axis=0)
    error = np.max(np.abs((np.exp(departures.log_b) * surroundings.lte).sum(axis=0) / total - 1.0))
    figure("conservation of particles", error, limit="1e-10")
    assert error < 1e-10


def test_detailed_balance_in_a_black_body_field(surroundings, atom, figure):
    temperature = surroundings.gas.temperature

    def black(wavelength):
        return planck(wavelength[:, None], temperature) * wavelength[:, None] ** 2 / LIGHT_SPEED_CM_S

    field = replace(surroundings.field, mean=black(surroundings.field.wavelength_cm))
    lines = atom.line_wavelength_cm[surroundings.lines]
    bathed = replace(surroundings, field=field, mean=black(lines), n_transfer=0)
    for recipe in (Recipe(), Recipe(electron_factor=1e-6, hydrogen_scale=0.0)):
        result = equilibrium.iterate(bathed, atom, recipe)
        worst = np.max(np.abs(result.log_b))
        figure("largest |ln b| in a black-body field", worst, limit="1e-8")
        assert worst < 1e-8


def test_the_iteration_is_the_fixed_point_of_full_rates(surroundings, atom, departures):
    """With the mean intensities of the converged source functions, plain rates give the same populations."""
    other = equilibrium.iterate(surroundings, atom, Recipe(), start=departures, tolerance=1e-9)
    far = equilibrium.iterate(
        surroundings, atom, Recipe(), start=replace(departures, log_b=departures.log_b * 0.0 - 0.5)
    )
    assert other.converged
    assert np.max(np.abs(other.log_b - departures.log_b)) < 1e-3
    assert np.max(np.abs(far.log_b - departures.log_b)) < 1e-3


@pytest.mark.parametrize("epsilon", [1e-1, 1e-2, 1e-3, 1e-4])
def test_two_levels_against_the_law_of_the_square_root(epsilon, figure):
    """S = sqrt(epsilon) B at the surface of an isothermal half-space, for any profile (Mihalas 1978, eq. 11-38)."""
    atom = two_level_atom()
    n, temperature = 110, 5000.0
    column = 10.0 ** np.linspace(-6.0, 6.0, n)
    wavelength = HC_EV_CM / 2.5
    x = 2.5 / (8.617333e-5 * temperature)
    boltzmann = np.full((1, n), np.exp(-x))
    emission = spontaneous(np.array([wavelength]))
    position = np.linspace(0.0, 5.0, 15)
    profile = np.exp(-(position**2))
    weight = np.gradient(position) * profile
    weight[[0, -1]] *= 0.5 if np.isclose(np.gradient(position)[0], position[1]) else 1.0
    weight /= weight.sum()
    lte = np.array([np.ones(n), 3.0 * np.exp(-x) * np.ones(n)])
    one = np.ones((1, n))
    # collisions: eps = eps' / (1 + eps'), eps' = C (1 - exp(-x)) / A; in flows per unit b with coefficient 1
    collision = epsilon / (1.0 - epsilon) * emission[0] * boltzmann[0, 0] / (1.0 - boltzmann[0, 0])
    fixed = np.zeros((n, 2, 2))
    fixed[:, 0, 0] = fixed[:, 1, 1] = collision
    fixed[:, 0, 1] = fixed[:, 1, 0] = -collision
    layer = equilibrium.Medium(
        gas=None, column_mass=column, log_tau=np.log10(column), vmic=0.0, lte=lte, field=None, lines=np.array([0]),
        n_transfer=1, coefficient=one, boltzmann=boltzmann, strength=one / (1.0 - boltzmann), opacity=1e-14 * one,
        source=0.0 * one, mean=0.0 * one, emission=emission,
        profile=np.ascontiguousarray(np.broadcast_to(profile, (1, n, 15))),
        quadrature=np.ascontiguousarray(np.broadcast_to(weight, (1, n, 15))),
    )  # fmt: skip
    result = equilibrium.lambda_iteration(layer, np.array([0]), np.array([1]), fixed, np.zeros((2, n)), 1e-6, most=600)
    assert result.converged, result.reason
    ratio = np.exp(result.log_b)
    source = emission[0] * ratio[1] * boltzmann[0] / (ratio[0] - ratio[1] * boltzmann[0])
    thermal = emission[0] / np.expm1(x)
    error = source[0] / (np.sqrt(epsilon) * thermal) - 1.0
    figure(f"surface source function at epsilon {epsilon:g}, relative error", error, limit="0.01")
    assert abs(error) < 0.01
    assert abs(source[-1] / thermal - 1.0) < 1e-3
    assert atom.n_lines == 1
