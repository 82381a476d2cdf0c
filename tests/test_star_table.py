"""Tables of equivalent widths: formats, headings, units, and one clear sentence for each mistake."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.table import MaskedColumn, QTable, Table

from specsolve.errors import ColumnError, InputError, LineError, SpecsolveError, UnitError
from specsolve.star_table import read_stars


@pytest.fixture
def table() -> QTable:
    """Two invented stars, lines in no order."""
    return QTable(
        {
            "star": ["b", "a", "b", "a"],
            "wavelength_air": [6301.5, 5000.0, 5100.0, 5200.0] * u.AA,
            "ion": ["Fe I", "Fe II", "Fe I", "Fe I"],
            "excitation_potential": [3.65, 2.9, 1.0, 2.0] * u.eV,
            "equivalent_width": [100.0, 40.0, 30.0, 20.0] * u.mAA,
            "equivalent_width_error": [2.0, 1.0, 1.0, 1.0] * u.mAA,
            "log_gf": [-0.7, -3.0, -2.0, -1.0],
        }
    )


@pytest.mark.parametrize(("suffix", "style"), [("ecsv", "ascii.ecsv"), ("fits", "fits"), ("vot", "votable")])
def test_formats_give_the_same_stars(table, tmp_path, suffix, style):
    path = tmp_path / f"widths.{suffix}"
    if suffix == "vot":  # the standard of VOTable units deprecates the Angstrom
        table["wavelength_air"] = table["wavelength_air"].to(u.nm)
        for name in ("equivalent_width", "equivalent_width_error"):
            table[name] = table[name].to(u.pm)
    table.write(path, format=style)
    stars = read_stars(path)
    assert [star.name for star in stars] == ["b", "a"]
    np.testing.assert_allclose(stars[0].wavelength_air, [5100.0, 6301.5])
    np.testing.assert_allclose(stars[0].equivalent_width, [30.0, 100.0])
    assert stars[1].ion.tolist() == ["Fe I", "Fe II"]
    assert not stars[0].error_assumed.any()


def test_csv_wants_units_and_takes_them(table, tmp_path):
    path = tmp_path / "widths.csv"
    Table(table).write(path, format="ascii.csv")
    with pytest.raises(UnitError, match="which unit has column"):
        read_stars(path)
    units = {"wavelength_air": "Angstrom", "excitation_potential": "eV"}
    units |= {"equivalent_width": "mAngstrom", "equivalent_width_error": "mAngstrom"}
    assert len(read_stars(path, units=units)[0]) == 2


def test_units_are_converted(table):
    table["wavelength_air"] = table["wavelength_air"].to(u.nm)
    table["equivalent_width"] = table["equivalent_width"].to(u.AA)
    star = read_stars(table)[0]
    np.testing.assert_allclose(star.wavelength_air, [5100.0, 6301.5])
    np.testing.assert_allclose(star.equivalent_width, [30.0, 100.0])


def test_unit_of_another_kind(table):
    table["equivalent_width"] = [1.0, 2.0, 3.0, 4.0] * u.K
    with pytest.raises(UnitError, match="cannot be turned into mAngstrom"):
        read_stars(table)


def test_widths_in_angstrom_called_milliangstrom(table):
    table["equivalent_width"] = table["equivalent_width"] / 1000.0
    with pytest.raises(UnitError, match="probably Angstrom"):
        read_stars(table)


def test_other_headings_and_spellings(table):
    table.rename_column("equivalent_width", "EQW")
    table["ion"] = ["FeI", "FeII", "FeI", "FeI"]
    with pytest.raises(ColumnError, match=r"no column 'equivalent_width'; the table has .*EQW"):
        read_stars(table)
    with pytest.raises(LineError, match="'FeI', 'FeII'"):
        read_stars(table, columns={"equivalent_width": "EQW"})
    stars = read_stars(table, columns={"equivalent_width": "EQW"}, ions={"FeI": "Fe I", "FeII": "Fe II"})
    assert stars[1].ion.tolist() == ["Fe I", "Fe II"]
    with pytest.raises(ColumnError, match="is not a column that is read"):
        read_stars(table, columns={"width": "EQW"})


def test_missing_errors_are_assumed_and_marked(table):
    del table["equivalent_width_error"]
    star = read_stars(table)[0]
    assert star.error_assumed.all()
    np.testing.assert_allclose(star.equivalent_width_error, np.hypot(0.5, 0.01 * star.equivalent_width))


def test_masked_and_bad_numbers_become_lines_with_a_reason(table):
    plain = Table(table)
    plain["equivalent_width"] = MaskedColumn(
        [100.0, 40.0, 30.0, 20.0], mask=[True, False, False, False], unit="mAngstrom"
    )
    plain["wavelength_air"].unit, plain["excitation_potential"].unit = "Angstrom", "eV"
    plain["equivalent_width_error"].unit = "mAngstrom"
    star = read_stars(plain)[0]
    assert np.isnan(star.equivalent_width[1])


def test_other_ions_are_left_out_with_a_note(table):
    table["ion"] = ["Fe I", "Fe II", "Ca I", "Fe I"]
    star = read_stars(table)[0]
    assert len(star) == 1
    assert "1 lines of other ions left out (Ca I)" in star.notes


@pytest.mark.parametrize(
    "values", [["yes", "no", "1", "true"], [True, False, True, True], [1, 0, 1, 1], [1.0, 0.0, 1.0, 1.0]]
)
def test_use_column(table, values):
    table["use"] = values
    stars = read_stars(table)
    assert stars[0].use.all()
    assert stars[1].use.tolist() == [True, False]


def test_use_column_with_another_word(table):
    table["use"] = ["yes", "no", "perhaps", "yes"]
    with pytest.raises(ColumnError, match="row 3: use = 'perhaps'"):
        read_stars(table)


def test_name_of_the_star_is_the_file(table, tmp_path):
    del table["star"]
    table.write(tmp_path / "my_star.ecsv")
    assert read_stars(tmp_path / "my_star.ecsv")[0].name == "my_star"


@pytest.mark.parametrize("content", [b"", b"# %ECSV 1.0\n# ---\n# datatype:\n", b"\x00\x01\xfe\xff" * 50])
def test_empty_truncated_and_binary_files(tmp_path, content):
    path = tmp_path / "bad.ecsv"
    path.write_bytes(content)
    with pytest.raises(SpecsolveError, match=r"bad\.ecsv"):
        read_stars(path)


def test_no_such_file_and_no_rows(table, tmp_path):
    with pytest.raises(InputError, match="no such file"):
        read_stars(tmp_path / "absent.ecsv")
    with pytest.raises(InputError, match="no rows"):
        read_stars(table[:0])


def test_wavelengths_that_are_none(table):
    table["wavelength_air"] = [0.5, 0.5, 0.6, 0.7] * u.AA
    with pytest.raises(LineError, match="wrong unit or column"):
        read_stars(table)


def test_no_usable_width_at_all(table):
    table["equivalent_width"] = [np.nan, 0.0, -1.0, 1e7] * u.mAA
    with pytest.raises(InputError, match="no usable equivalent width"):
        read_stars(table)


def test_text_where_numbers_belong(table):
    table["log_gf"] = ["a", "b", "c", "d"]
    with pytest.raises(ColumnError, match="holds text"):
        read_stars(table)
