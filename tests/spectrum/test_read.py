"""Reading: every format gives the same pixels back, and every decision is told."""

from __future__ import annotations

import gzip
import shutil

import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.table import QTable, Table

from specsolve.lines import air_to_vacuum
from specsolve.spectrum.noise import estimate_noise
from specsolve.spectrum.orders import merged, overlap_notes
from specsolve.spectrum.pixels import is_normalised, resolving_power
from specsolve.spectrum.raw import ReadOptions
from specsolve.spectrum.read import read_spectrum
from specsolve.spectrum.read_table import medium_of
from specsolve.spectrum.types import Spectrum

NOISE = 0.01
STEP = 0.02
N = 3000


@pytest.fixture
def truth(rng):
    wave = 5000.0 + STEP * np.arange(N)
    flux = 1.0 - 0.5 * np.exp(-0.5 * ((wave - 5030.0) / 0.05) ** 2) + rng.normal(0.0, NOISE, N)
    return wave, flux


def image(path, flux, **header):
    unit = fits.PrimaryHDU(flux)
    unit.header.update(header)
    unit.writeto(path)
    return path


LINEAR = {"CRVAL1": 5000.0, "CDELT1": STEP, "CRPIX1": 1.0}


@pytest.mark.parametrize(
    ("header", "source"),
    [
        ({}, "assumed"),
        ({"CTYPE1": "AWAV", "CUNIT1": "Angstrom"}, "header"),
        ({"CTYPE1": "LINEAR"}, "assumed"),
        ({"CTYPE1": "AWAV", "CUNIT1": "nm", "CRVAL1": 500.0, "CDELT1": 0.1 * STEP}, "header"),
        ({"AIRORVAC": "air"}, "header"),
        ({"CTYPE1": "AWAV", "CUNIT1": "ANGSTROMS"}, "header"),
    ],
)
def test_linear_image(tmp_path, truth, header, source):
    wave, flux = truth
    found = read_spectrum(image(tmp_path / "HD 1.fits", flux, **{**LINEAR, **header}))
    assert found.star == "HD 1"
    assert np.allclose(found.wavelength_air, wave, atol=1e-6)
    assert np.allclose(found.flux, flux)
    assert found.air_source == source
    assert any("air wavelengths assumed" in note for note in found.notes) == (source == "assumed")


@pytest.mark.parametrize("style", ["flag", "standard"])
def test_logarithmic_image(tmp_path, rng, style):
    wave = 5000.0 * np.exp(4e-6 * np.arange(N))
    flux = 1.0 + rng.normal(0.0, NOISE, N)
    header = {"CRPIX1": 1.0}
    if style == "flag":
        header |= {"CRVAL1": np.log10(5000.0), "CDELT1": 4e-6 / np.log(10.0), "DC-FLAG": 1}
    else:
        header |= {"CRVAL1": 5000.0, "CDELT1": 5000.0 * 4e-6, "CTYPE1": "AWAV-LOG", "CUNIT1": "Angstrom"}
    found = read_spectrum(image(tmp_path / "log.fits", flux, **header))
    assert np.allclose(found.wavelength_air, wave, atol=1e-4)


def test_vacuum_by_header_is_converted(tmp_path, truth):
    wave, flux = truth
    found = read_spectrum(image(tmp_path / "v.fits", flux, **LINEAR, CTYPE1="WAVE", CUNIT1="Angstrom"))
    assert np.allclose(air_to_vacuum(found.wavelength_air), wave, atol=1e-6)
    assert found.air_source == "header vacuum, converted"


def test_what_the_user_says_goes_before_the_header(tmp_path, truth):
    wave, flux = truth
    path = image(tmp_path / "v.fits", flux, **LINEAR, CTYPE1="WAVE", CUNIT1="Angstrom", SPEC_RES=48000.0)
    options = ReadOptions(star="B", medium="air", resolving_power=30000.0, signal_to_noise=50.0)
    found = read_spectrum(path, options)
    assert np.allclose(found.wavelength_air, wave, atol=1e-6)
    assert (found.star, found.resolving_power, found.sigma_source) == ("B", 30000.0, "said")
    assert np.median(found.sigma) == pytest.approx(1.0 / 50.0, rel=0.05)
    assert any("you say air" in note for note in found.notes)
    assert read_spectrum(path).resolving_power == 48000.0


@pytest.mark.parametrize(("name", "power"), [("ERR", 1), ("SIGMA", 1), ("IVAR", -2)])
def test_errors_in_an_extension(tmp_path, truth, name, power):
    primary = fits.PrimaryHDU(truth[1])
    primary.header.update(LINEAR)
    fits.HDUList([primary, fits.ImageHDU(np.full(N, NOISE) ** power, name=name)]).writeto(tmp_path / "e.fits")
    found = read_spectrum(tmp_path / "e.fits")
    assert np.allclose(found.sigma, NOISE)
    assert found.sigma_source == "file"


def table_of(truth, **columns):
    wave, flux = truth
    return Table({"wavelength": wave * u.AA, "flux": flux, "uncertainty": np.full(N, NOISE), **columns})


@pytest.mark.parametrize("name", ["t.fits", "t.ecsv"])
def test_normalised_tables_that_specutils_leaves(tmp_path, truth, name):
    table_of(truth).write(tmp_path / name)
    found = read_spectrum(tmp_path / name)
    assert np.allclose(found.wavelength_air, truth[0])
    assert np.allclose(found.flux, truth[1])
    assert np.allclose(found.sigma, NOISE)
    assert (found.sigma_source, found.normalised) == ("file", True)


@pytest.mark.parametrize("name", ["t.fits", "t.ecsv"])
def test_tables_with_a_flux_unit(tmp_path, truth, name):
    wave, flux = truth
    unit = u.Jy
    QTable({"wavelength": wave / 10 * u.nm, "flux": flux * unit, "uncertainty": np.full(N, NOISE) * unit}).write(
        tmp_path / name
    )
    found = read_spectrum(tmp_path / name)
    assert np.allclose(found.wavelength_air, wave)
    assert np.allclose(found.flux, flux)
    assert np.allclose(found.sigma, NOISE)


@pytest.mark.parametrize(
    ("name", "delimiter", "heading"), [("a.txt", " ", ""), ("a.csv", ",", "wavelength,flux,error")]
)
@pytest.mark.parametrize("n_columns", [2, 3])
def test_text(tmp_path, truth, name, delimiter, heading, n_columns):
    columns = np.column_stack([*truth, np.full(N, NOISE)])[:, :n_columns]
    heading = ",".join(heading.split(",")[:n_columns])
    np.savetxt(tmp_path / name, columns, delimiter=delimiter, header=heading, comments="", fmt="%.8f")
    found = read_spectrum(tmp_path / name)
    assert np.allclose(found.wavelength_air, truth[0])
    assert np.allclose(found.flux, truth[1], atol=1e-7)
    assert found.sigma_source == ("file" if n_columns == 3 else "estimated")
    assert np.median(found.sigma) == pytest.approx(NOISE, rel=0.1)


def test_gzipped(tmp_path, truth):
    path = image(tmp_path / "g.fits", truth[1], **LINEAR)
    with path.open("rb") as source, gzip.open(tmp_path / "g.fits.gz", "wb") as target:
        shutil.copyfileobj(source, target)
    found = read_spectrum(tmp_path / "g.fits.gz")
    assert found.star == "g"
    assert np.allclose(found.flux, truth[1])


def test_orders_in_a_column_in_rows_and_one_after_another(tmp_path, rng):
    waves = [5000.0 + STEP * np.arange(N), 5050.0 + STEP * np.arange(N)]
    fluxes = [1.0 + rng.normal(0.0, NOISE, N) for _ in waves]
    both, number = np.concatenate(waves), np.repeat([7, 8], N)
    Table({"wavelength": both * u.AA, "flux": np.concatenate(fluxes), "order": number}).write(tmp_path / "c.ecsv")
    Table({"WAVE": np.array(waves) * u.AA, "FLUX": np.array(fluxes)}).write(tmp_path / "r.fits")
    np.savetxt(tmp_path / "t.txt", np.column_stack([both, np.concatenate(fluxes)]), fmt="%.8f")
    for name in ("c.ecsv", "r.fits", "t.txt"):
        found = read_spectrum(tmp_path / name)
        assert found.n_orders == 2, name
        assert np.allclose(found.wavelength_air, both)
        assert list(np.unique(found.order)) == [0, 1]
    assert any("taken as 2 orders" in note for note in read_spectrum(tmp_path / "t.txt").notes)


def test_merged_orders_keep_every_pixel_once_and_the_better_signal(rng):
    wave = np.concatenate([5000.0 + STEP * np.arange(N), 5050.0 + STEP * np.arange(N)])
    order = np.repeat([0, 1], N)
    edge = np.where(order == 0, 5060.0 - wave, wave - 5050.0)  # distance to the weak end of each order
    sigma = NOISE * (1.0 + 20.0 * np.exp(-edge / 2.0))
    one = Spectrum.from_arrays("A", wave, 1.0 + rng.normal(0.0, sigma), sigma=sigma, order=order)
    joined = merged(one)
    assert np.all(np.diff(joined.wavelength_air) > 0.0)
    inside = (joined.wavelength_air > 5050.0) & (joined.wavelength_air < 5060.0)
    assert joined.sigma[inside].max() < 0.4 * sigma.max()
    assert joined.n_orders == 1


def test_overlaps_that_agree_are_silent_and_others_are_told(rng):
    wave = np.concatenate([5000.0 + STEP * np.arange(N), 5050.0 + STEP * np.arange(N)])
    order = np.repeat([0, 1], N)

    def lines(at):
        return 1.0 - sum(0.5 * np.exp(-0.5 * ((at - c) / 0.08) ** 2) for c in (5052.0, 5055.0, 5058.0))

    def noisy(shift=0.0, level=1.0):
        flux = np.where(order == 1, level, 1.0) * lines(wave * np.where(order == 1, 1.0 - shift / 299792.458, 1.0))
        return Spectrum.from_arrays("A", wave, flux + rng.normal(0.0, NOISE, wave.size), sigma=NOISE, order=order)

    assert overlap_notes(noisy()) == ()
    (note,) = overlap_notes(noisy(shift=2.0))
    assert "shifted by" in note
    assert float(note.split("shifted by ")[1].split(" km/s")[0]) == pytest.approx(2.0, abs=0.5)
    (note,) = overlap_notes(noisy(level=1.2))
    assert "differ by +20 %" in note


def test_media_of_headers():
    assert medium_of({"CTYPE1": "WAVE-LOG"}) == "vacuum"
    assert medium_of({"ctype1": "AWAV"}) == "air"
    assert medium_of({"VACUUM": True}) == "vacuum"
    assert medium_of({"CTYPE1": "WAVELENGTH"}) is None


def test_resolving_powers_that_are_none_are_left_alone():
    assert np.isnan(resolving_power({"SPEC_RES": "high", "RESOLUTION": 0.1}))


def test_normalised_is_told_from_not(rng):
    flux, mask, order = 1.0 + rng.normal(0.0, 0.02, 4000), np.zeros(4000, bool), np.zeros(4000, int)
    assert is_normalised(flux, mask, order)
    assert not is_normalised(flux * np.linspace(0.2, 3.0, 4000), mask, order)
    assert not is_normalised(5000.0 * flux, mask, order)


def test_noise_of_independent_and_of_interpolated_pixels(rng):
    """On a grid 2.5 times finer, linear interpolation leaves 0.82 of the scatter and 3.7 times the variance of a sum."""
    coarse = rng.normal(1.0, NOISE, 8000)
    sigma, correlation = estimate_noise(coarse, np.zeros(8000, bool))
    assert np.median(sigma) == pytest.approx(NOISE, rel=0.05)
    assert correlation == 1.0
    fine = np.interp(np.arange(0.0, 7999.0, 0.4), np.arange(8000), coarse)
    sigma, correlation = estimate_noise(fine, np.zeros(fine.size, bool), 15.0)
    assert np.median(sigma) == pytest.approx(0.82 * NOISE, rel=0.1)
    assert correlation == pytest.approx(3.7, rel=0.25)


def test_lines_are_not_taken_for_correlation(rng):
    """Three pixels a resolution element, dense lines, independent noise."""
    from tests.spectrum.made_up_spectra import made_up

    one = made_up(rng, low=5000.0, high=5400.0, n_unlisted=400, signal_to_noise=150.0)
    sigma, correlation = estimate_noise(one.flux, one.mask, 3.0)
    assert correlation == 1.0
    assert np.median(sigma) == pytest.approx(1.0 / 150.0, rel=0.1)


def test_nothing_of_specutils_is_imported_by_the_package():
    import subprocess
    import sys

    code = "import specsolve.measuring, specsolve.cli.measure, sys; sys.exit('specutils' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
