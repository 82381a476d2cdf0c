"""Parameters as other people's tables hold them: numbers in the right unit, within what can be meant."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from specsolve.errors import ColumnError, UnitError

# What a value in the right unit can be; beyond it the column holds another unit or another quantity.
PLAUSIBLE = {"teff": (1000.0, 60000.0), "logg": (-2.0, 9.0), "feh": (-8.0, 2.0), "vmic": (0.0, 20.0)}


def numbers(column: Any, ours: str, unit: str, where: str, path: Path | None) -> np.ndarray:
    """Values of a column in `unit`; nan where masked; a column without unit is taken to be in it.

    Raises
    ------
    ColumnError, UnitError
    """
    from astropy import units as u

    plain = np.ma.asarray(getattr(column, "value", column))
    try:
        values = np.ma.filled(plain.astype(float), np.nan)
    except (TypeError, ValueError) as error:
        raise ColumnError(
            f"{where}column '{column.info.name}' holds text where numbers belong", column=ours, path=path
        ) from error
    if getattr(column, "unit", None) is None or unit in ("", "dex"):
        return values
    try:
        return (values * u.Unit(column.unit)).to_value(unit)
    except (u.UnitConversionError, ValueError, TypeError) as error:
        raise UnitError(
            f"{where}column '{column.info.name}' is in '{column.unit}', which cannot be turned into {unit}",
            column=ours,
            unit=str(column.unit),
            expected=unit,
            path=path,
        ) from error
