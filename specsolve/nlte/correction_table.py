"""Corrections of lines at one or many points as a table."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.atmosphere.between import atmosphere_between
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.errors import InputError
from specsolve.lines import LineList
from specsolve.lines.reading import default_line_list, line_list_from_table, read_table
from specsolve.nlte.corrections import AT_WIDTH, RANGE_FACTOR, Corrections, corrections
from specsolve.nlte.departures import DepartureStore
from specsolve.nlte.recipe import Recipe

if TYPE_CHECKING:
    from astropy.table import Table

#: name, unit, description of the columns.
COLUMNS = (
    ("teff", "K", "effective temperature"),
    ("logg", "dex(cm / s2)", "surface gravity"),
    ("feh", "dex", "[Fe/H] of atmosphere and star"),
    ("vmic", "km / s", "microturbulence"),
    ("ion", "", "Fe I or Fe II"),
    ("wavelength_air", "Angstrom", "wavelength in air"),
    ("excitation_potential", "eV", "energy of the lower level"),
    ("reduced_width", "dex", "log10 of width over wavelength that both abundances meet"),
    ("abundance_lte", "dex", "A(Fe) that the width gives in LTE"),
    ("abundance_nlte", "dex", "A(Fe) that it gives with departures"),
    ("correction", "dex", "NLTE minus LTE abundance"),
    ("weak_collisions", "dex", "the same with S_H divided by the range factor; nan if not asked for"),
    ("strong_collisions", "dex", "the same with S_H times the range factor; nan if not asked for"),
    ("approximate", "", "a level of the line is not in the model atom: the nearest of its parity stands for it"),
    ("flags", "", "limits that the point leaves"),
)


def correction_table(
    points,
    lines: LineList,
    *,
    reduced_width: np.ndarray | None = None,
    at: str = AT_WIDTH,
    abundance: float | None = None,
    with_range: bool = True,
    departures: DepartureStore | None = None,
    atmospheres: AtmosphereStore | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Table:
    """Corrections of lines at points.

    Parameters
    ----------
    points : array_like, shape (n_points, 4)
        teff [K], logg, feh [dex], vmic [km/s].
    lines : LineList
    reduced_width, at, abundance, with_range, departures
        As for `specsolve.nlte.corrections.corrections`.
    atmospheres : AtmosphereStore, optional
        The packaged ones by default; linear between their nodes.
    progress : callable, optional
        Called with (finished points, all points).

    Returns
    -------
    astropy.table.Table
        One row a point and line, columns `COLUMNS`.

    Examples
    --------
    >>> correction_table([[5777.0, 4.44, 0.0, 1.0]], lines)["correction"]       # doctest: +SKIP
    """
    from astropy.table import Table, vstack

    store = AtmosphereStore.packaged() if atmospheres is None else atmospheres
    points = np.atleast_2d(np.asarray(points, dtype=float))
    if departures is not None and departures.atmospheres_identity != store.identity:
        raise InputError("the departures belong to other atmospheres")
    parts = []
    for done, (teff, logg, feh, vmic) in enumerate(points):
        found = corrections(
            atmosphere_between(store, teff, logg, feh), lines, vmic, reduced_width=reduced_width, at=at,
            abundance=abundance, with_range=with_range, departures=departures,
        )  # fmt: skip
        parts.append(Table(_columns(found)))
        if progress is not None:
            progress(done + 1, len(points))
    table = vstack(parts, metadata_conflicts="silent")
    for name, unit, words in COLUMNS:
        table[name].unit, table[name].description = unit or None, words
    recipe = Recipe()
    table.meta = {
        "kind": "corrections", "schema": 1, "at": at, "hydrogen_factor": recipe.hydrogen_factor,
        "range_factor": RANGE_FACTOR, "atmospheres_identity": store.identity,
        "departures": "solved at each point" if departures is None else f"store {departures.identity}",
    }  # fmt: skip
    return table


def _columns(found: Corrections) -> dict:
    n = len(found.lines)
    values = {name: np.full(n, getattr(found, name)) for name in ("teff", "logg", "vmic")} | {
        "feh": np.full(n, found.mh)
    }
    for name in ("ion", "wavelength_air", "excitation_potential"):
        values[name] = getattr(found.lines, name)
    for name in ("reduced_width", "abundance_lte", "abundance_nlte", "correction", "weak_collisions",
                 "strong_collisions", "approximate"):  # fmt: skip
        values[name] = getattr(found, name)
    values["flags"] = np.full(n, ", ".join(found.flags))
    return {name: values[name] for name, _, _ in COLUMNS}


def lines_and_widths(path: Path | None) -> tuple[LineList, np.ndarray | None]:
    """Lines of a table, identified, and log10(W / lambda) if it has widths; the default list without a table.

    Raises
    ------
    InputError
        If the table holds widths of several stars.
    """
    if path is None:
        return default_line_list(), None
    table = read_table(path)
    if "equivalent_width" not in table.colnames:
        return line_list_from_table(table, path=path), None
    if "star" in table.colnames and len(set(np.asarray(table["star"]).tolist())) > 1:
        raise InputError(f"{path} holds widths of several stars; give a table of one", path=path)
    lines = line_list_from_table(table, path=path)
    if table["equivalent_width"].unit is None:
        raise InputError(f"{path}: the column equivalent_width has no unit", path=path)
    width = np.asarray(table["equivalent_width"].quantity.to_value("Angstrom"))
    given = np.asarray(table["wavelength_air"], dtype=float)
    place = [int(np.argmin(np.abs(given - w) + 10.0 * (np.asarray(table["ion"]).astype(str) != str(ion))))
             for w, ion in zip(lines.wavelength_air, lines.ion, strict=True)]  # fmt: skip
    return lines, np.log10(width[place] / lines.wavelength_air)
