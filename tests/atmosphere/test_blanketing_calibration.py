"""The factor of each band on the line opacity."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.atmosphere.blanketing import load_blanketing, load_multiplier
from specsolve.atmosphere.blanketing_calibration import (
    SolarFlux,
    average_bands,
    calibrate,
    load_solar_flux,
    observed_in_bands,
    save_multiplier,
)

EDGES_CM = np.array([300.0, 400.0, 500.0, 600.0, 800.0]) * 1e-7


def emitted(multiplier):
    """A made-up flux that falls with the line opacity."""
    return 1.0 / (1.0 + 0.4 * multiplier)


def test_calibration_finds_the_factors():
    true = np.array([1.7, 0.6, 1.0, 1.0])
    sun = SolarFlux(low_nm=EDGES_CM[:-1] * 1e7, high_nm=EDGES_CM[1:] * 1e7, flux=emitted(true))
    found = calibrate(emitted, EDGES_CM, sun)
    np.testing.assert_allclose(found[:3], true[:3], rtol=1e-3)
    assert found[3] == 1.0  # beyond 0.7 um


def test_unobserved_bands_stay_and_unreachable_ones_are_nan():
    sun = SolarFlux(
        low_nm=np.array([400.0, 500.0]), high_nm=np.array([500.0, 600.0]), flux=np.array([2.0, emitted(2.0)])
    )
    found = calibrate(emitted, EDGES_CM, sun)
    assert found[0] == 1.0
    assert np.isnan(found[1])
    assert found[2] == pytest.approx(2.0, rel=1e-3)
    with pytest.raises(ValueError, match="factor"):
        save_multiplier(EDGES_CM, found, "unused.csv")


def test_factors_are_read_back_and_other_bands_refused(tmp_path):
    save_multiplier(EDGES_CM, np.array([1.5, 2.0, 1.0, 1.0]), tmp_path / "multiplier.csv")
    np.testing.assert_allclose(load_multiplier(EDGES_CM, tmp_path / "multiplier.csv"), [1.5, 2.0, 1.0, 1.0])
    with pytest.raises(ValueError, match="bands"):
        load_multiplier(EDGES_CM * 1.01, tmp_path / "multiplier.csv")


def test_band_means_of_a_straight_line():
    x = np.linspace(100.0, 200.0, 11)
    means = average_bands(np.array([103.0, 150.0]), np.array([117.0, 200.0]), x, 3.0 * x)
    np.testing.assert_allclose(means, [330.0, 525.0], rtol=1e-12)


def test_packaged_solar_flux():
    """Again from the spectrum that pvlib carries (ASTM G173-03, extraterrestrial)."""
    pvlib = pytest.importorskip("pvlib")
    spectrum = pvlib.spectrum.get_reference_spectra(standard="ASTM G173-03")["extraterrestrial"]
    sun = load_solar_flux()
    wavelength, irradiance = spectrum.index.to_numpy(dtype=float), spectrum.to_numpy(dtype=float)
    means = average_bands(sun.low_nm, sun.high_nm, wavelength, irradiance)
    np.testing.assert_allclose(sun.flux / np.mean(sun.flux), means / np.mean(means), rtol=1e-4)


def test_packaged_factors():
    tables = load_blanketing(0.0)
    observed = observed_in_bands(tables.band_edges_cm, load_solar_flux())
    assert np.isfinite(observed).sum() >= 25
    beyond = tables.band_edges_cm[1:] > 701e-7
    assert np.all(tables.multiplier[beyond] == 1.0)
    assert np.all(tables.multiplier > 0.0)
