"""Read line lists, or the line part of a table of stars, into a `LineList`; write them back."""

from __future__ import annotations

import warnings
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import ColumnError, InputError, LineError, UnitError
from .identify import identify
from .line_list import FLAG_CONFLICTING_LOG_GF, INTEGER, TEXT, LineList

if TYPE_CHECKING:
    from astropy.table import Table

REQUIRED = ("wavelength_air", "ion", "excitation_potential", "log_gf")
UNITS = {"wavelength_air": "Angstrom", "excitation_potential": "eV"}
DIMENSIONLESS = ("log_gf", "log_gf_error", "log_gf_alternative", "broadening_alpha")
BARE = ("broadening_sigma", "log_gamma_rad", "log_gamma_stark")
IONS = ("Fe I", "Fe II")
WAVELENGTH_LIMITS = (3500.0, 10000.0)  # Angstrom, range of the packaged transition table
ENERGY_LIMITS = (0.0, 14.0)  # eV; beyond the highest lower levels of the table
LOG_GF_LIMITS = (-12.0, 2.5)  # dex; wider than any published iron line
CONFLICT_DEX = 0.005
"""Repeats whose log gf differ by more than the rounding of two published decimals conflict [dex]."""

SPOILED = {"spoiled_sun": "Sun", "spoiled_k_dwarf": "K dwarf", "spoiled_cool_giant": "cool giant"}
"""Columns of the default list about what spoils a line; together they make its note."""

DEFAULT_NAME = "iron_default.ecsv"
FORMATS = {
    ".ecsv": "ascii.ecsv",
    ".csv": "ascii.csv",
    ".fits": "fits",
    ".fit": "fits",
    ".vot": "votable",
    ".xml": "votable",
}


def default_line_list() -> LineList:
    """The packaged list of graded Fe I and Fe II lines, in canonical order.

    Examples
    --------
    >>> 150 < len(default_line_list()) <= 210
    True
    """
    with resources.as_file(resources.files("specsolve") / "data" / "lines" / DEFAULT_NAME) as path:
        return read_line_list(path)


def read_line_list(
    source: str | Path | Table, *, columns: dict[str, str] | None = None, ions: dict[str, str] | None = None
) -> LineList:
    """Read a line list, or the distinct lines of a table of stars.

    Parameters
    ----------
    source : path or `~astropy.table.Table`
        ECSV, CSV, FITS or VOTable with the columns ``wavelength_air``, ``ion``, ``excitation_potential`` and
        ``log_gf``; further properties of `LineList` are read where present.
    columns : dict, optional
        Our column name to the name that the table has.
    ions : dict, optional
        A spelling in the table to our ion name, such as ``{"FeI": "Fe I"}``.

    Returns
    -------
    LineList
        Identified, repeats merged, in canonical order; `remarks` say what was merged or conflicts.

    Raises
    ------
    ColumnError, UnitError, LineError, InputError

    Examples
    --------
    >>> lines = read_line_list("my_lines.ecsv")  # doctest: +SKIP
    """
    path = None if hasattr(source, "colnames") else Path(source)
    table = source if path is None else read_table(path)
    return line_list_from_table(table, columns=columns, ions=ions, path=path)


def read_table(path: Path) -> Table:
    """One astropy table of a file; the suffix tells the format."""
    from astropy.table import Table

    file_format = FORMATS.get(path.suffix.lower())
    if file_format is None:
        raise InputError(f"{path}: unknown suffix '{path.suffix}'; use one of {', '.join(FORMATS)}.", path=path)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # readers comment on units of old standards
            return Table.read(path, format=file_format)
    except FileNotFoundError as error:
        raise InputError(f"{path}: no such file.", path=path) from error
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error}).", path=path) from error
    except Exception as error:  # readers of four formats raise whatever they meet in a damaged file
        first = (str(error).splitlines() or [type(error).__name__])[0]
        raise InputError(f"{path}: not a readable {file_format} table ({first}).", path=path) from error


def line_list_from_table(
    table: Table,
    *,
    columns: dict[str, str] | None = None,
    ions: dict[str, str] | None = None,
    path: str | Path | None = None,
) -> LineList:
    """As `read_line_list`, from a table in memory."""
    names = dict(columns or {})
    where = f"{path}: " if path is not None else ""
    for name in REQUIRED:
        theirs = names.get(name, name)
        if theirs not in table.colnames:
            raise ColumnError(
                f"{where}no column '{theirs}' for {name}; the table has {', '.join(table.colnames)}.",
                column=name,
                found=table.colnames,
                path=path,
            )
    if len(table) == 0:
        raise InputError(f"{where}the table has no lines.", path=path)
    given: dict[str, Any] = {}
    for name in LineList.__dataclass_fields__:
        theirs = names.get(name, name)
        if name in ("remarks", "transition", "flags") or theirs not in table.colnames:
            continue
        given[name] = _column(table[theirs], name, where, path)
    if "note" not in given and all(name in table.colnames for name in SPOILED):
        told = [_column(table[name], "note", where, path).tolist() for name in SPOILED]
        given["note"] = np.array(
            [
                "; ".join(f"{SPOILED[name]}: {words}" for name, words in zip(SPOILED, line, strict=True) if words)
                for line in zip(*told, strict=True)
            ],
            str,
        )
    given["ion"] = np.array([(ions or {}).get(value, value) for value in given["ion"].tolist()], str)
    _check(given, where, path)
    required = [given.pop(name) for name in REQUIRED]
    return merge_repeats(identify(LineList.from_arrays(*required, **given)))


def _column(column, name: str, where: str, path) -> np.ndarray:
    """Values of a column in our unit; masked numbers become nan, masked texts empty."""
    masked = np.ma.getmaskarray(np.ma.asarray(column))
    if name in TEXT:
        return np.array(["" if m else str(v).strip() for v, m in zip(column, masked, strict=True)], str)
    try:
        plain = np.ma.asarray(column)
        values = np.array(plain.filled(0) if masked.any() else plain, float)
    except (TypeError, ValueError) as error:
        raise ColumnError(f"{where}column '{column.name}' is not numeric.", column=name, path=path) from error
    if name in UNITS:
        if column.unit is None:
            raise UnitError(
                f"{where}column '{column.name}' has no unit; state it ({UNITS[name]}?) in the table.",
                column=name,
                expected=UNITS[name],
                path=path,
            )
        from astropy import units

        try:
            values = (values * units.Unit(column.unit)).to_value(UNITS[name])
        except units.UnitConversionError as error:
            raise UnitError(
                f"{where}column '{column.name}' is in {column.unit}, which is not a unit like {UNITS[name]}.",
                column=name,
                unit=str(column.unit),
                expected=UNITS[name],
                path=path,
            ) from error
    if name in INTEGER:
        return np.where(masked, 0, values).astype(INTEGER[name])
    return np.where(masked, np.nan, values)


def _check(given: dict[str, np.ndarray], where: str, path) -> None:
    """Raise at the first line that cannot be used."""
    limits = {"wavelength_air": WAVELENGTH_LIMITS, "excitation_potential": ENERGY_LIMITS, "log_gf": LOG_GF_LIMITS}
    for name, (low, high) in limits.items():
        values = given[name]
        bad = np.flatnonzero(~((values >= low) & (values <= high)))
        if bad.size:
            row = int(bad[0])
            raise LineError(
                f"{where}row {row + 1}: {name} = {values[row]:g} is outside {low:g} to {high:g}"
                f" ({bad.size} such rows).",
                wavelength_air=float(given["wavelength_air"][row]),
                ion=str(given["ion"][row]),
                path=path,
                row=row,
            )
    for row, ion in enumerate(given["ion"].tolist()):
        if ion not in IONS:
            raise LineError(
                f'{where}row {row + 1}: ion \'{ion}\' is not one of {", ".join(IONS)}; map it, e.g. "{ion}" to "Fe I".',
                wavelength_air=float(given["wavelength_air"][row]),
                ion=ion,
                path=path,
                row=row,
            )


def merge_repeats(lines: LineList) -> LineList:
    """One entry per transition, in canonical order; the first value given stands, conflicts are flagged and told.

    Examples
    --------
    >>> twice = LineList.from_arrays([6301.5, 6301.5], "Fe I", 3.654, [-0.72, -0.60])
    >>> merged = merge_repeats(twice)
    >>> len(merged), len(merged.remarks)
    (1, 1)
    """
    keys, first, inverse = np.unique(lines.key, return_index=True, return_inverse=True)
    remarks = list(lines.remarks)
    flags = lines.flags.copy()
    if keys.size < len(lines):
        low, high = np.full(keys.size, np.inf), np.full(keys.size, -np.inf)
        np.minimum.at(low, inverse, lines.log_gf)
        np.maximum.at(high, inverse, lines.log_gf)
        for k in np.flatnonzero(high - low > CONFLICT_DEX):
            kept = lines.log_gf[first[k]]
            flags[first[k]] |= FLAG_CONFLICTING_LOG_GF
            remarks.append(f"{keys[k]}: log gf from {low[k]:.3f} to {high[k]:.3f}; {kept:.3f} is used")
    merged = lines.with_columns(flags=flags, remarks=tuple(remarks)).select(first)
    return merged.sorted()


def table_from_line_list(lines: LineList):
    """`~astropy.table.QTable` of a line list with units; reading it gives the list back."""
    from astropy import units
    from astropy.table import Column, QTable

    table = QTable()
    for name in LineList.__dataclass_fields__:
        if name in ("remarks", "transition", "flags"):
            continue
        values = getattr(lines, name)
        if name in UNITS:
            table[name] = values * units.Unit(UNITS[name])
        else:
            table[name] = Column(values)
    table.meta["remarks"] = list(lines.remarks)
    return table
