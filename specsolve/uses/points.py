"""True parameters to rehearse: planned targets or a theoretical sequence, read from a table."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.balance.relations import vmic_relation
from specsolve.balance.solution import PARAMETER_NAMES
from specsolve.errors import ColumnError, InputError, UsageError
from specsolve.lines.reading import read_table
from specsolve.schema import columns_of

from .plausible import PLAUSIBLE, numbers

if TYPE_CHECKING:
    from astropy.table import Table

REQUIRED = ("teff", "logg", "feh")
NO_VMIC = "no vmic is given, and no published relation holds there"


@dataclass(frozen=True, eq=False)
class Points:
    """True parameters.

    Attributes
    ----------
    names : tuple of str
    theta : ndarray, shape (n_points, 4)
        vmic is that of a published relation where the table gives none, nan where none holds.
    signal_to_noise : ndarray, shape (n_points,)
        nan where the table gives none.
    from_relation : int
        Number of points whose vmic comes from a relation.
    path : Path or None
    """

    names: tuple[str, ...]
    theta: np.ndarray
    signal_to_noise: np.ndarray
    from_relation: int = 0
    path: Path | None = None


def read_points(source: str | Path | Table, columns: Mapping[str, str] | None = None) -> Points:
    """Read points from a table with teff, logg, feh and, optionally, vmic, point, signal_to_noise.

    Numbers without a unit are taken to be in K, dex and km/s.

    Raises
    ------
    InputError, ColumnError, UnitError
    """

    path = None if hasattr(source, "colnames") else Path(source)
    table = read_table(path) if path is not None else source
    where = f"{path}: " if path is not None else ""
    columns = dict(columns or {})
    known = {column.name: column for column in columns_of("points")}
    for name in columns:
        if name not in known:
            raise UsageError(f"--column {name}: a table of points can have {', '.join(known)}")
    names = {name: columns.get(name, name) for name in known}
    for name in REQUIRED:
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

    def values_of(name: str) -> np.ndarray:
        if names[name] not in table.colnames:
            return np.full(len(table), np.nan)
        return numbers(table[names[name]], name, known[name].unit, where, path)

    theta = np.column_stack([values_of(name) for name in PARAMETER_NAMES])
    for k, name in enumerate(PARAMETER_NAMES):
        low, high = PLAUSIBLE[name]
        bad = np.flatnonzero(~((theta[:, k] >= low) & (theta[:, k] <= high)))
        if name == "vmic":
            bad = bad[np.isfinite(theta[bad, k])]
        if bad.size:
            raise InputError(
                f"{where}row {bad[0] + 1}: {name} = {theta[bad[0], k]:g} is not between {low:g} and {high:g}: wrong unit or "
                "column?",
                path=path,
                row=int(bad[0]),
            )
    missing = np.flatnonzero(~np.isfinite(theta[:, 3]))
    for i in missing:
        relation = vmic_relation(theta[i, 0], theta[i, 1])
        theta[i, 3] = relation.vmic if relation is not None else np.nan
    labels = [str(value) for value in table[names["point"]]] if names["point"] in table.colnames else []
    labels = labels or [f"point {i + 1}" for i in range(len(table))]
    doubled = next((label for label in labels if labels.count(label) > 1), None) if len(labels) < 5000 else None
    if doubled is not None:
        raise InputError(f"{where}the point '{doubled}' is there twice", path=path)
    filled = int(np.isfinite(theta[missing, 3]).sum())
    return Points(tuple(labels), theta, values_of("signal_to_noise"), filled, path)
