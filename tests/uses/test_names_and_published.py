"""Names matched tolerantly but never wrongly; published tables read or refused with one clear line."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.table import Table

from specsolve.errors import ColumnError, InputError, SpecsolveError, UnitError
from specsolve.uses.names import match_names, plain_name
from specsolve.uses.points import read_points
from specsolve.uses.published import read_published


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [
        ("HD 1178", "hd001178"),
        ("BD-18 5550", "BD \u221218_5550"),
        ("Cr110-2108", "CR110 - 2108".replace(" ", "")),
        ("1178", "HD 1178"),
        ("TYC 5329-1927-1", "tyc 5329-1927-1"),
        ("* eps Eri", "eps Eri"),
    ],
)
def test_names_that_mean_one_star(ours, theirs):
    assert match_names([ours, "other"], ["third", theirs]) == {0: 1}


@pytest.mark.parametrize(
    ("ours", "theirs"), [("HD 1178", "HIP 1178"), ("BD-18 5550", "BD-185550"), ("HD 10", "HD 100")]
)
def test_names_that_do_not(ours, theirs):
    assert match_names([ours], [theirs]) == {}


def test_doubled_names_are_refused():
    with pytest.raises(InputError, match="same star"):
        match_names(["HD 1178", "hd1178"], ["x"])
    assert plain_name("HD 1178") == plain_name("hd001178")


def published(**changes) -> Table:
    columns = {"star": ["A", "B"], "teff": [5800.0, 4900.0], "logg": [4.4, 2.6], "feh": [0.0, -0.5], "vmic": [1.0, 1.5]}
    columns |= changes
    return Table({name: values for name, values in columns.items() if values is not None})


def test_a_published_table_in_other_units():
    table = published(teff=[5.8, 4.9])
    table["teff"].unit = "kK"
    table["vmic"] = [1000.0, 1500.0]
    table["vmic"].unit = "m/s"
    found = read_published(table)
    np.testing.assert_allclose(found.theta[:, 0], [5800.0, 4900.0])
    np.testing.assert_allclose(found.theta[:, 3], [1.0, 1.5])
    assert np.isnan(found.errors).all()
    assert np.isnan(read_published(published(vmic=None)).theta[:, 3]).all()


@pytest.mark.parametrize(
    ("changes", "error", "words"),
    [
        ({"logg": None}, ColumnError, "no column 'logg'"),
        ({"teff": [5.8, 4.9]}, InputError, "wrong unit or column"),
        ({"vmic": [1000.0, 1500.0]}, InputError, "wrong unit or column"),
        ({"feh": ["low", "high"]}, ColumnError, "text where numbers belong"),
        ({"teff_error": [-20.0, 20.0]}, InputError, "negative"),
        ({"solar_iron": [8.5, 7.5]}, InputError, "solar_iron"),
        ({"treatment": ["lte", "3d"]}, InputError, "neither lte nor nlte"),
    ],
)
def test_bad_published_tables(changes, error, words):
    with pytest.raises(error, match=words):
        read_published(published(**changes))


def test_wrong_units_of_a_published_table_and_of_points():
    table = published()
    table["teff"].unit = "km/s"
    for read in (read_published, read_points):
        with pytest.raises(UnitError, match="cannot be turned into K"):
            read(table)


def test_points_without_vmic_take_a_relation_or_say_that_there_is_none():
    points = read_points(Table({"teff": [5800.0, 5200.0], "logg": [4.4, 3.4], "feh": [0.0, 0.0]}))
    assert points.from_relation == 1
    assert 0.8 < points.theta[0, 3] < 1.2
    assert np.isnan(points.theta[1, 3])
    with pytest.raises(SpecsolveError, match="twice"):
        read_points(Table({"point": ["a", "a"], "teff": [5800.0, 5800.0], "logg": [4.4, 4.4], "feh": [0.0, 0.1]}))
