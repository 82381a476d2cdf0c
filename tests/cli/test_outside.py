"""Outside knowledge from the command line: options, columns, tables, reference stars of other files, [alpha/Fe]."""

from __future__ import annotations

import json

import numpy as np
import pytest
from astropy.table import Table

from specsolve.cli import main as cli
from specsolve.errors import EXIT_NO_INPUT, EXIT_SOLVED, EXIT_UNSOLVED, EXIT_USAGE
from specsolve.report.tables import read_table

MEASURED = ("parallax=5.0+-0.02", "magnitude_bolometric=8.0+-0.01", "mass=1.0+-0.03")


def solved(arguments, capsys) -> dict[str, dict]:
    code = cli.run(["solve", *arguments, "--json", "--quiet"])
    shown = capsys.readouterr()
    assert code in (EXIT_SOLVED, EXIT_UNSOLVED), shown.err
    return {star["star"]: star for star in json.loads(shown.out)["stars"]}


def test_priors_and_measured_values(stars_file, grid_option, capsys):
    one = [str(stars_file), *grid_option, "--star", "dwarf"]
    free = solved(one, capsys)["dwarf"]
    teff, error = free["teff"], free["teff_error_star"]
    held = solved([*one, "--prior", f"teff={teff + 3 * error}+-{error / 20}"], capsys)["dwarf"]
    assert held["teff"] == pytest.approx(teff + 3 * error, abs=0.2 * error)
    assert held["outside_share"][0] > 0.9
    assert held["outside"][0]["source"] == "given by the user"
    options = [text for value in MEASURED for text in ("--measured", value)]
    star = solved([*one, *options], capsys)["dwarf"]
    entry = star["outside"][0]
    assert entry["name"] == "logg"
    assert "parallax 5 mas" in entry["source"]
    # 4 log10(Teff) + 0.4 m + 2 log10(parallax) + constant: by hand for this star
    by_hand = 4.438 + 4 * np.log10(star["teff"] / 5772.0) + 0.4 * (8.0 + 5 + 5 * np.log10(0.005) - 4.74)
    assert entry["mean"] == pytest.approx(by_hand, abs=1e-6)
    assert star["outside_share"][1] > 0.5


def test_a_table_of_outside_knowledge_and_again(stars_file, grid_option, tmp_path, capsys):
    known = tmp_path / "known.ecsv"
    Table(
        {
            "star": ["giant", "*"],
            "fix_logg": [2.5, np.nan],
            "prior_vmic": [np.nan, 1.2],
            "prior_vmic_error": [np.nan, 0.3],
        },
        units={"prior_vmic": "km/s", "prior_vmic_error": "km/s"},
    ).write(known)
    first, second = tmp_path / "first", tmp_path / "second"
    command = ["solve", str(stars_file), *grid_option, "--output", str(first), "--outside", str(known)]
    assert cli.run(command) == EXIT_SOLVED
    assert "from elsewhere: prior_vmic of 3 stars, fix_logg of 1 star" in capsys.readouterr().err
    one = read_table(f"{first}.ecsv", "stars")
    assert dict(zip(one["star"], one["fixed"], strict=True)) == {"dwarf": "", "subgiant": "", "giant": "logg"}
    assert json.loads(one["outside"][0])[0]["name"] == "vmic"
    assert cli.run(["again", str(first), *grid_option, "--output", str(second)]) == EXIT_SOLVED
    two = read_table(f"{second}.ecsv", "stars")
    for name in ("teff", "logg", "feh", "vmic", "cov_star", "outside_share"):
        np.testing.assert_allclose(np.asarray(one[name]), np.asarray(two[name]), rtol=1e-9)
    assert list(one["fixed"]) == list(two["fixed"])
    table = Table.read(known)
    table["star"][0] = "gaint"
    table.write(known, overwrite=True)
    assert cli.run(command) == EXIT_NO_INPUT
    assert "no star in the tables is called gaint" in capsys.readouterr().err


def test_columns_of_the_widths_table_and_a_star_that_they_spoil(stars_file, grid_option, tmp_path, capsys):
    table = Table.read(stars_file)
    table["fix_logg"] = np.where(table["star"] == "giant", 2.5, np.nan)
    table["numax"] = np.where(table["star"] == "dwarf", 3000.0, np.nan)
    table["numax"].unit = "uHz"
    path = tmp_path / "more.ecsv"
    table.write(path)
    stars = solved([str(path), *grid_option], capsys)
    assert stars["giant"]["fixed"] == "logg"
    assert stars["subgiant"]["status"] == "solved"
    assert stars["dwarf"]["status"] == "unsolved"
    assert stars["dwarf"]["reason"] == "numax is given without numax_error"


def test_a_reference_star_of_another_table(stars_file, grid_option, tmp_path, capsys):
    table = Table.read(stars_file)
    reference = tmp_path / "reference.ecsv"
    table[table["star"] == "dwarf"].write(reference)
    at = "teff=5780+-20,logg=4.41,feh=-0.07"
    inside = solved([str(stars_file), *grid_option, "--reference", "dwarf", "--reference-parameters", at], capsys)
    others = [str(stars_file), *grid_option, "--star", "giant", "--reference", str(reference)]
    apart = solved([*others, "--reference-parameters", at], capsys)
    assert list(apart) == ["dwarf", "giant"]
    assert apart["giant"]["teff"] == pytest.approx(inside["giant"]["teff"], rel=1e-9)
    assert apart["giant"]["teff_error_list"] > 15.0  # 20 K of the reference
    assert apart["dwarf"]["teff_error_list"] == pytest.approx(20.0)
    assert "errors 20 K" in apart["dwarf"]["notes"]
    assert cli.run(["solve", str(stars_file), *grid_option, "--reference", str(stars_file)]) == EXIT_NO_INPUT
    assert "has 3 stars" in capsys.readouterr().err
    assert cli.run(["solve", str(stars_file), *grid_option, "--reference", "nobody"]) == EXIT_NO_INPUT
    assert "neither in the tables nor a file" in capsys.readouterr().err


def test_alpha_of_a_grid_without_responses_is_a_reason(stars_file, grid_option, capsys):
    star = solved([str(stars_file), *grid_option, "--star", "giant", "--alpha", "0.2"], capsys)["giant"]
    assert star["status"] == "unsolved"
    assert "specsolve.grid.perturbations_build" in star["reason"]


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--prior", "teff=5800"], "give value and error"),
        (["--prior", "teff=5800+-60", "--fix", "teff=5800"], "both give teff"),
        (["--measured", "distance=10+-1"], "can be parallax"),
        (["--colour-scale", "stars"], "is not one of"),
        (["--reference-parameters", "teff=5777+-10"], "needs --reference"),
        (["--scheduler", "tcp://x:1", "--workers", "2"], "give one of them"),
    ],
)
def test_misunderstandings(options, words, stars_file, grid_option, capsys):
    assert cli.run(["solve", str(stars_file), *grid_option, *options]) == EXIT_USAGE
    assert words in capsys.readouterr().err
