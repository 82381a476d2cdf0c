"""Own small reader of tables with a spectrum: FITS tables, ECSV, plain text of two or three columns.

It takes what specutils leaves: flux without a unit (normalised), columns of orders and masks, vectors in cells, text.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.errors import SpectrumError

from .raw import AIR, LOG_UNIT, VACUUM, Raw, RawPiece

if TYPE_CHECKING:
    from astropy.table import Table

ROLES = {
    "wavelength": (
        "wavelength",
        "wavelength_air",
        "wavelength_vacuum",
        "wavelength_vac",
        "wave",
        "lambda",
        "lam",
        "wl",
        "awav",
        "loglam",
        "log_wavelength",
    ),
    "flux": ("flux", "normalised_flux", "normalized_flux", "norm_flux", "flux_norm", "intensity", "fluxes"),
    "sigma": ("sigma", "uncertainty", "error", "err", "flux_error", "flux_err", "e_flux", "errors", "ivar"),
    "mask": ("mask", "bad", "bad_pixel"),
    "order": ("order", "orders", "order_number"),
}
"""Headings understood, in lower case; others are named by the user."""
AIR_NAMES, VACUUM_NAMES = {"wavelength_air", "awav"}, {"wavelength_vacuum", "wavelength_vac"}
LOG_NAMES = {"loglam", "log_wavelength"}


def columns_of(table: Table, said: Mapping[str, str], path: str | Path) -> dict[str, str]:
    """Role to heading, for the roles that a table has.

    Raises
    ------
    SpectrumError
        If a column that the user named is not there.
    """
    lower = {name.lower(): name for name in reversed(table.colnames)}
    found = {}
    for role, names in ROLES.items():
        if role in said:
            if said[role] not in table.colnames:
                raise SpectrumError(
                    f"{path}: no column '{said[role]}' for {role}; the table has {', '.join(table.colnames)}.",
                    path=path,
                )
            found[role] = said[role]
            continue
        name = next((lower[name] for name in names if name in lower), None)
        if name is not None:
            found[role] = name
    return found


def table_to_raw(table: Table, said: Mapping[str, str], path: str | Path) -> Raw:
    """Columns of a table as a `Raw`; a cell may hold a whole order."""
    if len(table) == 0:
        raise SpectrumError(f"{path}: the table has no rows.", path=path)
    names = columns_of(table, said, path)
    for role in ("wavelength", "flux"):
        if role not in names:
            raise SpectrumError(
                f"{path}: no column for the {role}; the table has {', '.join(table.colnames)}. Say which one it is "
                f"with --column {role}=NAME.",
                path=path,
            )
    heading = names["wavelength"].lower()
    unit = table[names["wavelength"]].unit
    unit = LOG_UNIT if heading in LOG_NAMES and unit is None else None if unit is None else str(unit)
    medium = AIR if heading in AIR_NAMES else VACUUM if heading in VACUUM_NAMES else medium_of(table.meta)
    values = {role: _plain(table[name], role, path) for role, name in names.items()}
    if "sigma" in names and names["sigma"].lower() == "ivar":
        with np.errstate(divide="ignore", invalid="ignore"):
            values["sigma"] = 1.0 / np.sqrt(values["sigma"])
    shape = values["flux"].shape
    if values["wavelength"].shape != shape:
        raise SpectrumError(f"{path}: wavelength and flux differ in shape.", path=path)
    for role in ("sigma", "mask"):
        if role in values and values[role].shape != shape:
            del values[role]
    if len(shape) > 2:
        raise SpectrumError(f"{path}: cells of {len(shape) - 1} dimensions; one row an order is read.", path=path)
    rows = list(range(shape[0])) if len(shape) == 2 else _rows_by_order(values, shape[0])
    pieces = [
        RawPiece(
            wavelength=values["wavelength"][row],
            flux=values["flux"][row],
            sigma=values["sigma"][row] if "sigma" in values else None,
            mask=values["mask"][row].astype(bool) if "mask" in values else None,
        )
        for row in rows
    ]
    return Raw(pieces=pieces, unit=unit, medium=medium, header=plain_header(table.meta))


def read_text(path: Path) -> Table:
    """Plain text of two or three columns: wavelength, flux, error; a heading and # comments may come first."""
    from astropy.table import Table

    try:
        text = path.read_text(encoding="utf-8", errors="replace")
    except OSError as error:
        raise SpectrumError(f"{path}: cannot be read ({error.strerror or error}).", path=path) from error
    lines = [line.strip() for line in text.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    rows, heading = [], []
    for number, line in enumerate(lines):
        words = line.replace(",", " ").replace(";", " ").split()
        try:
            rows.append([float(word) for word in words])
        except ValueError as error:
            if number == 0:
                heading = words
                continue
            raise SpectrumError(f"{path}: not a spectrum: '{line[:40]}' is not a row of numbers.", path=path) from error
    if not rows:
        raise SpectrumError(f"{path}: no rows of numbers in it.", path=path)
    n_columns = len(rows[0])
    uneven = next((i for i, row in enumerate(rows) if len(row) != n_columns), None)
    if uneven is not None:
        raise SpectrumError(
            f"{path}: row {uneven + 1} has {len(rows[uneven])} numbers, the first has {n_columns}.", path=path
        )
    if len(heading) != n_columns:
        if n_columns not in (2, 3):
            raise SpectrumError(
                f"{path}: {n_columns} columns without headings; two or three are understood (wavelength, flux, error).",
                path=path,
            )
        heading = ["wavelength", "flux", "sigma"][:n_columns]
    return Table(rows=np.array(rows), names=heading)


def medium_of(header: Mapping[str, Any]) -> str | None:
    """Air or vacuum as a header tells it; `None` if it does not.

    CTYPE of the FITS standard (AWAV air, WAVE vacuum; Greisen et al. 2006, A&A 446, 747, table 1) and the common
    keywords AIRORVAC and VACUUM.

    Examples
    --------
    >>> medium_of({"CTYPE1": "AWAV-LOG"}), medium_of({"AIRORVAC": "vac"}), medium_of({})
    ('air', 'vacuum', None)
    """
    upper = {str(key).upper(): value for key, value in header.items()}
    for key in ("AIRORVAC", "MEDIUM", "WAVEMED"):
        word = str(upper.get(key, "")).strip().lower()
        if word.startswith("air"):
            return AIR
        if word.startswith("vac"):
            return VACUUM
    if isinstance(upper.get("VACUUM"), (bool, int)):
        return VACUUM if upper["VACUUM"] else AIR
    for key in ("CTYPE1", "CTYPE"):
        word = str(upper.get(key, "")).strip().upper()
        if word == "AWAV" or word.startswith("AWAV-"):
            return AIR
        if word == "WAVE" or word.startswith("WAVE-"):
            return VACUUM
    return None


def plain_header(header: Mapping[str, Any]) -> dict[str, Any]:
    """The entries of a header that are plain values; long texts are left out."""
    found = {}
    for key, value in header.items():
        if str(key) in ("", "COMMENT", "HISTORY"):
            continue
        if isinstance(value, (bool, int, float)) or (isinstance(value, str) and len(value) <= 200):
            found[str(key)] = value
    return found


def _plain(column: Any, role: str, path: str | Path) -> np.ndarray:
    plain = np.ma.asarray(getattr(column, "value", column))
    try:
        values = np.ma.filled(plain.astype(float), 1.0 if role == "mask" else np.nan)
    except (TypeError, ValueError) as error:
        raise SpectrumError(f"{path}: column '{column.name}' for {role} is not numeric.", path=path) from error
    return np.asarray(values, float)


def _rows_by_order(values: dict[str, np.ndarray], n_rows: int) -> list[np.ndarray]:
    if "order" not in values:
        return [np.arange(n_rows)]
    return [np.flatnonzero(values["order"] == number) for number in np.unique(values["order"])]
