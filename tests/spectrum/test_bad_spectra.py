"""Spectra that cannot be used: each is refused in one sentence that says what helps; what can be mended is told."""

from __future__ import annotations

import gzip

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from specsolve.errors import SpectrumError
from specsolve.spectrum.raw import ReadOptions
from specsolve.spectrum.read import read_spectrum

N = 2000


@pytest.fixture
def columns(rng):
    return 5000.0 + 0.02 * np.arange(N), 1.0 + rng.normal(0.0, 0.01, N)


def text(path, *columns):
    np.savetxt(path, np.column_stack(columns), fmt="%.8g")
    return path


def refused(path, words, **options):
    with pytest.raises(SpectrumError, match=words) as caught:
        read_spectrum(path, ReadOptions(**options))
    assert "\n" not in str(caught.value)
    assert str(path) in str(caught.value)


def test_wavelengths_that_do_not_increase(tmp_path, columns, rng):
    wave, flux = columns
    refused(text(tmp_path / "a.txt", rng.permutation(wave), flux), "wavelengths do not increase")


def test_one_step_back(tmp_path, columns):
    wave, flux = columns
    wave[70] = wave[60]
    refused(text(tmp_path / "a.txt", wave, flux), r"pixel 71, 1 such places|pixel 71, 2 such places")


def test_falling_wavelengths_are_turned_round(tmp_path, columns):
    wave, flux = columns
    found = read_spectrum(text(tmp_path / "a.txt", wave[::-1], flux[::-1]))
    assert np.allclose(found.wavelength_air, wave)
    assert any("turned round" in note for note in found.notes)


def test_gaps_of_nan_are_masked(tmp_path, columns):
    wave, flux = columns
    flux[300:400] = np.nan
    flux[900] = 0.0
    found = read_spectrum(text(tmp_path / "a.txt", wave, flux))
    assert found.mask.sum() == 101
    assert found.mask[300:400].all()
    assert np.isfinite(found.flux).all()
    assert np.isfinite(found.sigma).all()
    assert any("101 of 2000 pixels" in note for note in found.notes)


def test_nothing_but_nan(tmp_path, columns):
    refused(text(tmp_path / "a.txt", columns[0], np.full(N, np.nan)), "only 0.0 % of the pixels")


@pytest.mark.parametrize(("factor", "unit"), [(0.1, "nm"), (1e-4, "micron")])
def test_other_units_without_a_word(tmp_path, columns, factor, unit):
    wave, flux = columns
    path = text(tmp_path / "a.txt", wave * factor, flux)
    refused(path, f"look like {unit}: say --wavelength-unit {unit}")
    assert np.allclose(read_spectrum(path, ReadOptions(unit=unit)).wavelength_air, wave, atol=1e-2)


def test_logarithms_without_a_word(tmp_path, columns):
    wave, flux = columns
    path = tmp_path / "a.txt"
    np.savetxt(path, np.column_stack([np.log10(wave), flux]), fmt="%.10f")
    refused(path, "look like log10")
    assert np.allclose(read_spectrum(path, ReadOptions(unit="log10(Angstrom)")).wavelength_air, wave, atol=1e-3)


def test_nanometres_called_angstrom(tmp_path, columns):
    unit = fits.PrimaryHDU(columns[1])
    unit.header.update({"CRVAL1": 500.0, "CDELT1": 0.002, "CRPIX1": 1.0, "CUNIT1": "Angstrom", "CTYPE1": "AWAV"})
    unit.writeto(tmp_path / "a.fits")
    refused(tmp_path / "a.fits", "cannot be Angstrom .the file says Angstrom.; they look like nm")


def test_wrong_unit_said(tmp_path, columns):
    refused(text(tmp_path / "a.txt", *columns), "said to be nm", unit="nm")
    refused(text(tmp_path / "a.txt", *columns), "not a unit of length", unit="kg")


def test_negative_flux(tmp_path, columns):
    wave, flux = columns
    refused(text(tmp_path / "a.txt", wave, flux - 3.0), "there is no light in it")


def test_some_negative_flux_is_told(tmp_path, columns, rng):
    wave, flux = columns
    flux[:200] = -rng.uniform(0.1, 0.2, 200)
    assert any("have a negative flux" in note for note in read_spectrum(text(tmp_path / "a.txt", wave, flux)).notes)


def test_flux_that_is_not_normalised(tmp_path, columns):
    wave, flux = columns
    found = read_spectrum(text(tmp_path / "a.txt", wave, 4000.0 * flux * np.linspace(0.5, 1.5, N)))
    assert not found.normalised
    said = read_spectrum(text(tmp_path / "a.txt", wave, 4000.0 * flux), ReadOptions(normalised=True))
    assert not said.normalised
    assert any("said to be normalised" in note for note in said.notes)


def image(path, data, **header):
    unit = fits.PrimaryHDU(data)
    unit.header.update(header)
    unit.writeto(path)
    return path


def test_truncated_fits(tmp_path, columns):
    path = image(tmp_path / "a.fits", columns[1], CRVAL1=5000.0, CDELT1=0.02, CRPIX1=1.0)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    refused(path, "truncated FITS file")


def test_truncated_gzip(tmp_path, columns):
    path = image(tmp_path / "a.fits", columns[1], CRVAL1=5000.0, CDELT1=0.02, CRPIX1=1.0)
    packed = gzip.compress(path.read_bytes())
    (tmp_path / "a.fits.gz").write_bytes(packed[: len(packed) // 2])
    refused(tmp_path / "a.fits.gz", "damaged FITS file|cannot be read")


def test_truncated_fits_table(tmp_path, columns):
    path = tmp_path / "a.fits"
    Table({"wavelength": columns[0], "flux": columns[1]}).write(path)
    path.write_bytes(path.read_bytes()[:-5760])
    refused(path, "truncated FITS file")


def test_an_image_of_two_dimensions(tmp_path):
    refused(image(tmp_path / "a.fits", np.ones((50, 60))), "a 2-dimensional image .50 x 60 pixels., not a spectrum")
    header = {"CRVAL1": 5000.0, "CDELT1": 0.02, "CRPIX1": 1.0, "CTYPE1": "WAVE", "CUNIT1": "Angstrom"}
    refused(image(tmp_path / "b.fits", np.ones((50, 60)), **header), "a 2-dimensional image")


def test_an_image_of_one_row_is_a_spectrum(tmp_path, columns):
    header = {"CRVAL1": 5000.0, "CDELT1": 0.02, "CRPIX1": 1.0}
    found = read_spectrum(image(tmp_path / "a.fits", columns[1][None, :], **header))
    assert np.allclose(found.wavelength_air, columns[0])


def test_no_wavelengths_in_the_header(tmp_path, columns):
    refused(image(tmp_path / "a.fits", columns[1]), "no wavelengths in the header")


def test_files_that_are_no_spectra(tmp_path):
    (tmp_path / "empty.fits").write_bytes(b"")
    (tmp_path / "words.txt").write_text("a letter\nto somebody\n")
    (tmp_path / "binary.dat").write_bytes(bytes(range(256)))
    (tmp_path / "four.txt").write_text("1 2 3 4\n5 6 7 8\n")
    (tmp_path / "uneven.txt").write_text("5000 1\n5001 1 2\n")
    (tmp_path / "short.txt").write_text("5000 1.0\n5001 1.1\n")
    refused(tmp_path / "missing.fits", "no such file")
    refused(tmp_path / "empty.fits", "the file is empty")
    refused(tmp_path / "words.txt", "not a row of numbers")
    refused(tmp_path / "binary.dat", "neither FITS nor text")
    refused(tmp_path / "four.txt", "4 columns without headings")
    refused(tmp_path / "uneven.txt", "row 2 has 3 numbers")
    refused(tmp_path / "short.txt", "fewer than 50 pixels")
    refused(tmp_path, "cannot be read")


def test_a_table_without_known_headings(tmp_path, columns):
    Table({"x": columns[0], "y": columns[1]}).write(tmp_path / "a.ecsv")
    refused(tmp_path / "a.ecsv", "no column for the wavelength; the table has x, y")
    found = read_spectrum(tmp_path / "a.ecsv", ReadOptions(columns={"wavelength": "x", "flux": "y"}))
    assert np.allclose(found.flux, columns[1])
    refused(tmp_path / "a.ecsv", "no column 'z' for flux", columns={"wavelength": "x", "flux": "z"})


def test_no_noise_and_no_errors(tmp_path, columns):
    path = text(tmp_path / "a.txt", columns[0], np.ones(N))
    refused(path, "say --signal-to-noise")
    assert read_spectrum(path, ReadOptions(signal_to_noise=100.0)).sigma[0] == pytest.approx(0.01)


def test_errors_that_are_too_small_are_told(tmp_path, columns):
    found = read_spectrum(text(tmp_path / "a.txt", *columns, np.full(N, 1e-3)))
    assert any("times as much as the errors of the file allow" in note for note in found.notes)
