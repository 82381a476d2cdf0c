"""Every kind of bad input: one clear line, the exit code of the design, and the other stars kept."""

from __future__ import annotations

import errno
import os
import shutil

import numpy as np
import pytest
from astropy.table import vstack

from specsolve.cli import main as cli
from specsolve.lines import air_to_vacuum
from specsolve.report.tables import read_table
from tests.cli.made_up_stars import TRUTHS, star_table


@pytest.fixture
def dwarf(made_up_grid, rng):
    return star_table(made_up_grid.lines, "dwarf", TRUTHS["dwarf"], rng)


@pytest.fixture
def giant(made_up_grid, rng):
    return star_table(made_up_grid.lines, "giant", TRUTHS["giant"], rng)


# Astropy warns when it WRITES Angstrom into a VOTable; the tables under test are read.
pytestmark = pytest.mark.filterwarnings("ignore:The unit 'Angstrom' has been deprecated in the VOUnit standard")
FORMATS = {".ecsv": "ascii.ecsv", ".csv": "ascii.csv", ".fits": "fits", ".vot": "votable"}


@pytest.fixture
def run(tmp_path, grid_option, capsys):
    """Write a table, solve it, return (exit code, stdout, lines of stderr)."""

    def go(table, *options, name="bad.ecsv", command="solve"):
        path = tmp_path / name
        if isinstance(table, bytes):
            path.write_bytes(table)
        elif table is not None:
            table.write(path, format=FORMATS[path.suffix], overwrite=True)
        code = cli.run([command, str(path), *grid_option, "--quiet", *options])
        shown = capsys.readouterr()
        assert "Traceback" not in shown.err
        return code, shown.out, shown.err.strip().splitlines()

    return go


def one_line(result, code, *words):
    found, out, err = result
    assert found == code, err
    assert len(err) == 1, err
    for word in words:
        assert word in err[0], err[0]
    assert out == ""


# Columns and units


def test_missing_column(run, dwarf):
    dwarf.remove_column("equivalent_width")
    one_line(run(dwarf), 3, "no column 'equivalent_width'", "the table has star, wavelength_air", "--column")


def test_wrong_column_named_by_the_user(run, dwarf):
    one_line(run(dwarf, "--column", "equivalent_width=EW"), 3, "no column 'EW' for equivalent_width")


def test_other_headings_and_spellings_work_when_named(run, dwarf):
    dwarf.rename_column("equivalent_width", "EW")
    dwarf["ion"] = ["neutral" if ion == "Fe I" else "ionized" for ion in dwarf["ion"]]
    options = ["--column", "equivalent_width=EW", "--ion", "neutral=Fe I", "--ion", "ionized=Fe II"]
    code, out, _ = run(dwarf, *options)
    assert code == 0
    assert "dwarf: solved" in out


def test_unknown_spelling_of_the_ions(run, dwarf):
    dwarf["ion"] = ["iron" for _ in dwarf["ion"]]
    one_line(run(dwarf), 3, "no line is 'Fe I' or 'Fe II'", "'iron'", "--ion")


def test_missing_unit_is_a_question(run, dwarf):
    dwarf["equivalent_width"].unit = None
    one_line(run(dwarf), 3, "which unit has column 'equivalent_width'?", "--unit equivalent_width=mAngstrom")


def test_a_csv_needs_its_units_and_then_works(run, dwarf):
    code, _, err = run(dwarf, name="plain.csv")
    assert code == 3
    assert "which unit" in err[0]
    units = ["wavelength_air=Angstrom", "equivalent_width=mAngstrom", "equivalent_width_error=mAngstrom"]
    options = [part for unit in (*units, "excitation_potential=eV") for part in ("--unit", unit)]
    code, out, _ = run(dwarf, *options, name="plain.csv")
    assert code == 0
    assert "dwarf: solved" in out


@pytest.mark.parametrize("name", ["table.fits", "table.vot"])
def test_fits_and_votable_work(run, dwarf, name):
    code, out, _ = run(dwarf, name=name)
    assert code == 0
    assert "dwarf: solved" in out


def test_a_unit_of_another_kind(run, dwarf):
    dwarf["equivalent_width"].unit = "s"
    one_line(run(dwarf), 3, "is in 's', which cannot be turned into mAngstrom")


def test_a_unit_that_contradicts_the_table(run, dwarf):
    one_line(run(dwarf, "--unit", "equivalent_width=Angstrom"), 3, "is in mAngstrom, but --unit says Angstrom")


def test_widths_in_nanometre_are_converted(run, dwarf):
    dwarf["equivalent_width"] = dwarf["equivalent_width"].quantity.to("pm")
    dwarf["wavelength_air"] = dwarf["wavelength_air"].quantity.to("nm")
    code, out, _ = run(dwarf)
    assert code == 0
    assert "dwarf: solved" in out


def test_widths_given_in_angstrom_but_called_milliangstrom(run, dwarf):
    dwarf["equivalent_width"] = np.asarray(dwarf["equivalent_width"]) / 1000
    dwarf["equivalent_width"].unit = "mAngstrom"
    dwarf.remove_column("equivalent_width_error")
    one_line(run(dwarf), 3, "probably Angstrom, not mA")


def test_text_where_numbers_belong(run, dwarf):
    dwarf["equivalent_width"] = ["strong" for _ in range(len(dwarf))]
    dwarf["equivalent_width"].unit = "mAngstrom"
    one_line(run(dwarf), 3, "holds text where numbers belong")


def test_use_column_that_is_neither_true_nor_false(run, dwarf):
    dwarf["use"] = ["perhaps" for _ in range(len(dwarf))]
    one_line(run(dwarf), 3, "use = 'perhaps' is neither true nor false")


# Values


@pytest.mark.parametrize(
    ("value", "reason"), [(np.nan, "bad_width"), (-12.0, "bad_width"), (0.0, "bad_width"), (5e3, "huge_width")]
)
def test_single_impossible_widths_are_left_out_and_listed(run, dwarf, tmp_path, value, reason):
    dwarf["equivalent_width"][3] = value
    code, _, err = run(dwarf, "--output", str(tmp_path / "out"))
    assert code == 0, err
    lines = read_table(tmp_path / "out_lines.ecsv", "lines")
    gone = lines[~np.asarray(lines["used"], bool)]
    assert reason in list(gone["reason"])
    assert abs(read_table(tmp_path / "out.ecsv", "stars")["teff"][0] - TRUTHS["dwarf"][0]) < 60


def test_all_widths_impossible(run, dwarf):
    dwarf["equivalent_width"][:] = np.nan
    one_line(run(dwarf), 3, "no usable equivalent width")


def test_wavelengths_in_the_wrong_unit(run, dwarf):
    dwarf["wavelength_air"] = np.asarray(dwarf["wavelength_air"]) / 10
    dwarf["wavelength_air"].unit = "Angstrom"
    one_line(run(dwarf), 3, "is outside 2000 to 25000", "wrong unit or column?")


def test_vacuum_wavelengths_are_noticed(run, dwarf, tmp_path):
    dwarf["wavelength_air"] = air_to_vacuum(np.asarray(dwarf["wavelength_air"]))
    dwarf["wavelength_air"].unit = "Angstrom"
    code, _out, err = run(dwarf)
    assert code == 4
    assert "look like vacuum wavelengths: convert them to air" in err[0]
    assert run(dwarf, command="check")[0] == 4


def test_duplicated_lines_are_used_once(run, dwarf, tmp_path):
    twice = vstack([dwarf, dwarf[:10]])
    code, _, err = run(twice, "--output", str(tmp_path / "out"))
    assert code == 0, err
    lines = read_table(tmp_path / "out_lines.ecsv", "lines")
    assert list(lines["reason"]).count("repeated") == 10
    assert sum(np.asarray(lines["used"], bool)) <= len(dwarf)


def test_lines_marked_unused_stay_out(run, dwarf, tmp_path):
    dwarf["use"] = np.arange(len(dwarf)) % 5 > 0
    assert run(dwarf, "--output", str(tmp_path / "out"))[0] == 0
    lines = read_table(tmp_path / "out_lines.ecsv", "lines")
    assert list(lines["reason"]).count("marked_unused") == int((~dwarf["use"]).sum())


def test_assumed_errors_are_said(run, dwarf, tmp_path, grid_option, capsys):
    dwarf.remove_column("equivalent_width_error")
    code, out, _ = run(dwarf)
    assert code == 0
    assert "width errors assumed" in out
    assert "mA and" in run(dwarf, command="check")[1]


# Too little to go on


def test_no_fe2_says_fix_logg_and_works_then(run, dwarf):
    only = dwarf[dwarf["ion"] == "Fe I"]
    code, _, err = run(only)
    assert code == 4
    assert "no usable Fe II line" in err[0]
    assert "fix logg" in err[0]
    code, out, _ = run(only, "--fix", "logg=4.41")
    assert code == 0
    assert "dwarf: solved" in out


def test_too_few_lines(run, dwarf):
    code, _, err = run(dwarf[:3])
    assert code == 4
    assert "too few usable lines" in err[0] or "no usable Fe II line" in err[0]


def test_no_line_in_the_grid(run, dwarf):
    dwarf["wavelength_air"] += 0.7
    code, _, err = run(dwarf)
    assert code == 4
    assert "lines" in err[0]


def test_a_star_outside_the_grid(run, dwarf):
    code, _, err = run(dwarf, "--fix", "teff=7900")
    assert code == 4
    assert "fixed teff = 7900 lies outside the grid (4000 to 7000)" in err[0]


def test_a_star_whose_lines_want_to_leave_the_grid(run, made_up_grid, rng, tmp_path):
    far = star_table(made_up_grid.lines, "far", (7600.0, 4.3, 0.0, 1.4), rng)
    code, _, err = run(far, "--output", str(tmp_path / "far"))
    assert code == 4, err
    assert read_table(tmp_path / "far.ecsv", "stars")["status"][0] in ("outside_grid", "unsolved")


def test_a_bad_star_leaves_the_good_one_its_result(run, dwarf, giant, tmp_path):
    code, _out, err = run(vstack([dwarf[:3], giant]), "--output", str(tmp_path / "both"))
    assert code == 4
    assert len(err) == 1
    assert err[0].startswith("specsolve: dwarf: unsolved")
    table = read_table(tmp_path / "both.ecsv", "stars")
    assert list(table["status"]) == ["unsolved", "solved"]
    assert abs(table["teff"][1] - TRUTHS["giant"][0]) < 60
    assert np.isnan(table["teff"][0])


def test_a_bad_file_leaves_the_good_one_its_result(dwarf, tmp_path, grid_option, capsys):
    dwarf.write(tmp_path / "good.ecsv")
    command = ["solve", str(tmp_path / "absent.ecsv"), str(tmp_path / "good.ecsv"), *grid_option, "--quiet"]
    assert cli.run(command) == 4
    shown = capsys.readouterr()
    assert "absent.ecsv: no such file" in shown.err
    assert "dwarf: solved" in shown.out


def test_one_star_name_in_two_files_is_kept_apart(dwarf, giant, tmp_path, grid_option, capsys):
    giant["star"] = "dwarf"
    dwarf.write(tmp_path / "a.ecsv")
    giant.write(tmp_path / "b.ecsv")
    assert cli.run(["solve", str(tmp_path / "a.ecsv"), str(tmp_path / "b.ecsv"), *grid_option]) == 0
    shown = capsys.readouterr()
    assert "dwarf (b.ecsv): solved" in shown.out
    assert "another table has a star dwarf" in shown.err


# Files


@pytest.mark.parametrize("name", ["bad.ecsv", "bad.csv", "bad.fits", "bad.vot"])
@pytest.mark.parametrize("content", [b"", bytes(range(256)) * 40], ids=["empty", "binary"])
def test_empty_and_binary_files(run, name, content):
    code, out, err = run(content, name=name)
    assert code == 3
    assert out == ""
    assert len(err) == 1
    assert name in err[0]


@pytest.mark.parametrize("name", ["bad.ecsv", "bad.fits", "bad.vot"])
def test_truncated_files(run, dwarf, name, tmp_path):
    whole = tmp_path / f"whole_{name}"
    dwarf.write(whole, format=FORMATS[whole.suffix])
    data = whole.read_bytes()
    code, _out, err = run(data[: int(0.4 * len(data))], name=name)
    assert code == 3, err
    assert len(err) == 1
    assert name in err[0]


def test_a_table_without_rows(run, dwarf):
    one_line(run(dwarf[:0]), 3, "no rows")


def test_unknown_suffix_absent_file_and_folder(run, dwarf, tmp_path, grid_option, capsys):
    one_line(run(b"1 2 3", name="table.txt"), 3, "unknown suffix '.txt'")
    one_line(run(None, name="absent.ecsv"), 3, "no such file")
    (tmp_path / "folder.ecsv").mkdir()
    assert cli.run(["solve", str(tmp_path / "folder.ecsv"), *grid_option, "--quiet"]) == 3
    assert capsys.readouterr().err.count("\n") == 1


def test_unknown_star(run, dwarf):
    one_line(run(dwarf, "--star", "nobody"), 3, "no star 'nobody' in the tables; they have dwarf")


def test_unknown_reference_star_or_one_without_parameters(run, dwarf):
    one_line(run(dwarf, "--reference", "nobody"), 3, "'nobody' is neither in the tables nor a file")
    one_line(run(dwarf, "--reference", "dwarf"), 3, "give its teff, logg and feh")


# Stores


def test_no_grid_another_treatment_other_schema_or_checksum(dwarf, made_up_grid, tmp_path, capsys):
    table = tmp_path / "good.ecsv"
    dwarf.write(table)

    def go(grid, *options):
        code = cli.run(["solve", str(table), "--grid", str(grid), "--quiet", *options])
        err = capsys.readouterr().err.strip().splitlines()
        assert len(err) == 1
        return code, err[0]

    assert go(tmp_path / "nothing")[0] == 3
    code, words = go(made_up_grid.directory, "--treatment", "nlte")
    assert code == 2
    assert "treatment 'nlte' is not in the grid; it has lte" in words

    copy = tmp_path / "copy"
    shutil.copytree(made_up_grid.directory, copy)
    header = (copy / "grid.json").read_text()
    block = next(copy.glob("lte*.npy"))
    data = bytearray(block.read_bytes())
    data[-1000] ^= 1
    block.write_bytes(data)
    code, words = go(copy)
    assert code == 3
    assert "checksum" in words
    block.write_bytes(bytes(data[:-500]))
    assert go(copy)[0] == 3
    block.unlink()
    assert go(copy)[0] == 3
    (copy / "grid.json").write_text(
        header.replace('"schema":1', '"schema":999').replace('"schema": 1', '"schema": 999')
    )
    code, words = go(copy)
    assert code == 3
    assert "schema" in words
    (copy / "grid.json").write_text(header[:100])
    assert go(copy)[0] == 3


# Output


def test_output_into_a_missing_folder_is_refused_before_the_work(run, dwarf, tmp_path):
    one_line(run(dwarf, "--output", str(tmp_path / "no" / "out")), 1, "the folder", "does not exist")


def test_output_without_permission(run, dwarf, tmp_path, monkeypatch):
    import tempfile

    def denied(*arguments, **keywords):
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))

    monkeypatch.setattr(tempfile, "mkstemp", denied)
    one_line(run(dwarf, "--output", str(tmp_path / "out")), 1, "cannot write", "no permission")


def test_full_disk(dwarf, grid_option, tmp_path, monkeypatch, capsys):
    table = tmp_path / "good.ecsv"
    dwarf.write(table)

    def full(handle):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    code = cli.run(["solve", str(table), *grid_option, "--quiet", "--output", str(tmp_path / "out")])
    shown = capsys.readouterr()
    assert code == 1
    assert shown.err.strip().endswith("the disk is full")
    assert "dwarf: solved" in shown.out  # printed before, so the numbers are not lost
    assert not [path for path in tmp_path.iterdir() if path.name.startswith((".out", "out"))]


def test_figures_into_a_file(run, dwarf, tmp_path):
    (tmp_path / "file").write_text("")
    code, _, err = run(dwarf, "--plots", str(tmp_path / "file"))
    assert code == 1
    assert "cannot write figures" in err[0]


def test_json_and_output_on_one_stream(run, dwarf):
    one_line(run(dwarf, "--json", "--output", "-"), 2, "both want standard output")


def test_again_with_something_else(tmp_path, dwarf, grid_option, capsys):
    dwarf.write(tmp_path / "widths.ecsv")
    assert cli.run(["again", str(tmp_path / "widths.ecsv"), *grid_option]) == 3
    assert "holds an unknown kind of table, not stars" in capsys.readouterr().err
