"""The model of the Sun against observed figures that did not go into it."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.emergent import emergent_flux
from specsolve.atmosphere.structure import solve_structure
from specsolve.constants import SOLAR_LOGG, SOLAR_TEFF
from specsolve.matter.composition import composition_for
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium
from specsolve.radiation.planck import planck
from specsolve.radiation.transfer import emergent_intensity
from specsolve.radiation.transfer_kernels import solve_channels
from tests.atmosphere.solar_figures import ALLEN_CENTRE, FONTENLA_1993, NECKEL_LABS_1994

W_M2_SR_A_TO_CGS = 1e3 * 1e3 * 1e8  # 1e3 W / (m2 sr A) in erg / (s cm2 sr cm)


@pytest.fixture(scope="module")
def sun():
    model = solve_structure(SOLAR_TEFF, SOLAR_LOGG, composition_for(0.0), load_blanketing(0.0))
    assert model.status == "converged", model.reason
    return model


def continuum_intensity(model, wavelength_cm, cosines):
    """Emergent continuum intensity, shape (n_w, n_mu) [erg / (s cm2 sr cm)], scattering included."""
    gas = equilibrium(model.temperature, model.gas_pressure, composition_for(0.0))
    absorption, scattering = continuum_opacity(wavelength_cm, gas)
    total = absorption + scattering
    thermal = planck(wavelength_cm[:, None], model.temperature[None])
    field = solve_channels(total, absorption / total, thermal, model.column_mass)
    source = (absorption * thermal + scattering * field["mean"]) / total
    return emergent_intensity(total, source, model.column_mass, np.asarray(cosines))


def test_temperature_against_semi_empirical_structure(sun, figure):
    """Within 100 K of Fontenla et al. 1993 for -3.5 < log tau < 0.3."""
    log_tau, temperature = FONTENLA_1993.T
    inside = (log_tau > -3.5) & (log_tau < 0.3)
    ours = np.interp(log_tau[inside], sun.log_tau, sun.temperature)
    worst = np.max(np.abs(ours - temperature[inside]))
    figure("worst temperature difference", worst, "K", limit="< 100", source="Fontenla et al. 1993")
    assert worst < 100.0


def test_limb_darkening(sun, figure):
    """Neckel & Labs 1994, 0.45-1.0 um: within 0.02 at mu 0.5, 0.03 at mu 0.2."""
    wavelengths = np.array([w for w in NECKEL_LABS_1994 if 0.45 <= w <= 1.0])
    intensity = continuum_intensity(sun, wavelengths * 1e-4, [1.0, 0.5, 0.2])
    for mu, column, bar in ((0.5, 1, 0.02), (0.2, 2, 0.03)):
        published = np.array([np.polynomial.polynomial.polyval(mu, NECKEL_LABS_1994[w]) for w in wavelengths])
        worst = np.max(np.abs(intensity[:, column] / intensity[:, 0] - published))
        figure(f"limb darkening at mu {mu}", worst, limit=f"< {bar}", source="Neckel & Labs 1994")
        assert worst < bar


def test_disc_centre_continuum(sun, figure):
    """Allen's table, within 5 % above 0.45 um (to 1.4 um; beyond, the table has two digits)."""
    wavelengths = np.array([w for w in ALLEN_CENTRE if 0.45 <= w <= 1.4])
    intensity = continuum_intensity(sun, wavelengths * 1e-4, [1.0])[:, 0] / W_M2_SR_A_TO_CGS
    published = np.array([ALLEN_CENTRE[w] for w in wavelengths])
    worst = np.max(np.abs(intensity / published - 1.0))
    figure("disc-centre continuum", worst, limit="< 0.05", source="Allen 4th ed., table 14.13")
    assert worst < 0.05


def test_flux_above_700_nm(sun, figure):
    """ASTM G173 extraterrestrial spectrum (carried by pvlib), 50 nm bands from 0.7 to 2.4 um: within 5 %."""
    spectrum = pytest.importorskip("pvlib").spectrum.get_reference_spectra(standard="ASTM G173-03")["extraterrestrial"]
    solar_radius_cm, astronomical_unit_cm = 6.957e10, 1.495978707e13  # IAU 2015 B3, IAU 2012 B2
    dilution = (solar_radius_cm / astronomical_unit_cm) ** 2
    worst = {}
    for low in np.arange(700.0, 2400.0, 50.0):
        inside = (spectrum.index > low) & (spectrum.index < low + 50.0)
        observed = np.trapezoid(spectrum[inside], spectrum.index[inside]) / np.ptp(
            spectrum.index[inside]
        )  # W / (m2 nm)
        points = (low + 50.0 * (np.arange(5) + 0.5) / 5) * 1e-7
        ours = (
            emergent_flux(sun, points, load_blanketing(0.0)).mean() * dilution * 1e-3 * 1e-7
        )  # erg / (s cm2 cm) in W / (m2 nm)
        worst[low] = ours / observed - 1.0
    figure("flux above 0.7 um", max(map(abs, worst.values())), limit="< 0.05", source="ASTM G173")
    assert max(map(abs, worst.values())) < 0.05, worst
