"""``specsolve solve``, ``check`` and ``again`` on made-up stars whose truth is known."""

from __future__ import annotations

import io
import json
import resource
import subprocess
import sys

import numpy as np
import pytest
from astropy.table import Table

from specsolve.cli import main as cli
from specsolve.cli.settings import wants_colour
from specsolve.report.tables import read_table
from tests.cli.made_up_stars import TRUTHS
from tests.cli.test_main import listen_to_ctrl_c

# Two per cent noise on 40 to 60 lines: about 10 K, 0.02, 0.01, 0.08 (printed errors); the limits are four times that.
LIMITS = {"teff": 40.0, "logg": 0.08, "feh": 0.04, "vmic": 0.32}


def assert_true(row, name):
    for value, (parameter, limit) in zip(TRUTHS[name], LIMITS.items(), strict=True):
        assert abs(row[parameter] - value) < limit, (name, parameter, row[parameter])


def test_solve_finds_the_truth_and_writes_all_files(stars_file, grid_option, tmp_path, capsys):
    code = cli.run(["solve", str(stars_file), *grid_option, "--output", str(tmp_path / "run")])
    shown = capsys.readouterr()
    assert code == 0, shown.err
    assert "treatment lte | solar iron 7.46" in shown.out.splitlines()[0]
    assert "lines are in the grid" in shown.err
    stars = read_table(tmp_path / "run.ecsv", "stars")
    assert list(stars["star"]) == list(TRUTHS)
    for row in stars:
        assert_true(row, row["star"])
    lines = read_table(tmp_path / "run_lines.ecsv", "lines")
    assert set(lines["star"]) == set(TRUTHS)
    assert len(read_table(tmp_path / "run_candidates.ecsv", "candidates")) >= 3
    assert len(read_table(tmp_path / "run_decisions.ecsv", "decisions")) >= 3
    provenance = stars.meta["provenance"]
    assert provenance["inputs"].keys() == {"stars.ecsv"}
    assert provenance["grid"]["identity"] == stars["grid_identity"][0]


def test_json_holds_the_same_numbers(stars_file, grid_option, capsys):
    assert cli.run(["solve", str(stars_file), *grid_option, "--json", "--quiet"]) == 0
    shown = capsys.readouterr()
    assert shown.err == ""
    found = json.loads(shown.out)
    assert found["schema"] == 1
    for star in found["stars"]:
        assert_true(star, star["star"])
        assert star["status"] == "solved"


def test_again_repeats_the_analysis_from_its_output(stars_file, grid_option, tmp_path, capsys):
    first, second = tmp_path / "first", tmp_path / "second"
    extra = ["--fix", "logg=4.41", "--cut", "reduced_width=-5.9:-4.9", "--loss", "student", "--star", "dwarf"]
    assert cli.run(["solve", str(stars_file), *grid_option, "--output", str(first), *extra]) == 0
    assert cli.run(["again", f"{first}.ecsv", *grid_option, "--output", str(second)]) == 0
    one, two = read_table(f"{first}.ecsv", "stars"), read_table(f"{second}.ecsv", "stars")
    for name in ("teff", "logg", "feh", "vmic", "cov_star", "log_likelihood"):
        np.testing.assert_allclose(np.asarray(one[name]), np.asarray(two[name]), rtol=1e-9)
    assert one["fixed"][0] == two["fixed"][0] == "logg"


def test_again_repeats_differential_work(stars_file, grid_option, tmp_path, capsys):
    first, second = tmp_path / "first", tmp_path / "second"
    at = ["--reference", "dwarf", "--reference-parameters", "teff=5780,logg=4.41,feh=-0.07"]
    assert cli.run(["solve", str(stars_file), *grid_option, "--output", str(first), *at]) == 0
    assert cli.run(["again", str(first), *grid_option, "--output", str(second)]) == 0
    one, two = read_table(f"{first}.ecsv", "stars"), read_table(f"{second}.ecsv", "stars")
    assert "reference_star" in one["flags"][0]
    assert one["star"][0] == "dwarf"
    for row in one[1:]:
        assert_true(row, row["star"])
    np.testing.assert_allclose(np.asarray(one["teff"]), np.asarray(two["teff"]), rtol=1e-9)


def test_a_known_value_pulls_by_its_error(stars_file, grid_option, capsys):
    command = ["solve", str(stars_file), *grid_option, "--json", "--quiet", "--star", "giant"]
    cli.run(command)
    free = json.loads(capsys.readouterr().out)["stars"][0]
    cli.run([*command, "--known", "teff=4700:5"])
    pulled = json.loads(capsys.readouterr().out)["stars"][0]
    assert 4700 < pulled["teff"] < free["teff"]
    assert pulled["outside"][0]["name"] == "teff"


def test_check_says_what_would_happen_and_solves_nothing(stars_file, grid_option, capsys):
    assert cli.run(["check", str(stars_file), *grid_option]) == 0
    text = capsys.readouterr().out
    assert "3 stars" in text
    assert "usable 32 Fe I + 7 Fe II" in text or "usable" in text
    assert cli.run(["check", str(stars_file), *grid_option, "--json"]) == 0
    report = json.loads(capsys.readouterr().out)
    assert [star["star"] for star in report["tables"][0]["stars"]] == list(TRUTHS)


def test_lines_outside_the_grid_are_counted_with_the_command_that_adds_them(stars_file, grid_option, capsys):
    table = Table.read(stars_file)
    table["wavelength_air"][:4] += 1.5
    table.write(stars_file, format="ascii.ecsv", overwrite=True)
    assert cli.run(["check", str(stars_file), *grid_option]) == 0
    assert "adds the others if the table has excitation_potential and log_gf" in capsys.readouterr().out
    table["log_gf"] = -2.0
    table["log_gf"][4:] = np.nan
    table.write(stars_file, format="ascii.ecsv", overwrite=True)
    assert cli.run(["solve", str(stars_file), *grid_option]) == 0
    text = capsys.readouterr().err
    assert f"`specsolve grid build {stars_file} --output my_grid` adds 4 in about" in text
    assert " min" in text


def test_standard_input_and_output(stars_file, grid_option, monkeypatch, capsys):
    monkeypatch.setattr(sys, "stdin", io.StringIO(stars_file.read_text()))
    assert cli.run(["solve", "-", *grid_option, "--output", "-", "--quiet"]) == 0
    shown = capsys.readouterr().out
    assert shown.startswith("# %ECSV")
    assert len(Table.read(shown.splitlines(), format="ascii.ecsv")) == 3


def test_two_workers_give_the_same_numbers(stars_file, grid_option, capsys):
    found = []
    for workers in ("1", "2"):
        assert cli.run(["solve", str(stars_file), *grid_option, "--json", "--quiet", "--workers", workers]) == 0
        found.append(json.loads(capsys.readouterr().out)["stars"])
    for one, two in zip(*found, strict=True):
        assert one["star"] == two["star"]
        assert one["teff"] == pytest.approx(two["teff"], rel=1e-9)


def test_plots_are_drawn(stars_file, grid_option, tmp_path, capsys):
    folder = tmp_path / "figures"
    command = [
        "solve",
        str(stars_file),
        *grid_option,
        "--star",
        "giant",
        "--plots",
        str(folder),
        "--plot-format",
        "png",
    ]
    assert cli.run(command) == 0
    assert sorted(path.name for path in folder.iterdir()) == ["giant_lte.png", "giant_lte_map.png"]


def test_no_colour_unless_a_terminal_wants_it(stars_file, grid_option, capsys):
    assert cli.run(["solve", str(stars_file), *grid_option, "--star", "dwarf"]) == 0
    assert "\x1b[" not in capsys.readouterr().out


@pytest.mark.parametrize(
    ("environment", "terminal", "wanted"),
    [({}, True, True), ({"NO_COLOR": "1"}, True, False), ({"TERM": "dumb"}, True, False), ({}, False, False)],
)
def test_colour_is_for_terminals_and_obeys_no_color(monkeypatch, environment, terminal, wanted):
    monkeypatch.delenv("NO_COLOR", raising=False)
    monkeypatch.setenv("TERM", "xterm")
    for name, value in environment.items():
        monkeypatch.setenv(name, value)
    stream = io.StringIO()
    stream.isatty = lambda: terminal
    assert wants_colour(stream) is wanted


def test_verbose_says_grid_and_stars_and_shows_sheets(stars_file, grid_option, capsys):
    assert cli.run(["solve", str(stars_file), *grid_option, "--verbose", "--star", "dwarf"]) == 0
    shown = capsys.readouterr()
    assert "identity" in shown.err
    assert "dwarf: solved, 1 minima" in shown.err
    assert "excitation slope" in shown.out


def test_one_star_from_a_cold_shell(stars_file, grid_option, figure):
    script = (
        "import sys; from specsolve.cli.main import run; code = run(sys.argv[1:]);"
        "status = open('/proc/self/status').read().split('VmHWM:')[1].split()[0]; print(status, file=sys.stderr);"
        "print(sorted({'numba', 'matplotlib', 'specutils', 'scipy.optimize'} & set(sys.modules)), file=sys.stderr);"
        "sys.exit(code)"
    )
    times = []
    for _ in range(2):
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        done = subprocess.run(
            [sys.executable, "-c", script, "solve", str(stars_file), *grid_option, "--star", "dwarf"],
            capture_output=True,
            text=True,
            timeout=120,
        )
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        times.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
    assert done.returncode == 0, done.stderr
    assert done.stderr.splitlines()[-1] == "[]"
    # Time of the processor, which is that of the clock on an idle core.
    figure("solve of one star from a cold shell, made-up grid", min(times), "s", limit="2.5")
    memory = int(done.stderr.splitlines()[-2]) / 1024
    figure("its memory", memory, "MB", limit="400")
    assert min(times) < 2.5
    assert memory < 400


def test_ctrl_c_keeps_the_finished_stars(stars_file, grid_option, tmp_path):
    script = (
        "import os, signal, sys\n"
        "from specsolve.balance import batch\n"
        "original = batch.solve_star\n"
        "count = 0\n"
        "def slow(star, *arguments, **keywords):\n"
        "    global count\n"
        "    count += 1\n"
        "    if count == 3:\n"
        "        os.kill(os.getpid(), signal.SIGINT)\n"
        "        signal.pause()\n"
        "    return original(star, *arguments, **keywords)\n"
        "batch.solve_star = slow\n"
        "from specsolve.cli.main import main\n"
        "main()\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, "solve", str(stars_file), *grid_option, "--output", str(tmp_path / "kept")],
        capture_output=True,
        text=True,
        timeout=120,
        preexec_fn=listen_to_ctrl_c,
    )
    assert done.returncode == 130, done.stderr
    assert "interrupted; 2 stars are finished and kept, 1 are not" in done.stderr
    assert "Traceback" not in done.stderr
    assert list(read_table(tmp_path / "kept.ecsv", "stars")["star"]) == list(TRUTHS)[:2]
