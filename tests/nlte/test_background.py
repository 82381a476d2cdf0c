"""Background opacity: the solar ultraviolet, the residual, and the separation of the recipe's factor."""

import numpy as np

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.matter.composition import composition_for
from specsolve.matter.equation_of_state import equilibrium
from specsolve.nlte.background import RESIDUAL_EDGES_CM, RESIDUAL_LOG_CM2, background, residual_cross_section
from specsolve.nlte.residual_calibration import solar_bands


def test_the_sun_emits_what_is_observed_below_400_nm(figure):
    _, _, observed, flux = solar_bands()
    with_residual = flux(10.0 ** RESIDUAL_LOG_CM2[1:])
    worst = np.max(np.abs(with_residual / observed - 1.0))
    figure("largest error of the solar flux in bands, 290-400 nm", worst, limit="0.01")
    figure("the same with the line lists alone", np.max(np.abs(flux(np.zeros(observed.size)) / observed - 1.0)))
    assert worst < 0.01


def test_residual_is_zero_outside_its_bands():
    inside = 0.5 * (RESIDUAL_EDGES_CM[1:] + RESIDUAL_EDGES_CM[:-1])
    np.testing.assert_allclose(residual_cross_section(inside), 10.0**RESIDUAL_LOG_CM2)
    np.testing.assert_array_equal(residual_cross_section(np.array([1.2e-5, 4.1e-5])), 0.0)


def test_residual_darkens_the_ultraviolet():
    atmosphere = AtmosphereStore.packaged().get(5750.0, 4.5, 0.0)
    gas = equilibrium(atmosphere.temperature, atmosphere.gas_pressure, composition_for(0.0))
    wavelength = np.array([2700.0, 3100.0, 5000.0]) * 1e-8
    bare = background(wavelength, gas, atmosphere.column_mass, atmosphere.vmic, 0.0)
    full = background(wavelength, gas, atmosphere.column_mass, atmosphere.vmic, 1.0)
    assert np.all(full.surface[:2] < bare.surface[:2])
    np.testing.assert_allclose(full.surface[2], bare.surface[2], rtol=1e-3)
    assert np.all(full.opacity >= 0.97 * bare.opacity)  # weak lines are cut relative to the continuum
    # deep inside the radiation is black-body radiation
    np.testing.assert_allclose(full.mean[:, -1], full.source[:, -1], rtol=0.02)
