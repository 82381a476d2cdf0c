"""A user's own sequence in the Kiel diagram, and how far stars lie from it."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.errors import ColumnError, InputError, UnitError
from specsolve.lines.reading import read_table

if TYPE_CHECKING:
    from astropy.table import Table

COLUMNS = ("teff", "logg")
SHARED_BY = 3  # a column whose values are shared by so many rows on average labels a curve


@dataclass(frozen=True, eq=False)
class Curve:
    """One curve of a sequence.

    Attributes
    ----------
    labels : str
        Such as "age 2.5, feh -0.1".
    teff, logg : ndarray, shape (n_points,)
    """

    labels: str
    teff: np.ndarray
    logg: np.ndarray


def read_sequence(source: str | Path | Table) -> tuple[Curve, ...]:
    """Curves of a table with teff, logg and labels, in the order of the rows.

    Columns beside teff and logg of which each value holds for three rows or more label the curves; others are left alone.

    Raises
    ------
    InputError, ColumnError, UnitError
    """
    from astropy import units as u

    path = None if hasattr(source, "colnames") else Path(source)
    table = read_table(path) if path is not None else source
    where = f"{path}: " if path is not None else ""
    for name in COLUMNS:
        if name not in table.colnames:
            raise ColumnError(
                f"{where}a sequence needs columns teff and logg; the table has {', '.join(table.colnames)}",
                column=name,
                found=table.colnames,
                path=path,
            )
    if len(table) < 2:
        raise InputError(f"{where}a sequence needs two points or more", path=path)
    unit = getattr(table["teff"], "unit", None)
    values = {name: np.ma.filled(np.ma.asarray(table[name]).astype(float), np.nan) for name in COLUMNS}
    if unit is not None:
        try:
            values["teff"] = (values["teff"] * u.Unit(unit)).to_value("K")
        except (u.UnitConversionError, ValueError) as error:
            raise UnitError(
                f"{where}column 'teff' is in '{unit}', which cannot be turned into K",
                column="teff",
                unit=str(unit),
                expected="K",
            ) from error
    if not all(np.isfinite(one).all() for one in values.values()):
        raise InputError(f"{where}a point of the sequence has no teff or logg", path=path)
    labels = [
        name
        for name in table.colnames
        if name not in COLUMNS and len(np.unique(np.asarray(table[name]).astype(str))) * SHARED_BY <= len(table)
    ]
    texts = [", ".join(f"{name} {row[name]}" for name in labels) for row in table]
    curves = []
    for text in dict.fromkeys(texts):
        rows = [i for i, own in enumerate(texts) if own == text]
        curves.append(Curve(text, values["teff"][rows], values["logg"][rows]))
    return tuple(curves)


def distance(theta: np.ndarray, covariance: np.ndarray, curves: tuple[Curve, ...]) -> tuple[float, str]:
    """Distance of (teff, logg) from the nearest curve, in the metric of their covariance, and the labels of that curve.

    Parameters
    ----------
    theta : ndarray, shape (4,)
    covariance : ndarray, shape (4, 4)
    curves : tuple of Curve
    """
    block = covariance[:2, :2]
    if not np.isfinite(block).all() or np.any(np.diag(block) <= 0.0):
        return float("nan"), ""
    inverse = np.linalg.inv(np.linalg.cholesky(block))
    best, labels = np.inf, ""
    for curve in curves:
        points = (np.column_stack([curve.teff, curve.logg]) - theta[:2]) @ inverse.T
        found = nearest_on_polyline(points)
        if found < best:
            best, labels = found, curve.labels
    return float(best), labels


def nearest_on_polyline(points: np.ndarray) -> float:
    """Distance of the origin from a line through points, shape (n, 2).

    Examples
    --------
    >>> nearest_on_polyline(np.array([[-1.0, 2.0], [1.0, 2.0]]))
    2.0
    """
    if len(points) == 1:
        return float(np.hypot(*points[0]))
    start, step = points[:-1], np.diff(points, axis=0)
    length = np.maximum(np.sum(step**2, axis=1), 1e-300)
    along = np.clip(-np.sum(start * step, axis=1) / length, 0.0, 1.0)
    return float(np.min(np.hypot(*(start + along[:, None] * step).T)))
