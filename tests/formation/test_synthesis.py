"""Synthesis: compiled against NumPy, single lines against the engine of the grid, blends and blocks."""

import numpy as np
import pytest

from specsolve.atmosphere.blanketing_lines import load_lines
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.constants import SOLAR_IRON
from specsolve.formation import reduced_widths
from specsolve.formation.spectral_lines import SpectralLines
from specsolve.formation.synthesis import (
    central_ratios,
    line_profiles,
    line_widths,
    make_medium,
    opacities_of,
    relative_flux,
    relative_flux_reference,
    velocity_points,
)
from specsolve.lines import default_line_list
from specsolve.matter.composition import composition_for

LOW, HIGH = 6090.0, 6130.0


@pytest.fixture(scope="module")
def sun():
    """Atmosphere, its composition and a medium for a piece of spectrum."""
    model = AtmosphereStore.packaged().get(5750.0, 4.5, 0.0)
    composition = composition_for(0.0, model.alpha)
    return model, composition, make_medium(model, composition, SOLAR_IRON, LOW, HIGH)


@pytest.fixture(scope="module")
def own():
    lines = default_line_list()
    return lines.select((lines.wavelength_air > LOW) & (lines.wavelength_air < HIGH))


@pytest.fixture(scope="module")
def everything(own):
    mine = SpectralLines.of(own)
    return mine.joined(SpectralLines.of_blanketing(load_lines(), LOW, HIGH).without(mine))


def test_compiled_and_reference_agree(sun, everything):
    """To 5e-4 of the continuum: the approximate Voigt function (1e-4), and lines that end at 3e-5 of the opacity."""
    medium = sun[2]
    opacities = opacities_of(medium, everything, 1.0, least=0.02)
    wavelength = np.arange(6099.0, 6104.0, 0.05)  # across the border of two blocks
    compiled = relative_flux(medium, opacities, wavelength)
    assert compiled.min() < 0.6
    np.testing.assert_allclose(compiled, relative_flux_reference(medium, opacities, wavelength), atol=5e-4)


def test_widths_of_single_lines_are_those_of_the_grid(sun, figure):
    """Alone, every line of the default list has the width that the response grid is made of."""
    model, composition, _ = sun
    lines = default_line_list()
    medium = make_medium(model, composition, SOLAR_IRON, 4300.0, 8000.0)
    opacities = opacities_of(medium, SpectralLines.of(lines), 1.0, least=-1.0)
    expected = reduced_widths(model, composition, lines, [1.0], [SOLAR_IRON])[:, 0, 0][opacities.lines.own]
    exact = np.log10(line_widths(medium, opacities, n_points=41)[:, 0]) - expected
    fast = np.log10(line_widths(medium, opacities, n_points=17)[:, 0]) - expected
    figure("widths of single lines, 41 points, worst", np.abs(exact).max(), "dex", limit="0.003")
    figure("widths of single lines, 17 points, worst", np.abs(fast).max(), "dex", limit="0.02")
    assert np.abs(exact).max() < 0.003  # the Eddington factors are those of the block's middle
    assert np.abs(fast).max() < 0.02  # the predictions' own points: 4 %


def test_integrated_spectrum_of_one_line_is_its_width(sun, own):
    medium = sun[2]
    mine = SpectralLines.of(own)
    opacities = opacities_of(medium, mine.select(slice(0, 1)), 1.0, least=-1.0)
    centre = mine.wavelength_air[0]
    wavelength = np.linspace(max(centre - 6.0, LOW), centre + 6.0, 6001)
    width = np.trapezoid(1.0 - relative_flux(medium, opacities, wavelength), wavelength)
    np.testing.assert_allclose(width / centre, line_widths(medium, opacities, n_points=41)[0, 0], rtol=0.01)


def test_profile_points_integrate_a_gaussian_and_a_wing():
    velocity, weights = velocity_points(33)
    np.testing.assert_allclose(weights @ np.exp(-((velocity / 4.0) ** 2)), 4.0 * np.sqrt(np.pi), rtol=1e-4)
    lorentz = 1.0 / (1.0 + (velocity / 5.0) ** 2)  # the wing beyond 400 km/s is added analytically
    np.testing.assert_allclose(weights @ lorentz, 5.0 * np.pi, rtol=2e-3)


def test_profiles_grow_with_abundance_and_are_symmetric(sun, own):
    medium = sun[2]
    opacities = opacities_of(medium, SpectralLines.of(own), 1.0, least=-1.0)
    depth = line_profiles(medium, opacities, [-5.0, 0.0, 5.0], [-0.5, 0.0, 0.5])
    assert np.all(np.diff(depth, axis=1) > 0.0)
    np.testing.assert_allclose(depth[..., 0], depth[..., 2], rtol=1e-10)


def test_a_line_of_the_list_is_not_counted_twice(own, everything):
    mine = SpectralLines.of(own)
    for i in range(len(mine)):
        same = (everything.ion == mine.ion[i]) & (np.abs(everything.wavelength_air - mine.wavelength_air[i]) < 0.05)
        same &= np.abs(everything.excitation_potential - mine.excitation_potential[i]) < 0.02
        strong = same & (everything.log_gf > mine.log_gf[i] - 0.5)
        assert strong.sum() == 1
    assert (everything.own >= 0).sum() == len(own)


def test_iron_of_the_medium_moves_iron_only(sun, everything):
    model, composition, medium = sun
    more = make_medium(model, composition, SOLAR_IRON + 0.3, LOW, HIGH)
    ratio = np.log10(central_ratios(more, everything, 1.0) / central_ratios(medium, everything, 1.0))
    iron = np.char.startswith(everything.ion.astype(str), "Fe ")
    np.testing.assert_allclose(ratio[iron], 0.3, atol=1e-9)
    np.testing.assert_allclose(ratio[~iron], 0.0, atol=1e-9)


def test_wavelengths_must_increase(sun, everything):
    opacities = opacities_of(sun[2], everything, 1.0)
    with pytest.raises(ValueError, match="increase"):
        relative_flux(sun[2], opacities, [6100.0, 6099.0])
