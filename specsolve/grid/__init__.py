"""Response grids: equivalent widths of one line list over stellar parameters; store, making, interpolation."""

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
