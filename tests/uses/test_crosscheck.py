"""Differences with their causes on invented stars: splits, broken balances, tables, and the command."""

from __future__ import annotations

import dataclasses
import json

import numpy as np
import pytest
from astropy.table import Table

from specsolve.balance.solution import PARAMETER_NAMES
from specsolve.balance.solve import solve
from specsolve.cli.main import run
from specsolve.errors import EXIT_NO_INPUT, EXIT_SOLVED, EXIT_USAGE
from specsolve.report.tables import read_table
from specsolve.uses.crosscheck import crosscheck
from specsolve.uses.significance import in_sigma


def published_of(solutions, path=None, **columns) -> Table:
    """A table of parameters as a paper gives them."""
    theta = np.array([s.parameters for s in solutions])
    table = Table({"star": [s.star.upper() for s in solutions]})
    for k, name in enumerate(PARAMETER_NAMES):
        table[name] = theta[:, k]
        table[f"{name}_error"] = [s.errors_star[k] for s in solutions]
    for name, values in columns.items():
        table[name] = values
    if path is not None:
        table.write(path, format="ascii.ecsv", overwrite=True)
    return table


@pytest.fixture(scope="module")
def wrong_gravity(solutions, stars, grid):
    """What an analysis finds that held gravities wrong by 0.25 to 0.4 dex."""
    steps = [0.35, -0.3, 0.4, -0.25, 0.3]
    held = [
        solve(star, grid, treatment="lte", fix={"logg": one.logg + step})
        for star, one, step in zip(stars, solutions, steps, strict=True)
    ]
    return published_of(held, logg_error=np.zeros(len(held)))


@pytest.fixture(scope="module")
def found(solutions, wrong_gravity, grid):
    return crosscheck(solutions, wrong_gravity, grid)


def test_a_held_gravity_is_named_and_explains_the_rest(found):
    assert found.sets["lte"].named == ("held_logg",)
    stars = found.tables["crosscheck"]
    # The same lines: what holding the gravity leaves is nothing, to the tolerance of a solve.
    assert np.abs(stars["remainder_teff"]).max() < 1.0
    assert np.abs(stars["remainder_feh"]).max() < 0.002
    assert (stars["significance"] > 1.5).all()


def test_at_their_parameters_the_ionization_balance_breaks(found):
    stars = found.tables["crosscheck"]
    assert (stars["broken"] == "ionization_offset").sum() >= 4
    # A gravity too high makes Fe II read high, so Fe I - Fe II negative.
    assert (np.sign(stars["their_ionization_offset"]) == -np.sign(stars["d_logg"])).all()


def test_shares_of_causes_add_up(solutions, grid):
    """Two causes: shares and remainder make up the difference, whatever the order."""
    paper = published_of(solutions[:3])
    paper["logg"] += [0.3, -0.3, 0.3]
    paper["feh"] -= 0.05
    made = crosscheck(solutions[:3], paper, grid, causes=("held_logg", "zero_point"))
    causes = made.tables["crosscheck_causes"]
    causes = causes[causes["named"]]
    for row in made.tables["crosscheck"]:
        mine = causes[causes["star"] == row["star"]]
        for name in PARAMETER_NAMES:
            total = np.sum(mine[f"share_{name}"]) + row[f"remainder_{name}"]
            assert total == pytest.approx(row[f"d_{name}"], abs=1e-6 * (1.0 + abs(row[name])))


def test_a_stated_solar_iron_is_taken_as_given(solutions, grid):
    paper = published_of(solutions[:3], solar_iron=[7.67] * 3)
    paper["feh"] -= 7.67 - 7.46
    made = crosscheck(solutions[:3], paper, grid)
    assert "solar_iron" in made.sets["lte"].named
    verdicts = made.tables["crosscheck_verdicts"]
    assert verdicts["outcome"][verdicts["cause"] == "solar_iron"] == "stated"
    # [Fe/H] of the atmosphere goes with the zero: a small shift of the other parameters remains.
    assert np.abs(made.tables["crosscheck"]["remainder_feh"]).max() < 0.06


def test_the_own_values_differ_in_nothing(solutions, grid):
    made = crosscheck(solutions, published_of(solutions), grid)
    assert made.sets["lte"].named == ()
    assert np.abs(made.tables["crosscheck"]["d_teff"]).max() == 0.0
    assert (made.tables["crosscheck"]["balance_significance"] < 0.5).all()


def test_significance_uses_the_whole_covariance():
    assert in_sigma(1.0, 1) == pytest.approx(1.0)
    assert in_sigma(2.2957, 2) == pytest.approx(1.0, abs=1e-3)
    assert np.isnan(in_sigma(3.0, 0))


def test_the_command(result_file, wrong_gravity, grid, tmp_path, capsys):
    paper = tmp_path / "paper.ecsv"
    wrong_gravity.write(paper, format="ascii.ecsv")
    arguments = ["crosscheck", str(result_file), str(paper), "--grid", str(grid.directory)]
    code = run(
        [
            *arguments,
            "--output",
            str(tmp_path / "against"),
            "--plots",
            str(tmp_path / "figures"),
            "--plot-format",
            "png",
        ]
    )
    text = capsys.readouterr().out
    assert code == EXIT_SOLVED
    assert "named: their logg came from elsewhere" in text
    for kind, ending in (("", ""), ("_causes", "_causes"), ("_set", "_set"), ("_verdicts", "_verdicts")):
        table = read_table(tmp_path / f"against{ending}.ecsv", f"crosscheck{kind}")
        assert len(table) > 0
        assert table.meta["provenance"]["inputs"]
    assert sorted(p.name for p in (tmp_path / "figures").iterdir()) == ["broken_balances_lte.png", "splits_lte.png"]


def test_bad_input_of_the_command(result_file, solutions, grid, tmp_path, capsys):
    paper = tmp_path / "paper.ecsv"
    arguments = [
        "crosscheck",
        str(result_file),
        str(paper),
        "--grid",
        str(grid.directory),
        "--output",
        str(tmp_path / "out"),
    ]

    def fails(code: int, words: str, *more: str) -> None:
        assert run([*arguments, *more]) == code
        error = capsys.readouterr().err
        assert words in error
        assert error.count("\n") == 1
        assert not list(tmp_path.glob("out*"))

    fails(EXIT_NO_INPUT, "paper.ecsv")
    published_of([dataclasses.replace(one, star=f"x{i}") for i, one in enumerate(solutions)], paper)
    fails(EXIT_NO_INPUT, "no star of the results is in the published table")
    table = published_of(solutions)
    table["star"][1] = table["star"][0]
    table.write(paper, format="ascii.ecsv", overwrite=True)
    fails(EXIT_NO_INPUT, "same star")
    table.remove_column("logg")
    table.write(paper, format="ascii.ecsv", overwrite=True)
    fails(EXIT_NO_INPUT, "no column 'logg'")
    fails(EXIT_USAGE, "--cause weather", "--cause", "weather")


def test_json(result_file, solutions, grid, tmp_path, capsys):
    published_of(solutions[:2], tmp_path / "paper.ecsv")
    assert (
        run(["--json", "crosscheck", str(result_file), str(tmp_path / "paper.ecsv"), "--grid", str(grid.directory)])
        == 0
    )
    found = json.loads(capsys.readouterr().out)
    assert found["schema"] == 1
    assert len(found["crosscheck"]) == 2
    assert len(found["unmatched_ours"]) == 3
