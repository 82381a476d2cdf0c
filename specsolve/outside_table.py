"""Read a table of what is known of stars from elsewhere: one row a star, columns as `specsolve columns outside` lists."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from specsolve.errors import ColumnError, InputError
from specsolve.lines.reading import read_table
from specsolve.star_table import KNOWN, known_values

ALL_STARS = ("", "*")


def read_outside(path: str | Path) -> dict[str, dict[str, Any]]:
    """What a table says of each star.

    Parameters
    ----------
    path : path-like
        ECSV, CSV, FITS or VOTable with a column ``star`` and any of the others; ECSV may hold ``prior_covariance``.

    Returns
    -------
    dict
        Name of the star to its values by name (`specsolve.balance.outside_known`); under "" what holds for all stars.

    Raises
    ------
    InputError, ColumnError, UnitError

    Examples
    --------
    >>> read_outside("known.ecsv")                                             # doctest: +SKIP
    {'': {'reddening': 0.02, 'reddening_error': 0.01}, 'A 12': {'fix_logg': 2.41}}
    """
    path = Path(path)
    table = read_table(path)
    if "star" not in table.colnames:
        raise ColumnError(f"{path}: no column 'star'; it says whom each row is about.", column="star", path=path)
    strange = [name for name in table.colnames if name not in KNOWN and name != "star"]
    if strange:
        raise ColumnError(
            f"{path}: column '{strange[0]}' is not one that is read; see specsolve columns outside.",
            column=strange[0],
            path=path,
        )
    names = [str(name).strip() for name in np.ma.filled(np.ma.asarray(table["star"]).astype(str), "")]
    names = ["" if name in ALL_STARS else name for name in names]
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise InputError(f"{path}: the star '{twice[0]}' has more than one row.", path=path)
    values = {name: known_values(table[name], name, {}, f"{path}: ", path) for name in table.colnames if name != "star"}
    found: dict[str, dict[str, Any]] = {}
    for row, star in enumerate(names):
        found[star] = {
            name: column[row].tolist()
            for name, column in values.items()
            if (column[row] != "" if column.dtype.kind == "U" else np.isfinite(column[row]).any())
        }
    return found
