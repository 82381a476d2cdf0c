"""Velocities of made-up spectra, whose truth is known, and what must be refused."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.errors import SpectrumError
from specsolve.lines.reading import default_line_list
from specsolve.spectrum.mean_profile import LIGHT_SPEED_KMS
from specsolve.spectrum.types import Spectrum
from specsolve.spectrum.velocity import measure_velocity, to_rest
from tests.spectrum.made_up_spectra import gaussian_flux, listed, made_up, rough_widths, wavelengths

LINES = default_line_list()
WIDTHS = rough_widths(LINES)


def velocity_of(spectrum, **options):
    return measure_velocity(spectrum, LINES.wavelength_air, WIDTHS, **options)


def test_error_is_a_tenth_of_a_kilometre_per_second_at_signal_to_noise_100(rng, figure):
    """600 lines that the list does not have, widths that scatter by 0.4 in ln, R 50 000, S/N 100."""
    truth = rng.uniform(-300.0, 300.0, 16)
    found = [velocity_of(made_up(rng, velocity=v)) for v in truth]
    error = np.array([one.value for one in found]) - truth
    pulls = error / np.array([one.error for one in found])
    figure(
        "velocity error, rms",
        np.sqrt(np.mean(error**2)),
        "km/s",
        limit="0.1",
        source="made-up lines, S/N 100, R 50 000",
    )
    figure("pull width of the velocity", np.sqrt(np.mean(pulls**2)), limit="about 1", source="same")
    assert np.sqrt(np.mean(error**2)) < 0.1
    assert 0.6 < np.sqrt(np.mean(pulls**2)) < 1.6  # 16 draws of a jackknife over 20 groups
    assert all(one.significance > 10.0 for one in found)


def test_low_resolution_and_noise_are_told_by_the_error(rng):
    truth = rng.uniform(-100.0, 100.0, 8)
    found = [velocity_of(made_up(rng, velocity=v, signal_to_noise=20.0, resolving_power=20000.0)) for v in truth]
    errors = np.array([one.error for one in found])
    deviation = np.abs(np.array([one.value for one in found]) - truth)
    assert np.all(deviation < 5.0 * errors)
    assert np.all(errors < 1.0)


def test_noise_has_no_velocity(rng):
    """A star without these lines is refused: noise of 8 spectra stays below the threshold."""
    wave = wavelengths(4800.0, 6900.0)
    for _ in range(8):
        noise = Spectrum.from_arrays("hot", wave, 1.0 + rng.normal(0.0, 0.01, wave.size), sigma=0.01)
        with pytest.raises(SpectrumError, match="no velocity found"):
            velocity_of(noise)


def test_lines_of_another_kind_of_star_are_refused(rng):
    """As many lines as ours, at random places."""
    wave = wavelengths(4800.0, 6900.0)
    lines = LINES.with_columns(wavelength_air=rng.uniform(4800.0, 6900.0, len(LINES)))
    flux = gaussian_flux(wave, lines, WIDTHS) + rng.normal(0.0, 0.01, wave.size)
    with pytest.raises(SpectrumError, match="Another kind of star"):
        velocity_of(Spectrum.from_arrays("other", wave, flux, sigma=0.01))


def test_emission_is_refused(rng):
    wave = wavelengths(4800.0, 6900.0)
    flux = 2.0 - gaussian_flux(wave, listed(), rough_widths(listed())) + rng.normal(0.0, 0.01, wave.size)
    with pytest.raises(SpectrumError, match="emission"):
        velocity_of(Spectrum.from_arrays("emission", wave, flux, sigma=0.01))


def test_few_lines_are_refused(rng):
    spectrum = made_up(rng)
    short = spectrum.select((spectrum.wavelength_air > 5000.0) & (spectrum.wavelength_air < 5060.0))
    with pytest.raises(SpectrumError, match="lines of the list lie in the spectrum"):
        velocity_of(short)


def test_vacuum_taken_for_air_shows_as_a_drift(rng):
    spectrum = made_up(rng, vacuum=True, signal_to_noise=200.0, low=4500.0, high=8000.0)
    found = velocity_of(spectrum)
    assert found.value == pytest.approx(83.0, abs=1.5)  # c (n - 1): the mix-up itself
    assert found.vacuum_share == pytest.approx(1.0, abs=5.0 * found.vacuum_share_error)
    assert any("look like vacuum ones" in note for note in found.notes)


def test_air_is_not_taken_for_vacuum(rng):
    for _ in range(4):
        found = velocity_of(made_up(rng, velocity=30.0))
        assert abs(found.vacuum_share) < 5.0 * found.vacuum_share_error
        assert not any("look like" in note for note in found.notes)


def test_level_and_slope_of_the_flux_do_not_matter(rng):
    spectrum = made_up(rng, velocity=-45.0)
    blaze = 3000.0 * (1.2 - ((spectrum.wavelength_air - 5900.0) / 1500.0) ** 2)
    scaled = spectrum.replace(flux=spectrum.flux * blaze, sigma=spectrum.sigma * blaze, normalised=False)
    assert velocity_of(scaled).value == pytest.approx(velocity_of(spectrum).value, abs=0.05)


def test_a_shifted_order_is_found_and_masked(rng):
    spectrum = made_up(rng, velocity=10.0)
    order = (spectrum.wavelength_air > 5500.0).astype(int) + (spectrum.wavelength_air > 6200.0)
    moved = np.where(order == 1, spectrum.wavelength_air * (1.0 + 8.0 / LIGHT_SPEED_KMS), spectrum.wavelength_air)
    found = velocity_of(spectrum.replace(wavelength_air=moved, order=order))
    assert list(found.order_shift) == [1]
    assert found.order_shift[1] == pytest.approx(8.0 * 0.67, abs=3.0)  # against a mean that it is part of
    rest = to_rest(spectrum.replace(wavelength_air=moved, order=order), found)
    assert rest.mask[order == 1].all()
    assert not rest.mask[order != 1].any()


def test_the_range_to_search_is_kept(rng):
    spectrum = made_up(rng, velocity=250.0)
    assert velocity_of(spectrum, search=(200.0, 300.0)).value == pytest.approx(250.0, abs=0.5)
    with pytest.raises(SpectrumError, match="between -100 and 100"):
        velocity_of(spectrum, search=(-100.0, 100.0))
