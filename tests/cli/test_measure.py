"""``specsolve measure`` and ``specsolve run``: tables, JSON, figures, exit codes; one bad spectrum never stops the others."""

from __future__ import annotations

import json

import numpy as np
import pytest
from astropy.io import fits

from specsolve.cli import main as cli
from specsolve.report.tables import read_table
from specsolve.spectrum.predict import Guess, predict
from tests.spectrum.made_up_spectra import gaussian_flux, listed, wavelengths

TRUTH = Guess(teff=5600.0, logg=4.3, mh=-0.1, vmic=1.1)
LOW, HIGH = 5850.0, 6700.0
VELOCITY = 25.0


@pytest.fixture(scope="module")
def spectrum_file(tmp_path_factory):
    """A spectrum of the default lines alone, Gaussian, with the widths predicted for a dwarf; R 60 000, S/N 150."""
    rng = np.random.default_rng(5)
    lines = listed(LOW, HIGH)
    prediction = predict(lines, TRUTH)
    own = prediction.lines.own >= 0
    widths = np.empty(len(lines))
    widths[prediction.lines.own[own]] = (prediction.relative_width * prediction.lines.wavelength_air)[own] * 1e3
    wave = wavelengths(LOW, HIGH, 60000.0)
    flux = gaussian_flux(wave, lines, widths, velocity=VELOCITY, resolving_power=60000.0)
    others = prediction.lines.own < 0
    strong = others & (prediction.relative_width * prediction.lines.wavelength_air * 1e3 > 1.0)
    flux *= gaussian_flux(
        wave,
        prediction.lines.select(strong),
        (prediction.relative_width * prediction.lines.wavelength_air)[strong] * 1e3,
        velocity=VELOCITY,
        resolving_power=60000.0,
    )
    flux += rng.normal(0.0, 1.0 / 150.0, wave.size)
    unit = fits.PrimaryHDU(flux)
    unit.header.update(
        {"CRPIX1": 1.0, "CRVAL1": wave[0], "CDELT1": wave[0] * np.log(wave[1] / wave[0]), "CTYPE1": "AWAV-LOG",
         "CUNIT1": "Angstrom", "SPEC_RES": 60000.0}
    )  # fmt: skip
    path = tmp_path_factory.mktemp("spectra") / "dwarf 1.fits"
    unit.writeto(path)
    return path, lines, widths


@pytest.fixture
def bad_file(tmp_path):
    path = tmp_path / "image.fits"
    fits.PrimaryHDU(np.ones((40, 50))).writeto(path)
    return path


def go(capsys, *arguments):
    code = cli.run([str(argument) for argument in arguments])
    shown = capsys.readouterr()
    assert "Traceback" not in shown.err
    return code, shown.out, shown.err


@pytest.fixture(scope="module")
def measured(spectrum_file, tmp_path_factory):
    """The tables of one measurement; shared, because measuring takes seconds."""
    output = tmp_path_factory.mktemp("measured") / "widths"
    assert cli.run(["measure", str(spectrum_file[0]), "--output", str(output), "--quiet"]) == 0
    return output.with_suffix(".ecsv"), output.parent / "widths_spectra.ecsv"


def test_widths_come_back(measured, spectrum_file):
    _, lines, truth = spectrum_file
    table = read_table(measured[0], "measurements")
    assert set(table["star"]) == {"dwarf 1"}
    true = dict(zip(zip(lines.ion.tolist(), lines.wavelength_air.tolist(), strict=True), truth, strict=True))
    use = np.array(table["use"])
    wanted = np.array([true.get((str(row["ion"]), float(row["wavelength_air"])), np.nan) for row in table])
    assert use.sum() > 30
    assert np.isfinite(wanted[use]).all()  # no line outside the spectrum is used
    weak = use & (wanted < 80.0)
    ratio = np.array(table["equivalent_width"])[weak] / wanted[weak]
    assert weak.sum() > 10
    # the Gaussian lines of this spectrum have no damping wings, those of the fit have 2 to 3 % of their width in them
    assert -0.01 < np.median(ratio) - 1.0 < 0.04
    assert np.all((table["wavelength_air"] > LOW - 5.0) & (table["wavelength_air"] < HIGH + 5.0))


def test_errors_are_told_apart(measured):
    table = read_table(measured[0], "measurements")
    use = np.array(table["use"])
    parts = np.sqrt(table["noise_error"] ** 2 + table["continuum_error"] ** 2 + table["blend_error"] ** 2)
    assert np.allclose(np.array(parts)[use], np.array(table["equivalent_width_error"])[use], rtol=1e-6)
    assert (np.array(table["continuum_group"])[use] >= 0).all()


def test_the_spectrum_has_a_row_of_its_own(measured):
    (row,) = read_table(measured[1], "spectra")
    assert row["status"] == "measured"
    assert row["velocity"] == pytest.approx(VELOCITY, abs=0.2)
    assert row["signal_to_noise"] == pytest.approx(150.0, rel=0.15)
    assert row["resolving_power"] == 60000.0
    assert row["air_or_vacuum"] == "header"
    assert row["guess_source"].startswith("solved")
    assert row["guess_teff"] == pytest.approx(TRUTH.teff, abs=250.0)


def test_provenance_names_the_files_and_the_options(measured, spectrum_file):
    provenance = read_table(measured[0], "measurements").meta["provenance"]
    assert list(provenance["inputs"]) == [spectrum_file[0].name]
    assert "measure" in provenance["command_line"] or provenance["command_line"]
    assert provenance["options"]["orders"] == "separate"


def test_solve_reads_the_widths(measured, capsys):
    code, out, _ = go(capsys, "solve", measured[0], "--json", "--quiet")
    (star,) = json.loads(out)["stars"]
    assert code == 0, star["reason"]
    assert star["star"] == "dwarf 1"
    assert star["teff"] == pytest.approx(TRUTH.teff, abs=150.0)
    assert star["feh"] == pytest.approx(TRUTH.mh, abs=0.12)


def test_run_is_measure_and_solve_and_a_bad_spectrum_does_not_stop_it(spectrum_file, bad_file, tmp_path, capsys):
    code, out, err = go(
        capsys,
        "run",
        bad_file,
        spectrum_file[0],
        "--output",
        tmp_path / "r",
        "--json",
        "--quiet",
        "--guess",
        "teff=5600",
    )
    assert code == 4
    (line,) = [text for text in err.strip().splitlines() if "image.fits" in text]
    assert "2-dimensional image" in line
    found = json.loads(out)
    assert [one["status"] for one in found["spectra"]] == ["failed", "measured"]
    (star,) = found["stars"]
    assert star["status"] == "solved"
    assert star["teff"] == pytest.approx(TRUTH.teff, abs=200.0)
    for name in ("r", "r_lines", "r_candidates", "r_decisions", "r_widths", "r_widths_spectra"):
        assert (tmp_path / f"{name}.ecsv").exists()


def test_options_of_solve_are_those_of_run():
    from specsolve.cli.run import OF_EVERY_COMMAND, OF_THE_TABLE, run
    from specsolve.cli.solve import solve

    wanted = {option.name for option in solve.params} - OF_THE_TABLE - OF_EVERY_COMMAND
    assert wanted <= {option.name for option in run.params}


def test_only_bad_spectra(bad_file, tmp_path, capsys):
    code, out, err = go(capsys, "measure", bad_file, tmp_path / "missing.fits", "--output", tmp_path / "w")
    assert (code, out) == (3, "")
    assert len(err.strip().splitlines()) == 2
    assert "no such file" in err
    assert not (tmp_path / "w.ecsv").exists()


def test_a_wrong_star_is_refused(tmp_path, rng, capsys):
    wave = wavelengths(LOW, HIGH)
    np.savetxt(tmp_path / "noise.txt", np.column_stack([wave, 1.0 + rng.normal(0.0, 0.01, wave.size)]), fmt="%.6f")
    code, _, err = go(capsys, "measure", tmp_path / "noise.txt")
    assert code == 3
    assert "no velocity found" in err


def test_misunderstandings_are_usage_errors(spectrum_file, tmp_path, capsys):
    path = spectrum_file[0]
    for options, words in (
        (["--velocity-range", "5"], "give lower and upper limit"),
        (["--velocity", "5", "--velocity-range", "1:9"], "exclude each other"),
        (["--name", "A", "--name", "B"], "2 names for 1 spectra"),
        (["--spectrum-column", "sky=S"], "can be wavelength, flux"),
        (["--guess", "teff=hot"], "is not a number"),
        (["--json", "--output", "-"], "both want standard output"),
        (["--medium", "water"], "not one of"),
    ):
        code, _, err = go(capsys, "measure", path, *options)
        assert code == 2, options
        assert words in err, err


def test_figures_and_a_list_of_ones_own(spectrum_file, tmp_path, capsys):
    path, lines, _ = spectrum_file
    own = lines.select((lines.wavelength_air > 6000.0) & (lines.grade <= 2))
    own.to_table().write(tmp_path / "own.ecsv", format="ascii.ecsv")
    code, out, _ = go(
        capsys, "measure", path, "--lines", tmp_path / "own.ecsv", "--guess", "teff=5600,logg=4.3", "--plots",
        tmp_path / "figures", "--output", "-", "--quiet", "--velocity", VELOCITY,
    )  # fmt: skip
    assert code == 0
    assert out.startswith("# %ECSV")
    assert out.count("dwarf 1,") >= len(own)
    names = sorted(path.name for path in (tmp_path / "figures").iterdir())
    assert names == ["dwarf_1_lines.pdf", "dwarf_1_spectrum.pdf"]


@pytest.mark.slow
def test_workers_change_nothing(spectrum_file, tmp_path, capsys):
    outputs = []
    for workers in (1, 2):
        code, out, _ = go(
            capsys, "measure", spectrum_file[0], spectrum_file[0], "--workers", workers, "--guess", "teff=5600", "--json",
            "--quiet",
        )  # fmt: skip
        assert code == 0
        outputs.append([one["lines"] for one in json.loads(out)["spectra"]])
    assert outputs[0] == outputs[1]
    assert [line["star"] for line in outputs[0][1]][:1] == ["dwarf 1 (dwarf 1.fits)"]
