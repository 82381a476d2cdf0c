"""``--treatment`` of solve, and the commands departures and correction."""

from __future__ import annotations

import json

import numpy as np
import pytest

from specsolve.cli import main as cli
from specsolve.grid.store import ResponseGrid
from specsolve.grid.write import write_grid
from specsolve.report.tables import read_table
from tests.cli.made_up_stars import TRUTHS, write_stars
from tests.grid.synthetic import synthetic_lines

SHIFT = 0.1  # dex: what Fe I lines lose in the made-up "nlte"


@pytest.fixture(scope="module")
def both(made_up_grid, tmp_path_factory):
    """The made-up grid with a second treatment in which Fe I lines look like those of an abundance lower by `SHIFT`."""
    folder = tmp_path_factory.mktemp("both")
    nodes = tuple(axis.ravel() for axis in np.indices(made_up_grid.node_shape))
    lte = made_up_grid.gather("lte", nodes, np.arange(len(made_up_grid.lines)))
    dA = made_up_grid.axes["dA"]
    nlte = lte.copy()
    for i in np.flatnonzero(made_up_grid.lines.ion == "Fe I"):
        curves = lte[:, i].reshape(-1, dA.size).astype(float)
        slope = np.gradient(curves, dA, axis=1)
        nlte[:, i] = np.rint(curves - SHIFT * slope).reshape(nlte[:, i].shape)
    shape = (*made_up_grid.node_shape, *lte.shape[1:])
    write_grid(
        folder, {"lte": lte.reshape(shape), "nlte": nlte.reshape(shape)}, made_up_grid.lines,
        node_axes=made_up_grid.node_axes, line_axes=made_up_grid.line_axes,
        missing={name: made_up_grid.missing("lte") for name in ("lte", "nlte")},
        atmospheres_identity=made_up_grid.atmospheres_identity, description="two made-up treatments",
    )  # fmt: skip
    return ResponseGrid.open(folder)


def test_nlte_is_the_default_where_the_grid_has_it(both, stars_file, tmp_path, capsys):
    assert both.default_treatment == "nlte"
    assert cli.run(["solve", str(stars_file), "--grid", str(both.directory), "--output", str(tmp_path / "run")]) == 0
    assert "treatment nlte |" in capsys.readouterr().out
    assert set(read_table(tmp_path / "run.ecsv", "stars")["treatment"]) == {"nlte"}
    assert not (tmp_path / "run_differences.ecsv").exists()


def test_both_gives_a_row_each_and_the_differences(both, stars_file, tmp_path, capsys):
    command = ["solve", str(stars_file), "--grid", str(both.directory), "--treatment", "both"]
    assert cli.run([*command, "--output", str(tmp_path / "run")]) == 0
    shown = capsys.readouterr().out
    assert "NLTE minus LTE" in shown
    stars = read_table(tmp_path / "run.ecsv", "stars")
    assert list(zip(stars["star"], stars["treatment"], strict=True)) == [
        (star, name) for star in TRUTHS for name in ("lte", "nlte")
    ]
    table = read_table(tmp_path / "run_differences.ecsv", "differences")
    assert list(table["star"]) == list(TRUTHS)
    for row in table:
        lte, nlte = (
            stars[(stars["star"] == row["star"]) & (stars["treatment"] == name)][0] for name in ("lte", "nlte")
        )
        assert row["logg_difference"] == pytest.approx(nlte["logg"] - lte["logg"])
        # weaker Fe I lines at the same abundance ask for more iron, and with it for more gravity
        assert row["logg_difference"] > 0.1
        assert row["feh_difference"] > 0.05
        assert 0.0 < row["feh_difference_error"] < lte["feh_error_star"]
    assert cli.run([*command, "--json", "--quiet"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert len(found["stars"]) == 2 * len(TRUTHS)
    assert [row["star"] for row in found["differences"]] == list(TRUTHS)


def test_again_repeats_both(both, stars_file, tmp_path):
    grid = ["--grid", str(both.directory)]
    assert cli.run(["solve", str(stars_file), *grid, "--treatment", "both", "--output", str(tmp_path / "run")]) == 0
    assert cli.run(["again", str(tmp_path / "run.ecsv"), *grid, "--output", str(tmp_path / "second")]) == 0
    first, second = (read_table(tmp_path / f"{name}.ecsv", "stars") for name in ("run", "second"))
    assert len(second) == len(first) == 2 * len(TRUTHS)
    np.testing.assert_allclose(second["teff"], first["teff"])


def test_many_stars_in_both_treatments_go_through_the_journal(both, tmp_path, rng, capsys, monkeypatch):
    from specsolve.cli import bulk

    monkeypatch.setattr(bulk, "JOURNAL_FROM", 2)
    table = write_stars(tmp_path / "many.ecsv", both.lines, rng)
    command = [
        "solve",
        str(table),
        "--grid",
        str(both.directory),
        "--treatment",
        "both",
        "--output",
        str(tmp_path / "run"),
    ]
    assert cli.run(command) == 0
    stars = read_table(tmp_path / "run.ecsv", "stars")
    assert list(stars["treatment"]) == ["lte", "nlte"] * len(TRUTHS)
    assert len(read_table(tmp_path / "run_differences.ecsv", "differences")) == len(TRUTHS)
    assert not (tmp_path / "run.journal").exists()


def test_a_grid_without_the_treatment_says_so(made_up_grid, stars_file, capsys):
    assert made_up_grid.default_treatment == "lte"
    assert cli.run(["solve", str(stars_file), "--grid", str(made_up_grid.directory), "--treatment", "both"]) == 2
    assert "treatment 'nlte' is not in the grid; it has lte" in capsys.readouterr().err


def test_corrections_from_the_packaged_departures(tmp_path, capsys):
    path = tmp_path / "corrections.ecsv"
    command = ["correction", "5000:5500:250", "3.5", "-2", "1.5", "--output", str(path)]
    assert cli.run(command) == 0
    from astropy.table import Table

    table = Table.read(path)
    assert set(table["teff"]) == {5000.0, 5250.0, 5500.0}
    neutral = np.asarray(table["ion"]) == "Fe I"
    assert 0.03 < np.nanmean(np.asarray(table["correction"])[neutral]) < 0.25
    assert np.nanmax(np.abs(np.asarray(table["correction"])[~neutral])) < 0.02
    assert table.meta["departures"].startswith("store")
    assert cli.run(["correction", "5250", "3.5", "-2", "1.5", "--stored", "--no-range", "--json", "--quiet"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["schema"] == 1
    assert len(found["lines"]) == len(table) // 3
    assert found["lines"][0]["weak_collisions"] is None


def test_what_a_correction_refuses(tmp_path, capsys):
    assert cli.run(["correction", "5000:7000:250", "1:5:0.5", "-1", "1", "--range"]) == 2
    assert "at most" in capsys.readouterr().err
    assert cli.run(["correction", "9000", "4", "0", "1"]) == 3
    assert "outside the atmospheres" in capsys.readouterr().err


def test_departures_describe_themselves(capsys, tmp_path):
    assert cli.run(["departures", "info", "--json"]) == 0
    content = json.loads(capsys.readouterr().out)
    assert content["nodes"]["converged"] > 900
    assert content["recipe"]["hydrogen_factor"] == 1.0
    assert cli.run(["departures", "info"]) == 0
    assert "Barklem 2018" in capsys.readouterr().out
    assert cli.run(["departures", "info", str(tmp_path)]) == 3
    assert "no readable store of departures" in capsys.readouterr().err


def test_invented_lines_have_no_levels_of_their_own():
    from specsolve.nlte.line_levels import line_levels

    assert line_levels(synthetic_lines(5, 3)).approximate.any()
