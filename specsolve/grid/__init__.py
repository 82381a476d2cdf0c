"""Response grids: equivalent widths over stellar parameters, one line list at a time; their store, making and interpolation."""

from specsolve.grid.interpolate import (
    AT_EDGE,
    BESIDE_MISSING,
    MISSING_WIDTHS,
    OUTSIDE_TABLE,
    Interpolator,
    LineAbundances,
)
from specsolve.grid.store import ResponseGrid

__all__ = [
    "AT_EDGE",
    "BESIDE_MISSING",
    "MISSING_WIDTHS",
    "OUTSIDE_TABLE",
    "Interpolator",
    "LineAbundances",
    "ResponseGrid",
]
