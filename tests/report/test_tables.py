"""Tables of a solve: round trip, schema, damage, and what happens when the disk says no."""

from __future__ import annotations

import errno
import json
import os

import numpy as np
import pytest
from astropy.table import Table

from specsolve.errors import ColumnError, InputError, OutputError, StoreError
from specsolve.report.tables import (
    check_writable,
    output_paths,
    read_table,
    tables_of,
    to_json,
    write_solutions,
    write_table,
)
from specsolve.schema import FILE_ENDINGS, SCHEMA, columns_of
from tests.report.made_up import made_up_solution


@pytest.fixture
def solutions(rng):
    return [made_up_solution(rng, "one"), made_up_solution(rng, "two, with a comma", "tied")]


def test_all_four_files_come_back_equal(solutions, tmp_path):
    paths = write_solutions(solutions, tmp_path / "run.ecsv", {"utc": "now", "nested": {"a": [1, 2]}})
    made = tables_of(solutions)
    for kind in FILE_ENDINGS:
        table = read_table(paths[kind], kind)
        assert len(table) == len(made[kind])
        for column in columns_of(kind):
            ours, theirs = made[kind][column.name], table[column.name]
            if column.dtype == "float64":
                np.testing.assert_array_equal(np.asarray(ours), np.ma.filled(theirs, np.nan))
            else:
                assert list(ours) == list(theirs), column.name
            assert (theirs.unit.to_string() if theirs.unit else "") == column.unit
            assert theirs.description == column.description
        assert table.meta["provenance"] == {"utc": "now", "nested": {"a": [1, 2]}}


def test_star_table_says_what_the_solution_says(solutions):
    row = tables_of(solutions)["stars"][0]
    one = solutions[0]
    assert row["teff"] == one.teff
    assert row["teff_error_star"] == pytest.approx(32.0)
    assert row["teff_error_list"] == pytest.approx(32.0 * np.sqrt(0.3))
    assert row["d_fe1_teff_minus"] == -0.08
    assert row["d_fe2_logg_plus"] == 0.12
    assert row["fe2_alternative_logg"] == 4.22
    assert np.isnan(row["fe2_own_sun"])
    assert json.loads(row["configuration"])["robust"] == "huber"
    np.testing.assert_array_equal(row["cov_star"], one.cov_star)


def test_json_is_standard_and_complete(solutions):
    text = json.dumps(to_json(solutions, {"utc": "now"}), allow_nan=False)
    back = json.loads(text)
    assert back["schema"] == SCHEMA
    star = back["stars"][0]
    assert set(star) >= {column.name for column in columns_of("stars")}
    assert len(star["lines"]) == len(solutions[0].lines)
    assert set(star["lines"][0]) == {column.name for column in columns_of("lines")}
    assert star["fe2_own_sun"] is None
    assert star["candidates"][1]["set_aside"] == "outside"


def test_no_solutions_make_empty_tables_that_come_back(tmp_path):
    paths = write_solutions([], tmp_path / "none", {})
    assert len(read_table(paths["stars"], "stars")) == 0
    assert len(read_table(paths["lines"], "lines")) == 0


def test_output_names():
    assert [path.name for path in output_paths("a/b.c.ecsv").values()] == [
        "b.c.ecsv",
        "b.c_lines.ecsv",
        "b.c_candidates.ecsv",
        "b.c_decisions.ecsv",
    ]


def test_another_kind_newer_schema_missing_column_or_damage_are_named(solutions, tmp_path):
    paths = write_solutions(solutions, tmp_path / "run", {})
    with pytest.raises(StoreError, match="holds lines, not stars"):
        read_table(paths["lines"], "stars")
    table = Table.read(paths["decisions"], format="ascii.ecsv")
    table.meta["schema"] = SCHEMA + 1
    write_table(table, tmp_path / "newer.ecsv")
    with pytest.raises(StoreError, match="Update specsolve"):
        read_table(tmp_path / "newer.ecsv", "decisions")
    table.meta["schema"] = SCHEMA
    table.remove_column("outcome")
    write_table(table, tmp_path / "less.ecsv")
    with pytest.raises(ColumnError, match="no column outcome"):
        read_table(tmp_path / "less.ecsv", "decisions")
    (tmp_path / "binary.ecsv").write_bytes(bytes(range(256)))
    with pytest.raises(InputError, match="not a table that specsolve wrote"):
        read_table(tmp_path / "binary.ecsv", "stars")
    with pytest.raises(InputError, match="no such file"):
        read_table(tmp_path / "absent.ecsv", "stars")


def test_missing_folder_is_found_before_the_work(tmp_path):
    with pytest.raises(OutputError, match="does not exist"):
        check_writable(tmp_path / "no" / "out.ecsv")


def test_full_disk_leaves_the_old_file_and_no_litter(solutions, tmp_path, monkeypatch):
    table = tables_of(solutions)["decisions"]
    path = write_table(table, tmp_path / "keep.ecsv")
    before = path.read_bytes()

    def full(handle: int) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OutputError, match=r"keep\.ecsv: the disk is full"):
        write_table(table, path)
    assert path.read_bytes() == before
    assert [item.name for item in tmp_path.iterdir()] == ["keep.ecsv"]


def test_an_existing_file_is_kept_when_asked(solutions, tmp_path):
    table = tables_of(solutions)["decisions"]
    write_table(table, tmp_path / "x.ecsv")
    with pytest.raises(OutputError, match="exists"):
        write_table(table, tmp_path / "x.ecsv", overwrite=False)
