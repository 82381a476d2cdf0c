"""``specsolve grid build | info | check`` with the fast engine double, and once with everything real."""

from __future__ import annotations

import json

import numpy as np
import pytest

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.cli.grid import parameter_errors, parameter_summary, parameter_words
from specsolve.cli.main import run
from specsolve.errors import EXIT_INTERRUPTED, EXIT_NO_INPUT, EXIT_UNEXPECTED, EXIT_USAGE
from specsolve.grid import ResponseGrid, engine
from specsolve.grid import check as check_module
from specsolve.lines import default_line_list
from tests.grid.double import ENGINE, Atmospheres, Model
from tests.grid.killing import content
from tests.grid.synthetic import synthetic_grid, synthetic_lines


@pytest.fixture
def doubles(monkeypatch):
    """The commands see the doubles instead of packaged atmospheres and line formation, and no packaged grid."""
    monkeypatch.setitem(engine.ENGINES, "lte", lambda: ENGINE)
    monkeypatch.setattr(AtmosphereStore, "packaged", classmethod(lambda cls: Atmospheres()))
    monkeypatch.setattr("specsolve.cli.grid.other_grids", lambda paths: [ResponseGrid.open(path) for path in paths])


@pytest.fixture
def line_file(tmp_path):
    lines = default_line_list().select(slice(0, 12))
    lines.to_table().write(tmp_path / "lines.ecsv", format="ascii.ecsv")
    return tmp_path / "lines.ecsv"


def test_build_and_info(doubles, line_file, tmp_path, capsys):
    target = tmp_path / "grid"
    assert run(["grid", "build", str(line_file), "--output", str(target)]) == 0
    said = capsys.readouterr()
    assert "12 lines to compute at 29 nodes (1 have no atmosphere)" in said.err
    assert "12 lines" in said.out
    assert len(ResponseGrid.open(target).lines) == 12
    assert run(["grid", "info", str(target), "--lines"]) == 0
    words = capsys.readouterr().out
    assert "teff  [K] 5000 5250 5500 5750 6000" in words
    assert "1 missing: failed (not converged after 120 iterations)" in words
    assert default_line_list().key[0] in words


def test_json_is_json_with_a_schema(doubles, line_file, tmp_path, capsys):
    target = str(tmp_path / "grid")
    assert run(["grid", "build", str(line_file), "--output", target, "--dry-run", "--json"]) == 0
    plan = json.loads(capsys.readouterr().out)
    assert (plan["schema"], plan["computed"], plan["nodes"], plan["missing_nodes"]) == (1, 12, 29, 1)
    assert not (tmp_path / "grid").exists()
    assert run(["grid", "build", str(line_file), "--output", target, "--json", "--quiet"]) == 0
    built = json.loads(capsys.readouterr().out)
    assert run(["grid", "info", target, "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == built
    assert built["n_lines"] == 12


def test_axis_subsets_reach_the_grid(doubles, line_file, tmp_path):
    arguments = ["--teff", "5250:5750:250", "--logg", "4,4.5", "--mh", "-0.5:0:0.5", "--vmic", "0.5:2:0.5"]
    assert run(["grid", "build", str(line_file), "--output", str(tmp_path / "grid"), *arguments]) == 0
    axes = ResponseGrid.open(tmp_path / "grid").axes
    assert axes["teff"].tolist() == [5250.0, 5500.0, 5750.0]
    assert axes["logg"].tolist() == [4.0, 4.5]
    assert axes["mh"].tolist() == [-0.5, 0.0]
    assert axes["vmic"].tolist() == [0.5, 1.0, 1.5, 2.0]


def test_lines_of_a_named_grid_are_taken_over(doubles, line_file, tmp_path, capsys):
    first, second = str(tmp_path / "first"), tmp_path / "second"
    assert run(["grid", "build", str(line_file), "--output", first, "--quiet"]) == 0
    assert run(["grid", "build", str(line_file), "--output", str(second), "--reuse", first]) == 0
    assert "12 are taken over, 0 lines to compute" in capsys.readouterr().err
    arrays = [{k: v for k, v in content(tmp_path / name).items() if k.endswith(".npy")} for name in ("first", "second")]
    assert arrays[0] == arrays[1]


def test_a_star_table_is_a_line_list_too(doubles, tmp_path, capsys):
    """Lines measured in two stars are merged; other headings and spellings by the options of solve."""
    lines = default_line_list().select(slice(0, 3))
    rows = ["star,line,species,excitation_potential,log_gf,equivalent_width"]
    for star in ("A", "B"):
        rows += [f"{star},{w},iron1,{e},{g},50" for _, w, e, g in lines.rows()]
    (tmp_path / "stars.csv").write_text("\n".join(rows) + "\n")
    options = ["--column", "wavelength_air=line", "--column", "ion=species", "--ion", "iron1=Fe I"]
    units = ["--unit", "wavelength_air=Angstrom", "--unit", "excitation_potential=eV"]
    target = str(tmp_path / "grid")
    assert run(["grid", "build", str(tmp_path / "stars.csv"), "--output", target, *options]) == EXIT_NO_INPUT
    assert "has no unit" in capsys.readouterr().err
    assert run(["grid", "build", str(tmp_path / "stars.csv"), "--output", target, *options, *units]) == 0
    assert len(ResponseGrid.open(target).lines) == 3


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (["--teff", "5000:6000"], EXIT_USAGE, "is not an axis subset"),
        (["--teff", "4800"], EXIT_NO_INPUT, "no atmospheres at"),
        (["--treatment", "best"], EXIT_USAGE, "is not one of"),
        (["--departures", "nowhere"], EXIT_USAGE, "--departures is for"),
        (["--workers", "0"], EXIT_USAGE, "--workers"),
        (["--reuse", "nowhere"], EXIT_NO_INPUT, "holds no finished grid"),
    ],
)
def test_what_makes_no_sense_is_one_line_and_an_exit_code(doubles, line_file, tmp_path, capsys, arguments, code, words):
    assert run(["grid", "build", str(line_file), "--output", str(tmp_path / "grid"), *arguments]) == code
    lines = capsys.readouterr().err.strip().splitlines()
    assert words in lines[-1]
    assert not any("Traceback" in line for line in lines)


def test_an_output_that_cannot_be_written(doubles, line_file, capsys):
    assert run(["grid", "build", str(line_file), "--output", "/proc/nobody/grid"]) == EXIT_UNEXPECTED
    assert "cannot write /proc/nobody/grid" in capsys.readouterr().err


def test_ctrl_c_ends_with_130_and_the_build_goes_on(doubles, line_file, tmp_path, monkeypatch, capsys):
    monkeypatch.setattr("specsolve.grid.plan.LINES_PER_PART", 12)
    computed = []

    def interrupting(*arguments):
        computed.append(1)
        if len(computed) > 4:
            raise KeyboardInterrupt
        return real(*arguments)

    real = engine.codes_of_nodes
    target = tmp_path / "grid"
    with monkeypatch.context() as patch:
        patch.setattr("specsolve.grid.build.codes_of_nodes", interrupting)
        assert run(["grid", "build", str(line_file), "--output", str(target)]) == EXIT_INTERRUPTED
    assert len(list(target.glob("parts-*/*.npy"))) == 4
    assert run(["grid", "build", str(line_file), "--output", str(target)]) == 0


def test_check_reports_errors_of_abundances(doubles, line_file, tmp_path, monkeypatch, capsys):
    monkeypatch.setattr(check_module, "converged_atmosphere", lambda store, *node: Model(*node))
    target = str(tmp_path / "grid")
    assert run(["grid", "build", str(line_file), "--output", target]) == 0
    capsys.readouterr()
    arguments = ["grid", "check", target, "--points", "8", "--no-parameters"]
    assert run([*arguments, "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert sum(row["points"] for row in found["abundance_error"].values()) == 8
    assert run(arguments) == 0
    assert "at grid edge" in capsys.readouterr().out


def test_check_refuses_other_atmospheres(doubles, line_file, tmp_path, monkeypatch, capsys):
    target = str(tmp_path / "grid")
    assert run(["grid", "build", str(line_file), "--output", target]) == 0
    monkeypatch.setattr(AtmosphereStore, "packaged", classmethod(lambda cls: Atmospheres("b" * 64)))
    assert run(["grid", "check", target]) == EXIT_NO_INPUT
    assert "other atmospheres" in capsys.readouterr().err


def test_check_solves_points_as_stars(tmp_path):
    grid = synthetic_grid(tmp_path, synthetic_lines(60, 12))
    points = np.array([[4894.0, 3.71, -1.32, 0.77], [5285.0, 3.79, -0.43, 0.36], [6900.0, 1.1, -2.9, 0.4]])
    errors = parameter_errors(grid, check_module.check_points(grid, points, Model, ENGINE), "lte")
    # budget of interpolation alone; the last point has no line that could be measured
    assert np.all(np.abs(errors[:2]) < (5.0, 0.02, 0.01, 0.04))
    assert np.isnan(errors[2]).all()
    summary = parameter_summary(errors)
    assert (summary["points"], summary["solved"]) == (3, 2)
    assert "2 of 3 points" in parameter_words(summary)


@pytest.mark.slow
def test_everything_real_on_a_few_nodes(tmp_path, capsys):
    """Atmospheres, line formation and grid without doubles; off the nodes the grid agrees with the full engine."""
    atmospheres, target = str(tmp_path / "atmospheres"), str(tmp_path / "grid")
    nodes = ["--teff", "5500:6000:250", "--logg", "4:5:0.5", "--mh", "0"]
    assert run(["atmosphere", "build", "--output", atmospheres, *nodes, "--quiet"]) == 0
    lines = default_line_list().select(np.arange(0, 210, 7))
    lines.to_table().write(tmp_path / "lines.ecsv", format="ascii.ecsv")
    build = ["grid", "build", str(tmp_path / "lines.ecsv"), "--output", target, "--atmospheres", atmospheres]
    assert run([*build, "--from-scratch"]) == 0
    capsys.readouterr()
    check = ["grid", "check", target, "--atmospheres", atmospheres, "--points", "4", "--metallicities", "0"]
    assert run([*check, "--no-parameters", "--json"]) == 0
    edge = json.loads(capsys.readouterr().out)["abundance_error"]["at_grid_edge"]
    assert edge["points"] == 4
    assert edge["percentile_99"] < 0.01
    assert edge["median"] < 0.002
