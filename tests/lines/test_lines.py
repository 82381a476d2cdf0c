"""Line lists: reading, merging, identification, air and vacuum."""

from __future__ import annotations

import json
import warnings
from pathlib import Path

import numpy as np
import pytest
from astropy import units
from astropy.table import QTable, Table

from specsolve.errors import ColumnError, InputError, LineError, UnitError
from specsolve.lines import (
    FLAG_CONFLICTING_LOG_GF,
    FLAG_NO_HYDROGEN_DATA,
    FLAG_UNIDENTIFIED,
    LineList,
    air_to_vacuum,
    default_line_list,
    describe_flags,
    identify,
    line_list_from_table,
    read_line_list,
    vacuum_to_air,
)
from specsolve.lines.reading import merge_repeats
from specsolve.lines.transitions import load_levels, load_transitions

# Vacuum wavelength (NIST ASD, Ritz, nm x 10) and air wavelength (Atomic Line List v3.00b4) of the same transitions
AIR_OF_VACUUM = [(5001.2644, 4999.870), (5003.2584, 5001.863), (6302.2427, 6300.500)]


def table_of(**changes) -> QTable:
    table = QTable()
    table["wavelength_air"] = [6301.50, 5414.07, 6301.50] * units.Angstrom
    table["ion"] = ["Fe I", "Fe II", "Fe I"]
    table["excitation_potential"] = [3.654, 3.22, 3.65] * units.eV
    table["log_gf"] = [-0.718, -3.58, -0.72]
    for name, values in changes.items():
        table[name] = values
    return table


def test_air_and_vacuum_are_inverse():
    vacuum = np.linspace(3000.0, 11000.0, 200)
    np.testing.assert_allclose(air_to_vacuum(vacuum_to_air(vacuum)), vacuum, atol=1e-8)


def test_air_wavelength_of_sodium_d():
    """Na I D2: 5891.5833 in vacuum, 5889.9510 in air (NIST ASD, both from memory)."""
    assert vacuum_to_air(5891.5833) == pytest.approx(5889.9510, abs=2e-3)


@pytest.mark.reference
def test_air_and_vacuum_against_two_catalogues(reference):
    """NIST vacuum wavelengths of Fe I lines, turned to air, stand in the Atomic Line List to 0.002 Angstrom."""
    import csv
    import gzip

    ours = load_transitions()
    ours = ours[ours["stage"] == 1]
    with gzip.open(reference / "atomic" / "nist" / "fe_lines_200_1000nm.csv.gz", "rt") as handle:
        rows = [r for r in csv.DictReader(handle) if r["sp_num"] == "1" and r["Acc"] in ("A", "B+", "B")]
    rows = [r for r in rows if 355.0 < float(r["ritz_wl_vac(nm)"]) < 990.0]
    air = vacuum_to_air(10.0 * np.array([float(r["ritz_wl_vac(nm)"]) for r in rows]))
    energy = np.array([float(r["Ei(eV)"]) for r in rows])
    lower = load_levels()["energy"][ours["lower"]] * 1.239841984332e-4
    for wave, low in zip(air, energy, strict=True):
        near = np.abs(lower - low) < 1e-3
        assert np.min(np.abs(ours["wavelength_air"][near] - wave)) < 2e-3


def test_repeats_are_merged_and_order_is_canonical():
    lines = line_list_from_table(table_of())
    assert lines.ion.tolist() == ["Fe I", "Fe II"]
    assert lines.remarks == ()


def test_conflicting_log_gf_is_told_and_flagged():
    lines = line_list_from_table(table_of(log_gf=[-0.718, -3.58, -0.60]))
    assert len(lines) == 2
    assert lines.log_gf[0] == -0.718
    assert lines.flags[0] & FLAG_CONFLICTING_LOG_GF
    assert "-0.718 to -0.600" in lines.remarks[0]


def test_units_are_converted():
    nanometres = table_of()
    nanometres["wavelength_air"] = nanometres["wavelength_air"].to(units.nm)
    np.testing.assert_allclose(
        line_list_from_table(nanometres).wavelength_air, line_list_from_table(table_of()).wavelength_air
    )


def test_missing_unit_is_a_clear_question():
    table = Table(table_of())
    table["wavelength_air"].unit = None
    with pytest.raises(UnitError, match="no unit") as caught:
        line_list_from_table(table)
    assert caught.value.column == "wavelength_air"
    table["wavelength_air"].unit = "K"
    with pytest.raises(UnitError, match="in K"):
        line_list_from_table(table)


def test_missing_column_names_what_there_is():
    table = table_of()
    table.remove_column("log_gf")
    with pytest.raises(ColumnError, match="log_gf") as caught:
        line_list_from_table(table)
    assert "wavelength_air" in caught.value.found


@pytest.mark.parametrize(
    ("name", "bad"),
    [
        ("log_gf", [-0.7, np.nan, -0.7]),
        ("wavelength_air", [630.1, 5414.0, 6301.5] * units.Angstrom),
        ("excitation_potential", [-1.0, 3.2, 3.6] * units.eV),
        ("ion", ["Fe I", "iron", "Fe I"]),
    ],
)
def test_bad_values_name_the_row(name, bad):
    with pytest.raises(LineError, match=r"row \d"):
        line_list_from_table(table_of(**{name: bad}))


def test_other_headings_and_spellings():
    table = table_of(ion=["FeI", "FeII", "FeI"])
    table.rename_column("log_gf", "loggf")
    lines = line_list_from_table(table, columns={"log_gf": "loggf"}, ions={"FeI": "Fe I", "FeII": "Fe II"})
    assert lines.ion.tolist() == ["Fe I", "Fe II"]


@pytest.mark.parametrize("suffix", [".ecsv", ".fits", ".vot"])
def test_files_of_three_formats(tmp_path, suffix):
    path = tmp_path / f"lines{suffix}"
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # the VOTable writer would rather have 0.1 nm
        table_of().write(path, **({"format": "votable"} if suffix == ".vot" else {}))
    np.testing.assert_allclose(read_line_list(path).log_gf, [-0.718, -3.58])


@pytest.mark.parametrize("content", [b"", b"\x00\xff\x00garbage", b"# %ECSV 1.0\n# ---\n# datatype:\n"])
def test_damaged_files_are_input_errors(tmp_path, content):
    path = tmp_path / "lines.ecsv"
    path.write_bytes(content)
    with pytest.raises(InputError):
        read_line_list(path)


def test_absent_file_and_unknown_suffix(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        read_line_list(tmp_path / "absent.ecsv")
    with pytest.raises(InputError, match="suffix"):
        read_line_list(tmp_path / "lines.docx")


def test_written_list_reads_back_the_same(tmp_path):
    lines = default_line_list()
    lines.to_table().write(tmp_path / "list.ecsv")
    again = read_line_list(tmp_path / "list.ecsv")
    assert again.identity == lines.identity
    np.testing.assert_array_equal(again.grade, lines.grade)


def test_columns_survive_json():
    lines = default_line_list()
    again = LineList.from_columns(json.loads(json.dumps(lines.to_columns())))
    assert again.identity == lines.identity
    np.testing.assert_array_equal(again.flags, lines.flags)


def test_identification_finds_the_line_of_other_catalogues():
    """Wavelengths off by 0.03 Angstrom and energies by 0.01 eV lead to the same transition and key."""
    lines = default_line_list()
    other = identify(
        LineList.from_arrays(
            lines.wavelength_air + 0.03, lines.ion, lines.excitation_potential - 0.01, lines.log_gf + 0.2
        )
    )
    same = np.mean(other.key == lines.key)
    assert same > 0.97  # a stronger neighbour may come within 0.05 Angstrom
    assert not np.any(other.flags & FLAG_UNIDENTIFIED)


def test_identification_of_a_known_line():
    """Fe I 6301.50: z 5P* - e 5D, sigma 834, alpha 0.243 (Barklem, Piskunov & O'Mara 2000)."""
    lines = identify(LineList.from_arrays([6301.50], ["Fe I"], [3.654], [-0.718]))
    assert (lines.lower_term[0], lines.upper_term[0]) == ("z 5P*", "e 5D")
    assert lines.broadening_sigma[0] == pytest.approx(834.0, abs=1.0)
    assert lines.broadening_alpha[0] == pytest.approx(0.243, abs=0.002)


def test_unknown_line_is_kept_and_flagged():
    lines = identify(LineList.from_arrays([6400.77], ["Fe I"], [1.234], [-2.0]))
    assert lines.flags[0] == FLAG_UNIDENTIFIED | FLAG_NO_HYDROGEN_DATA
    assert lines.key[0] == "Fe I 6400.770 1.234"
    assert "estimated" in describe_flags(lines.flags[0])


def test_given_damping_is_kept():
    lines = identify(
        LineList.from_arrays([6301.50], ["Fe I"], [3.654], [-0.718], broadening_sigma=500.0, broadening_alpha=0.2)
    )
    assert lines.broadening_sigma[0] == 500.0


def test_key_ignores_log_gf_and_merging_is_idempotent():
    lines = default_line_list()
    changed = lines.with_columns(log_gf=lines.log_gf + 0.1)
    np.testing.assert_array_equal(changed.key, lines.key)
    assert changed.identity != lines.identity
    assert merge_repeats(lines).identity == lines.identity


def test_selection_order_and_positions(rng):
    lines = default_line_list()
    shuffled = lines.select(rng.permutation(len(lines)))
    assert shuffled.sorted().identity == lines.identity
    np.testing.assert_array_equal(
        lines.position_of(shuffled.key[:5]), [list(lines.key).index(k) for k in shuffled.key[:5]]
    )
    assert lines.position_of(["Fe I 1.000 0.000"])[0] == -1


def test_default_list_is_what_it_says():
    lines = default_line_list()
    assert len(lines) <= 210
    assert np.unique(lines.key).size == len(lines)
    assert np.sum(lines.ion == "Fe II") >= 30
    assert np.all((lines.grade >= 1) & (lines.grade <= 4))
    assert np.all(lines.log_gf_error > 0.0)
    assert np.all(lines.source != "")
    assert np.all(np.isfinite(lines.log_gamma_rad))
    assert np.mean(np.isfinite(lines.broadening_sigma)) > 0.95


def test_list_for_readers_is_the_packaged_one():
    import specsolve

    package = Path(specsolve.__file__).parent
    shown = package.parent / "linelists_demo" / "iron_default.ecsv"
    if shown.exists():  # the installed package has only its own copy
        assert shown.read_bytes() == (package / "data" / "lines" / "iron_default.ecsv").read_bytes()


def test_transition_table_is_consistent():
    table, levels = load_transitions(), load_levels()
    lower, upper = levels[table["lower"]], levels[table["upper"]]
    assert np.all(lower["stage"] == table["stage"])
    predicted = vacuum_to_air(1e8 / (upper["energy"] - lower["energy"]))
    assert np.quantile(np.abs(predicted - table["wavelength_air"]), 0.99) < 0.02
    assert np.all(np.diff(table["wavelength_air"][table["stage"] == 1]) >= 0.0)


@pytest.mark.reference
@pytest.mark.slow
def test_transition_table_is_remade_bitwise(reference, tmp_path):
    from specsolve.lines.transitions_build import build

    build(reference, tmp_path)
    assert np.load(tmp_path / "iron_transitions.npy").tobytes() == load_transitions().tobytes()
    assert np.load(tmp_path / "iron_levels.npy").tobytes() == load_levels().tobytes()
