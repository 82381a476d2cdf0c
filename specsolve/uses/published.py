"""Published parameters read from a table: the edge where columns and units are checked."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.balance.solution import PARAMETER_NAMES
from specsolve.errors import ColumnError, InputError, UsageError
from specsolve.lines.reading import read_table
from specsolve.schema import columns_of

from .plausible import PLAUSIBLE, numbers

if TYPE_CHECKING:
    from astropy.table import Table

REQUIRED = ("star", "teff", "logg", "feh")
PLAUSIBLE_SOLAR_IRON = (7.2, 7.8)  # from 7.67 in the 1980s to 7.45 (common practice, no source)
TREATMENTS = ("lte", "nlte")


@dataclass(frozen=True, eq=False)
class Published:
    """Parameters of stars from elsewhere.

    Attributes
    ----------
    names : tuple of str
    theta : ndarray, shape (n_stars, 4)
        teff [K], logg, feh, vmic [km/s]; nan where not given.
    errors : ndarray, shape (n_stars, 4)
        One sigma; nan where not given.
    solar_iron : ndarray, shape (n_stars,)
        A(Fe) of the Sun that their [Fe/H] counts from; nan where not said.
    treatments : tuple of str
        "lte", "nlte", or empty where not said.
    path : Path or None
    """

    names: tuple[str, ...]
    theta: np.ndarray
    errors: np.ndarray
    solar_iron: np.ndarray
    treatments: tuple[str, ...]
    path: Path | None = None


def read_published(source: str | Path | Table, columns: Mapping[str, str] | None = None) -> Published:
    """Read a table of published parameters.

    Parameters
    ----------
    source : path or `~astropy.table.Table`
        ECSV, CSV, FITS or VOTable. Needs star, teff, logg, feh; takes vmic, ``*_error``, solar_iron, treatment. Numbers
        without a unit are taken to be in K, dex and km/s, and refused where they cannot be.
    columns : mapping, optional
        Our column name to theirs, for example ``{"teff": "Teff"}``.

    Raises
    ------
    InputError, ColumnError, UnitError

    Examples
    --------
    >>> from astropy.table import Table
    >>> read_published(Table({"star": ["A"], "teff": [5800], "logg": [4.4], "feh": [0.1]})).theta[0, 0]
    5800.0
    """
    path = None if hasattr(source, "colnames") else Path(source)
    table = read_table(path) if path is not None else source
    where = f"{path}: " if path is not None else ""
    columns = dict(columns or {})
    ours = [column.name for column in columns_of("published")]
    for name in columns:
        if name not in ours:
            raise UsageError(f"--column {name}: a published table can have {', '.join(ours)}")
    names = {name: columns.get(name, name) for name in ours}
    for name in (*REQUIRED, *columns):
        if names[name] not in table.colnames:
            raise ColumnError(
                f"{where}no column '{names[name]}'; the table has {', '.join(table.colnames)}. Say which one it is with "
                f"--column {name}=NAME",
                column=name,
                found=table.colnames,
                path=path,
            )
    if len(table) == 0:
        raise InputError(f"{where}the table has no rows", path=path)
    units = {column.name: column.unit for column in columns_of("published")}
    nan = np.full(len(table), np.nan)

    def values_of(name: str) -> np.ndarray:
        if names[name] not in table.colnames:
            return nan
        return numbers(table[names[name]], name, units[name], where, path)

    theta = np.column_stack([values_of(name) for name in PARAMETER_NAMES])
    errors = np.column_stack([values_of(f"{name}_error") for name in PARAMETER_NAMES])
    stars = tuple(_texts(table[names["star"]]))
    for k, name in enumerate(PARAMETER_NAMES):
        _check_range(theta[:, k], name, PLAUSIBLE[name], stars, where, path)
    if (errors < 0.0).any():
        star = stars[int(np.flatnonzero((errors < 0.0).any(axis=1))[0])]
        raise InputError(f"{where}{star}: an error is negative", path=path)
    solar = values_of("solar_iron")
    _check_range(solar, "solar_iron", PLAUSIBLE_SOLAR_IRON, stars, where, path)
    said = _texts(table[names["treatment"]]) if names["treatment"] in table.colnames else [""] * len(table)
    treatments = tuple(text.lower().replace("non-lte", "nlte") for text in said)
    for star, text in zip(stars, treatments, strict=True):
        if text not in ("", *TREATMENTS):
            raise InputError(f"{where}{star}: treatment '{text}' is neither lte nor nlte", path=path)
    return Published(stars, theta, errors, solar, treatments, path)


def _texts(column) -> list[str]:
    gone = np.ma.getmaskarray(np.ma.asarray(column))
    return [
        "" if empty else str(value).strip()
        for value, empty in zip(np.ma.asarray(column).data.tolist(), gone, strict=True)
    ]


def _check_range(values: np.ndarray, name: str, limits: tuple[float, float], stars, where: str, path) -> None:
    bad = np.flatnonzero(np.isfinite(values) & ~((values >= limits[0]) & (values <= limits[1])))
    if bad.size:
        raise InputError(
            f"{where}{stars[bad[0]]}: {name} = {values[bad[0]]:g} is outside {limits[0]:g} to {limits[1]:g}: wrong unit or "
            "column?",
            path=path,
            row=int(bad[0]),
        )
