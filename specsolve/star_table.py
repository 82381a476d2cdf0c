"""Read tables of equivalent widths, with one star or many, into `Star`s: the edge where columns and units are checked.

Columns: `star` (optional), `wavelength_air`, `ion`, `equivalent_width`; optional `equivalent_width_error`,
`excitation_potential`, `log_gf`, `log_gf_error`, `use`; and what is known of a star from elsewhere, the same in all of
its rows (`specsolve columns outside`). A missing unit is asked for, never guessed.
"""

from __future__ import annotations

import logging
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.balance.star import HUGE_WIDTH_MA, Star
from specsolve.errors import ColumnError, InputError, LineError, UnitError
from specsolve.lines.reading import read_table
from specsolve.schema import OUTSIDE, TEXT

if TYPE_CHECKING:
    from astropy.table import Table

log = logging.getLogger(__name__)

REQUIRED = ("wavelength_air", "ion", "equivalent_width")
OPTIONAL = ("star", "equivalent_width_error", "excitation_potential", "log_gf", "log_gf_error", "use")
UNITS = {
    "wavelength_air": "Angstrom",
    "equivalent_width": "mAngstrom",
    "equivalent_width_error": "mAngstrom",
    "excitation_potential": "eV",
}
NUMERIC = (*UNITS, "log_gf", "log_gf_error")
KNOWN = {column.name: column for column in OUTSIDE if column.name != "star"}
KNOWN_UNITS = {name: column.unit for name, column in KNOWN.items() if column.unit not in ("", "dex")}
IONS = ("Fe I", "Fe II")
PLAUSIBLE_WAVELENGTH = (2000.0, 25000.0)  # Angstrom; outside it the unit or the column is wrong
SMALLEST_MEDIAN_MA = 1.0  # no set of measured lines is that weak in the median
TRUE_WORDS = {"true", "t", "yes", "y", "1"}
FALSE_WORDS = {"false", "f", "no", "n", "0"}


def read_stars(
    source: str | Path | Table,
    *,
    columns: Mapping[str, str] | None = None,
    ions: Mapping[str, str] | None = None,
    units: Mapping[str, str] | None = None,
    name: str | None = None,
    path: str | Path | None = None,
) -> list[Star]:
    """Read a table of one star or many.

    Parameters
    ----------
    source : path or `~astropy.table.Table`
        ECSV, CSV, FITS or VOTable, told apart by the suffix.
    columns : mapping, optional
        Our column name to theirs, for example ``{"equivalent_width": "EQW"}``.
    ions : mapping, optional
        Their spelling to ours, for example ``{"FeI": "Fe I"}``.
    units : mapping, optional
        Unit of a column (our name) that the table does not state, for example ``{"equivalent_width": "mAngstrom"}``.
    name : str, optional
        Name of the star where the table has no `star` column; the file's stem by default.
    path : path-like, optional
        Where a table in memory comes from, for messages and the star's name.

    Returns
    -------
    list of Star
        In the order in which the stars first appear.

    Raises
    ------
    InputError, ColumnError, UnitError, LineError

    Examples
    --------
    >>> stars = read_stars("widths.ecsv")                                      # doctest: +SKIP
    """
    if not hasattr(source, "colnames"):
        path = Path(source)
    path = None if path is None else Path(path)
    table = source if hasattr(source, "colnames") else read_table(path)
    where = f"{path}: " if path is not None else ""
    names = _names(table, columns or {}, where, path)
    if len(table) == 0:
        raise InputError(f"{where}the table has no rows.", path=path)
    values = {
        ours: _numbers(table[theirs], ours, units or {}, where, path)
        for ours, theirs in names.items()
        if ours in NUMERIC
    }
    ion = _ions(_texts(table[names["ion"]]), ions or {}, where, path)
    use = _flags(table[names["use"]], where, path) if "use" in names else np.ones(len(table), bool)
    _check_wavelengths(values["wavelength_air"], where, path)
    _check_widths(values["equivalent_width"], where, path)
    default = name or (path.stem if path is not None else "star")
    owner = _texts(table[names["star"]]) if "star" in names else np.full(len(table), default)
    known = {
        ours: known_values(table[theirs], ours, units or {}, where, path)
        for ours, theirs in names.items()
        if ours in KNOWN
    }
    other = ~np.isin(ion, IONS)
    optional = [
        name for name in ("equivalent_width_error", "excitation_potential", "log_gf", "log_gf_error") if name in values
    ]
    stars = []
    for star, rows in rows_of_each(owner):
        keep = rows[~other[rows]]
        notes = []
        if keep.size < rows.size:
            strange = ", ".join(sorted(set(ion[rows[other[rows]]].tolist()))[:6])
            notes.append(f"{rows.size - keep.size} lines of other ions left out ({strange})")
        stars.append(
            Star.from_arrays(
                star or default,
                values["wavelength_air"][keep],
                ion[keep],
                values["equivalent_width"][keep],
                **{name: values[name][keep] for name in optional},
                use=use[keep],
                notes=tuple(notes),
                known=_known_of_star(known, rows, star or default, where, path) if known else None,
            )
        )
    return stars


def rows_of_each(owner: np.ndarray) -> list[tuple[str, np.ndarray]]:
    """Names in the order in which they first appear, each with its rows."""
    names, first, inverse = np.unique(owner, return_index=True, return_inverse=True)
    by_name = np.split(np.argsort(inverse, kind="stable"), np.cumsum(np.bincount(inverse))[:-1])
    return [(str(names[i]), by_name[i]) for i in np.argsort(first, kind="stable")]


def known_values(
    column: Any, ours: str, units: Mapping[str, str], where: str = "", path: Path | None = None
) -> np.ndarray:
    """A column of what is known from elsewhere, in our unit; "" or nan where a row says nothing."""
    if KNOWN[ours].dtype == TEXT:
        return _texts(column)
    return _numbers(column, ours, units, where, path)


def _known_of_star(
    known: Mapping[str, np.ndarray], rows: np.ndarray, star: str, where: str, path: Path | None
) -> dict[str, Any]:
    """The one value of each column among the rows of a star."""
    found: dict[str, Any] = {}
    for name, values in known.items():
        here = values[rows]
        said = (
            here[here != ""] if here.dtype.kind == "U" else here[np.isfinite(here).reshape(rows.size, -1).any(axis=1)]
        )
        if len(said) == 0:
            continue
        if not all(np.array_equal(value, said[0], equal_nan=said.dtype.kind != "U") for value in said[1:]):
            raise ColumnError(
                f"{where}column '{name}' holds different values in the rows of {star}; it belongs to the star, not to "
                "the line.",
                column=name,
                path=path,
            )
        found[name] = said[0].tolist()
    return found


def _names(table: Table, columns: Mapping[str, str], where: str, path: Path | None) -> dict[str, str]:
    """Our name to the table's, for the columns that it has."""
    unknown = sorted(set(columns) - set(REQUIRED) - set(OPTIONAL) - set(KNOWN))
    if unknown:
        raise ColumnError(
            f"'{unknown[0]}' is not a column that is read; there are {', '.join(REQUIRED + OPTIONAL)}.",
            column=unknown[0],
        )
    names = {}
    for ours in (*REQUIRED, *OPTIONAL, *KNOWN):
        theirs = columns.get(ours, ours)
        if theirs in table.colnames:
            names[ours] = theirs
        elif ours in REQUIRED or ours in columns:
            raise ColumnError(
                f"{where}no column '{theirs}'{'' if theirs == ours else f' for {ours}'}; the table has "
                f"{', '.join(table.colnames)}. Say which one it is with --column {ours}=NAME.",
                column=ours,
                found=table.colnames,
                path=path,
            )
    return names


def _texts(column: Any) -> np.ndarray:
    plain = np.ma.asarray(column)
    if plain.dtype.kind == "U":
        return np.char.strip(np.ma.filled(plain, ""))
    masked = np.ma.getmaskarray(plain)
    out = []
    for value, gone in zip(np.ma.asarray(column).data.tolist(), masked.tolist(), strict=True):
        text = value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)
        out.append("" if gone else text.strip())
    return np.array(out, dtype=str)


def _numbers(column: Any, ours: str, units: Mapping[str, str], where: str, path: Path | None) -> np.ndarray:
    """Values in our unit; masked ones nan."""
    from astropy import units as u

    plain = np.ma.asarray(getattr(column, "value", column))
    try:
        values = np.where(np.ma.getmaskarray(plain), np.nan, np.ma.filled(plain.astype(float), np.nan))
    except (TypeError, ValueError) as error:
        raise ColumnError(
            f"{where}column '{column.info.name}' holds text where numbers belong.", column=ours, path=path
        ) from error
    wanted = UNITS.get(ours) or KNOWN_UNITS.get(ours)
    if wanted is None:
        return values
    unit = column.unit if column.unit is not None else units.get(ours)
    if unit is None:
        raise UnitError(
            f"{where}which unit has column '{column.info.name}'? State it in the table, or say "
            f"--unit {ours}={wanted} if that is what it is.",
            column=ours,
            expected=wanted,
            path=path,
        )
    try:
        return (values * u.Unit(unit)).to_value(wanted)
    except (u.UnitConversionError, ValueError, TypeError) as error:
        raise UnitError(
            f"{where}column '{column.info.name}' is in '{unit}', which cannot be turned into {wanted}.",
            column=ours,
            unit=str(unit),
            expected=wanted,
            path=path,
        ) from error


def _ions(found: np.ndarray, ions: Mapping[str, str], where: str, path: Path | None) -> np.ndarray:
    spelled, inverse = np.unique(found, return_inverse=True)
    mapped = np.array([ions.get(value, value) for value in spelled.tolist()], dtype=str)[inverse]
    if not np.isin(mapped, IONS).any():
        spellings = ", ".join(f"'{value}'" for value in sorted(set(found.tolist()))[:6])
        first = sorted(set(found.tolist()))[0]
        raise LineError(
            f"{where}no line is 'Fe I' or 'Fe II'; the ion column holds {spellings}. Say what they mean, for example "
            f"--ion '{first}=Fe I'.",
            ion=first,
            path=path,
        )
    return mapped


def _flags(column: Any, where: str, path: Path | None) -> np.ndarray:
    """A `use` column: booleans, 0/1 or words."""
    masked = np.ma.getmaskarray(np.ma.asarray(column))
    out = np.ones(len(column), dtype=bool)
    for row, text in enumerate(_texts(column).tolist()):
        word = text.lower().removesuffix(".0")
        if masked[row] or word in FALSE_WORDS:
            out[row] = False
        elif word not in TRUE_WORDS:
            raise ColumnError(
                f"{where}row {row + 1}: use = '{text}' is neither true nor false.", column="use", path=path, row=row
            )
    return out


def _check_wavelengths(wavelength: np.ndarray, where: str, path: Path | None) -> None:
    low, high = PLAUSIBLE_WAVELENGTH
    bad = np.flatnonzero(~((wavelength >= low) & (wavelength <= high)))
    if bad.size:
        row = int(bad[0])
        raise LineError(
            f"{where}row {row + 1}: wavelength_air = {wavelength[row]:g} Angstrom is outside {low:g} to {high:g} "
            f"({bad.size} such rows): wrong unit or column?",
            wavelength_air=float(wavelength[row]),
            path=path,
            row=row,
        )


def _check_widths(width: np.ndarray, where: str, path: Path | None) -> None:
    """All widths unusable is an error of the table; single ones are left out later, with their reason."""
    usable = np.isfinite(width) & (width > 0.0) & (width <= HUGE_WIDTH_MA)
    if not usable.any():
        raise InputError(
            f"{where}no usable equivalent width: all are missing, not positive, or above {HUGE_WIDTH_MA:g} mA.",
            path=path,
        )
    median = float(np.median(width[usable]))
    if median < SMALLEST_MEDIAN_MA:
        raise UnitError(
            f"{where}the median equivalent width is {median:.3g} mA: the column's unit is probably Angstrom, not mA.",
            column="equivalent_width",
            unit="mAngstrom",
            expected="Angstrom",
            path=path,
        )
