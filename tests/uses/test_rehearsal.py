"""Rehearsals on the invented grid: errors that hold, shifts of another line formation, points that cannot be done."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from astropy.table import Table

from specsolve.cli.main import run
from specsolve.errors import EXIT_NO_INPUT, EXIT_SOLVED, EXIT_UNSOLVED, EXIT_USAGE, InputError, UsageError
from specsolve.report.shift_map import sequence_before_and_after, shift_map
from specsolve.report.tables import read_table
from specsolve.uses.noise import Noise
from specsolve.uses.rehearsal import rehearse
from specsolve.uses.shift_fit import fit_shift

NOISE = Noise(floor_ma=0.6, fraction=0.01)


def points(rows) -> Table:
    return Table(rows=rows, names=("teff", "logg", "feh", "vmic"))


TWO = points([(5710.0, 4.38, -0.14, 1.07), (4910.0, 2.71, -0.43, 1.43)])


@pytest.fixture(scope="module")
def same(grid):
    return rehearse(TWO, grid, noise=NOISE, trials=8, seed=4, full_search=False)


def test_no_bias_without_a_cause(same):
    for name in ("teff", "logg", "feh", "vmic"):
        pulls = same.table[f"bias_{name}"] / same.table[f"error_{name}"]
        assert np.abs(pulls).max() < 1.5  # median of eight: an error is 0.44
    assert (same.table["n_good"] == 8).all()
    assert (same.table["status"] == "rehearsed").all()


def test_the_seed_alone_decides(same, grid):
    with ThreadPoolExecutor(2) as executor:
        again = rehearse(TWO, grid, noise=NOISE, trials=8, seed=4, full_search=False, executor=executor)
    for name in ("bias_teff", "scatter_logg", "coverage_feh"):
        np.testing.assert_array_equal(again.table[name], same.table[name])


def test_lte_analysis_of_nlte_truth_is_shifted_as_one_solve_says(grid):
    """Without noise of its own the shift of a rehearsal is that of a single noise-free star."""
    quiet = Noise(floor_ma=0.05, fraction=0.0)
    made = rehearse(TWO, grid, noise=quiet, truth="nlte", trials=2, gf_errors="none", full_search=False)
    assert made.table["bias_logg"][1] < -0.05  # Fe I weaker than in LTE: the gravity comes out low
    back = rehearse(
        TWO, grid, noise=quiet, truth="nlte", analysis="nlte", trials=2, gf_errors="none", full_search=False
    )
    assert np.abs(back.table["bias_logg"]).max() < 0.02
    assert np.abs(back.table["bias_teff"]).max() < 8.0


def test_points_outside_and_beside_missing_nodes_are_reported(grid):
    rows = [(6400.0, 2.2, 0.3, 1.5), (8200.0, 4.0, 0.0, 1.5), (5710.0, 4.38, -0.14, 1.07)]
    made = rehearse(points(rows), grid, noise=NOISE, trials=2, full_search=False)
    assert made.table["status"].tolist() == ["missing_node", "outside_grid", "rehearsed"]
    assert "not bridged" in made.table["reason"][0]
    assert np.isnan(made.table["bias_teff"][:2]).all()
    assert made.table["n_good"].tolist() == [0, 0, 2]


def test_signal_to_noise_for_a_wanted_error(grid):
    noise = Noise(signal_to_noise=60.0, resolving_power=30000.0)
    wanted = {"teff": 60.0, "logg": 1e-4}
    made = rehearse(TWO[:1], grid, noise=noise, trials=2, wanted=wanted, gf_errors="none", full_search=False)
    row = made.table[0]
    assert np.isnan(row["needed_logg"])  # the list alone is worse
    assert np.isfinite(row["needed_teff"])
    there = Noise(signal_to_noise=float(row["needed_teff"]), resolving_power=30000.0)
    again = rehearse(TWO[:1], grid, noise=there, trials=2, gf_errors="none", full_search=False)
    # Lines appear and weights change with S/N: the forecast is first order.
    assert again.table["error_teff"][0] == pytest.approx(60.0, rel=0.25)


def test_the_full_search_counts_what_ends_badly(grid):
    made = rehearse(TWO[:1], grid, noise=Noise(floor_ma=0.6, fraction=0.01, bad_lines=0.1), trials=2)
    row = made.table[0]
    assert row["n_good"] / 2 + row["fraction_tied"] + row["fraction_outside"] + row["fraction_failed"] == pytest.approx(
        1.0
    )


def test_linear_fits_find_what_is_linear_and_where_it_fails(rng):
    theta = np.column_stack(
        [rng.uniform(4800, 6200, 30), rng.uniform(2.5, 4.5, 30), rng.uniform(-2, 0, 30), np.ones(30)]
    )
    error = np.full(30, 4.0)
    shift = 20.0 - 30.0 * (theta[:, 0] - 5500.0) / 1000.0 + 8.0 * theta[:, 2] + rng.normal(0.0, 4.0, 30)
    shift[7] += 90.0
    fit = fit_shift("teff", theta, shift, error)
    assert fit.terms == ("constant", "teff", "logg", "feh")
    np.testing.assert_allclose(fit.coefficients[1:], [-30.0, 0.0, 8.0], atol=10.0)
    assert np.flatnonzero(fit.fails).tolist().count(7) == 1
    assert fit.fails.sum() <= 2
    assert fit_shift("teff", theta[:5], shift[:5], error[:5]) is None


def test_noise_on_paper():
    noise = Noise(signal_to_noise=100.0, resolving_power=40000.0, pixels_per_fwhm=3.0)
    # 1.5 sqrt(FWHM pixel) / (S/N): FWHM 0.15, pixel 0.05 Angstrom.
    assert noise.width_error(np.array([6000.0]), np.array([30.0]))[0] == pytest.approx(
        1e3 * 1.5 * np.sqrt(0.15 * 0.05) / 100
    )
    for wrong in (
        {},
        {"floor_ma": -1.0, "fraction": 0.1},
        {"resolving_power": -1.0},
        {"resolving_power": 1e4, "bad_lines": 0.7},
    ):
        with pytest.raises(UsageError):
            Noise(**wrong)


def test_figures(same):
    pytest.importorskip("matplotlib")
    assert len(shift_map(same.table).axes) == 6
    assert len(sequence_before_and_after(same.table).axes) == 1


def test_the_command(grid, tmp_path, capsys):
    TWO.write(tmp_path / "points.ecsv", format="ascii.ecsv")
    arguments = ["rehearse", str(tmp_path / "points.ecsv"), "--grid", str(grid.directory), "--trials", "2", "--near"]
    good = [*arguments, "--width-errors", "0.6+0.01", "--output", str(tmp_path / "out"), "--plots", str(tmp_path)]
    assert run(good) == EXIT_SOLVED
    assert "bias" in capsys.readouterr().out
    table = read_table(tmp_path / "out.ecsv", "rehearsal")
    assert table.meta["provenance"]["seed"] == 0
    assert (tmp_path / "shift_map.pdf").exists()


def test_bad_input(grid, tmp_path, capsys):
    path = tmp_path / "points.ecsv"
    TWO.write(path, format="ascii.ecsv")

    def fails(code: int, words: str, *more: str) -> None:
        assert (
            run(["rehearse", str(path), "--grid", str(grid.directory), "--output", str(tmp_path / "out"), *more])
            == code
        )
        error = capsys.readouterr().err
        assert words in error
        assert not list(tmp_path.glob("out*"))

    law = ("--width-errors", "0.6+0.01")
    fails(EXIT_USAGE, "how well widths are measured")
    fails(EXIT_USAGE, "write it as", "--width-errors", "small")
    fails(EXIT_USAGE, "treatment '3d'", *law, "--truth", "3d")
    fails(EXIT_USAGE, "--want mass=1", *law, "--want", "mass=1")
    fails(EXIT_USAGE, "no positive signal to noise", "--resolving-power", "30000")
    points([(5700.0, 4.4, 0.0, 900.0)]).write(path, format="ascii.ecsv", overwrite=True)
    fails(EXIT_NO_INPUT, "wrong unit or column", *law)
    Table({"teff": [5700.0]}).write(path, format="ascii.ecsv", overwrite=True)
    fails(EXIT_NO_INPUT, "no column 'logg'", *law)
    with pytest.raises(InputError, match="no rows"):
        rehearse(TWO[:0], grid, noise=NOISE)
    points([(8200.0, 4.4, 0.0, 1.0)]).write(path, format="ascii.ecsv", overwrite=True)
    assert run(["rehearse", str(path), "--grid", str(grid.directory), *law]) == EXIT_NO_INPUT
    points([(8200.0, 4.4, 0.0, 1.0), (5710.0, 4.38, -0.14, 1.07)]).write(path, format="ascii.ecsv", overwrite=True)
    code = run(["rehearse", str(path), "--grid", str(grid.directory), *law, "--near", "--trials", "2"])
    assert code == EXIT_UNSOLVED
